"""The transforms of ``after`` on panels with and without history."""

import numpy as np
import pytest
from scipy import stats

from sercheck.grid import Axis, Panel
from sercheck.rulebook.compiled import Transform
from sercheck.transforms import apply, detrend, ranks, reach


def panel_of(values, start=0, season=24):
    """A panel of hourly steps with one season 'day' and day groups."""
    values = np.atleast_2d(np.asarray(values, dtype=float))
    steps = np.arange(values.shape[1])
    axis = Axis(
        stamps=steps * 3_600_000_000_000,
        index=steps,
        lengths={"day": season},
        phases={"day": steps % season},
        closed=np.zeros(len(steps), dtype=bool),
        expected=np.ones(len(steps), dtype=bool),
        groups={"1D": steps // 24},
    )
    return Panel(values, start, axis, ~np.isnan(values), "kwh")


def test_difference_without_history_shortens_the_window():
    """Without rows before the window the first differences do not exist and are not counted as missing."""
    changed = apply([Transform("difference")], panel_of([1.0, 4.0, 9.0, 16.0]))
    assert changed.window.tolist() == [[3.0, 5.0, 7.0]]
    assert changed.axis.index.tolist() == [1, 2, 3]


def test_difference_reaches_into_history():
    """With rows before the window it keeps its length."""
    changed = apply([Transform("difference", 2)], panel_of([1.0, 4.0, 9.0, 16.0, 25.0], start=3))
    assert changed.window.tolist() == [[12.0, 16.0]]
    assert changed.history.tolist() == [[8.0]]


def test_difference_by_season_name_and_chain():
    """A difference names a season, transforms go in order, and missing values stay where they are."""
    x = np.arange(60.0) ** 2
    x[30] = np.nan
    changed = apply([Transform("difference", "day"), Transform("difference")], panel_of(x))
    expected = np.diff(x[24:] - x[:-24])
    np.testing.assert_array_equal(changed.window[0], expected)


def test_difference_longer_than_the_panel_is_told():
    """A lag that no two rows span leaves everything undecided with the reason."""
    changed = apply([Transform("difference", 9)], panel_of([1.0, 2.0, 3.0]))
    assert np.isnan(changed.values).all()
    assert "9 steps" in changed.unable


def test_log_counts_what_has_no_logarithm():
    """Values that are not positive become missing and are told, not dropped in silence."""
    changed = apply([Transform("log")], panel_of([1.0, 0.0, -2.0, np.e, np.nan]))
    np.testing.assert_allclose(changed.window[0], [0.0, np.nan, np.nan, 1.0, np.nan])
    assert changed.notes[0].startswith("2 values of kwh")


def test_detrended_equals_least_squares():
    """The line is that of least squares on the observed values (scipy.stats.linregress)."""
    rng = np.random.default_rng(1)
    x = 3 + 0.5 * np.arange(50) + rng.normal(size=50)
    x[[4, 20, 21]] = np.nan
    seen = ~np.isnan(x)
    line = stats.linregress(np.arange(50)[seen], x[seen])
    np.testing.assert_allclose(detrend(x[None])[0], x - line.intercept - line.slope * np.arange(50), atol=1e-12)


def test_detrended_history_goes_in_stretches_of_the_windows_length():
    """History is detrended like the window is, so that both scatter alike."""
    x = np.concatenate([np.arange(10.0), 50 - np.arange(10.0), np.arange(10.0)])
    changed = apply([Transform("detrended")], panel_of(x, start=20))
    np.testing.assert_allclose(changed.values, 0.0, atol=1e-12)


def test_ranks_equal_those_of_scipy():
    """Mid-ranks agree with scipy.stats.rankdata and leave missing values out."""
    x = np.array([[3.0, 1.0, np.nan, 3.0, 2.0, 3.0, 1.0], [np.nan] * 7])
    result = ranks(x)
    seen = ~np.isnan(x[0])
    np.testing.assert_array_equal(result[0][seen], stats.rankdata(x[0][seen]))
    assert np.isnan(result[0][2])
    assert np.isnan(result[1]).all()


def test_without_season_takes_historys_phase_means():
    """With four cycles of history its phase means are taken out of the window."""
    day = np.sin(np.arange(24))
    changed = apply([Transform("without_season", "day")], panel_of(np.tile(day, 6) + 5, start=120))
    np.testing.assert_allclose(changed.values, 0.0, atol=1e-12)


def test_without_season_falls_back_on_the_window_or_is_undecided():
    """Without history the window's own means need four cycles; less is told."""
    day = np.sin(np.arange(24))
    np.testing.assert_allclose(
        apply([Transform("without_season", "day")], panel_of(np.tile(day, 4))).window, 0.0, atol=1e-12
    )
    assert "4 cycles" in apply([Transform("without_season", "day")], panel_of(np.tile(day, 3))).unable


@pytest.mark.parametrize(
    ("take", "expected"), [("sum", [24.0, 48.0]), ("mean", [1.0, 2.0]), ("max", [1.0, 2.0]), ("count", [24.0, 24.0])]
)
def test_every_gathers_steps(take, expected):
    """Steps are gathered by local day."""
    changed = apply([Transform("every", "1D", take)], panel_of(np.repeat([1.0, 2.0], 24)))
    assert changed.window.tolist() == [expected]


def test_every_leaves_out_part_groups_and_groups_with_gaps():
    """A day that is cut at the edge or misses an hour has no sum; its count says how many there were."""
    x = np.ones(60)
    x[30] = np.nan
    sums = apply([Transform("every", "1D", "sum")], panel_of(x)).window[0]
    np.testing.assert_array_equal(sums, [24.0, np.nan, np.nan])
    assert apply([Transform("every", "1D", "count")], panel_of(x)).window[0][1] == 23


def test_reach_adds_the_differences():
    """The chain needs as many steps before the window as its differences span."""
    assert reach([Transform("difference"), Transform("log"), Transform("difference", "day")], {"day": 24}) == 25
