"""The share of expected stamps that are there."""

from dataclasses import replace

import numpy as np
import pytest
from clusters import markov
from panels import clock_of, panel_of
from processes import agrees

from sercheck.measure import Question, Stays
from sercheck.measures.completeness import Completeness, Fields


def run(panel, stays, risk=0.01, irregular=False):
    """Run the measure beside a clock."""
    clock = clock_of(panel)
    clock = replace(clock, grid=replace(clock.grid, irregular=irregular))
    return Completeness().run(panel, Question(Fields(), stays, risk, {}, clock))


def half_due(panel):
    """The panel with every second step closed."""
    expected = np.arange(len(panel.axis)) % 2 == 0
    return replace(panel, axis=replace(panel.axis, expected=expected))


def test_delivered_over_due_stamps():
    """The share counts due stamps only; a row on a closed step adds nothing."""
    x = np.ones((2, 48))
    x[0, 24:30] = np.nan
    whole = run(panel_of(x, 24), Stays("above", low=0.8))
    np.testing.assert_array_equal(whole.observed[:, 0], [0.75, 1])
    np.testing.assert_array_equal(whole.lower.p_value("lower")[:, 0], [0, 1])
    np.testing.assert_array_equal(whole.n_missing[:, 0], [6, 0])
    half = run(half_due(panel_of(x, 24)), Stays("above", low=0.8))
    np.testing.assert_array_equal(half.observed[:, 0], [0.75, 1])
    np.testing.assert_array_equal(half.n[:, 0], [12, 12])


def test_above_one_means_all_of_them():
    """`above: 1` passes a whole window and fails one row less, `above: .75` fails at .75 itself."""
    x = np.ones((2, 48))
    x[1, 24] = np.nan
    seen = run(panel_of(x, 24), Stays("above", low=1.0))
    np.testing.assert_array_equal(seen.lower.p_value("lower")[:, 0], [1, 0])
    x[1, 24:30] = np.nan
    assert run(panel_of(x, 24), Stays("above", low=0.75)).lower.p_value("lower")[1, 0] == 0


@pytest.mark.parametrize("kind", ["irregular", "closed"])
def test_where_no_row_is_due_is_undecided(kind):
    """A feed without cadence, or a window that is closed, has no share."""
    panel = panel_of(np.ones((1, 48)), 24)
    if kind == "closed":
        panel = replace(panel, axis=replace(panel.axis, expected=np.arange(48) < 24))
    seen = run(panel, Stays("above", low=0.9), irregular=kind == "irregular")
    assert seen.undecided[0, 0] >= 0


def test_a_feed_that_always_loses_rows_keeps_the_risk():
    """Healthy losses in bursts of four fail no more than 1.6 times as often as asked, against history."""
    lost = markov(np.random.default_rng(1), 2500, 24 * 71, 0.05, 4)
    seen = run(panel_of(np.where(lost == 1, np.nan, 1.0), 24 * 70), Stays("like_history"))
    p = seen.lower.p_value("lower")[:, 0]
    assert np.mean(p <= 0.05) <= 0.08
    assert np.mean(p <= 0.01) <= 0.016
    agrees(seen)


def test_half_a_day_lost_is_found_against_history():
    """A feed that loses single rows at times and then every second row of a day fails."""
    lost = (np.random.default_rng(2).random((100, 24 * 71)) < 0.02).astype(float)
    lost[:, -24::2] = 1
    seen = run(panel_of(np.where(lost == 1, np.nan, 1.0), 24 * 70), Stays("like_history"))
    assert np.mean(seen.lower.p_value("lower") <= 0.001) >= 0.95


def test_without_history_there_is_no_usual_share():
    """Like history needs history."""
    seen = run(panel_of(np.ones((1, 24)), 0), Stays("like_history"))
    assert "no history" in seen.reasons[seen.undecided[0, 0]]
