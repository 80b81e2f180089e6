"""A batch that was held and then let in teaches level and profile, and nothing about memory, cycle and phase."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from processes import LIKE, autoregressive

from sercheck.baseline import remembered
from sercheck.grid import Axis, Panel
from sercheck.measure import Question
from sercheck.measures import get
from sercheck.rulebook.compiled import Transform
from sercheck.transforms import apply

HOUR = 3_600_000_000_000
WINDOW = 96
HELD = slice(6 * WINDOW, 8 * WINDOW)
"""Two of the 24 windows of history; too few windows for a comparison with the last batches."""


def panel_of(x: np.ndarray, *, marked: bool, seasons: tuple[int, ...] = ()) -> Panel:
    """Hourly series whose last window is judged."""
    steps = np.arange(x.shape[1])
    held = np.zeros(len(steps), dtype=bool)
    held[HELD] = marked
    lengths = {f"of {s}": s for s in seasons}
    axis = Axis(
        steps * HOUR, steps, lengths, {f"of {s}": steps % s for s in seasons}, np.zeros(len(steps), dtype=bool),
        np.ones(len(steps), dtype=bool), {"2D": steps // 48}, held,
    )  # fmt: skip
    return Panel(x, x.shape[1] - WINDOW, axis, ~np.isnan(x))


def history(seed: int = 5, series: int = 6) -> np.ndarray:
    """Autoregressive series: 24 windows of history and one that is judged."""
    return autoregressive(seed, series, 25 * WINDOW, 0.6)


def shuffled(x: np.ndarray, seed: int) -> np.ndarray:
    """The same values in the held windows in random order: level and distribution stay, memory is gone."""
    x = x.copy()
    x[:, HELD] = np.random.default_rng(seed).permuted(x[:, HELD], axis=1)
    return x


def told(name: str, panel: Panel, **fields: object) -> tuple[np.ndarray, ...]:
    """Limits of both sides, the observation and the significance."""
    measure = get(name)
    if name == "cross_correlation":
        panel = replace(panel, beside={"y": replace(panel, values=panel.values[::-1].copy(), shared={})})
    seen = measure.run(panel, Question(measure.Fields(**fields), LIKE, 0.01, dict(panel.axis.lengths)))
    sides = [(side, law) for side, law in (("upper", seen.upper), ("lower", seen.lower)) if law is not None]
    risk = np.full(seen.observed.shape, 0.01)
    return seen.observed, *(law.limit(side, risk) for side, law in sides), *(law.p_value(side) for side, law in sides)


MEMORY = [
    ("autocorrelation", {"lag": 1}),
    ("autocorrelation", {"lag": 30}),  # by history's windows
    ("partial_autocorrelation", {"lag": 2}),
    ("cross_correlation", {"with": "y", "lag": 1}),
    ("effective_size", {}),
    ("stationarity", {}),
    ("innovations", {"look": "whiteness"}),
]


@pytest.mark.parametrize(("name", "fields"), MEMORY)
def test_memory_is_learned_without_what_was_held(name, fields):
    """However the rows of held windows are ordered, the answer is the same to the bit; unmarked it is not."""
    one, other = shuffled(history(), 1), shuffled(history(), 2)
    for left, right in zip(
        told(name, panel_of(one, marked=True), **fields), told(name, panel_of(other, marked=True), **fields),
        strict=True,
    ):  # fmt: skip
        np.testing.assert_array_equal(left, right)
    pairs = zip(
        told(name, panel_of(one, marked=False), **fields), told(name, panel_of(history(), marked=False), **fields),
        strict=True,
    )  # fmt: skip
    assert any(not np.array_equal(left, right, equal_nan=True) for left, right in pairs)


@pytest.mark.parametrize("name", ["level", "spread", "quantile"])
def test_level_and_spread_learn_from_it(name):
    """A held batch that a person let in moves what is learned of the level as any other does."""
    x = history()
    x[:, HELD] += 3.0
    fields = {"q": 0.5} if name == "quantile" else {}
    with_marks, without = (told(name, panel_of(x, marked=marked), **fields) for marked in (True, False))
    for left, right in zip(with_marks, without, strict=True):
        np.testing.assert_array_equal(left, right)


def season(x: np.ndarray) -> np.ndarray:
    """A cycle of 24 steps added."""
    return x + 4 * np.sin(2 * np.pi * np.arange(x.shape[1]) / 24)


def test_a_season_is_learned_with_it_and_its_scatter_without():
    """Two held windows in random order widen the limits of the amplitude no more, once they are marked."""
    healthy = season(history(series=40))
    broken = shuffled(healthy, 9)

    def width(x: np.ndarray, *, marked: bool) -> np.ndarray:
        seen = told("seasonal_lag", panel_of(x, marked=marked, seasons=(24,)), season="of 24")
        return seen[1] - seen[2]

    wide, narrow, usual = width(broken, marked=False), width(broken, marked=True), width(healthy, marked=False)
    assert np.nanmedian(narrow / usual) < 1.1
    assert np.nanmedian(wide / usual) > 1.3
    slip = told("season_phase", panel_of(broken, marked=True, seasons=(24,)), season="of 24")
    assert not np.isnan(slip[0]).any()


def test_a_difference_that_reaches_into_a_held_batch_is_held():
    """So is a group of steps with a held one in it."""
    panel = panel_of(history(), marked=True)
    daily = apply([Transform("difference", 24)], panel)
    assert np.flatnonzero(daily.axis.held).tolist() == list(range(HELD.start - 24, HELD.stop))
    grouped = apply([Transform("every", "2D", "sum")], panel)
    assert np.flatnonzero(grouped.axis.held).tolist() == list(range(HELD.start // 48, HELD.stop // 48))


def test_nothing_held_changes_nothing():
    """Without marks history is handed on as it is, not copied."""
    panel = panel_of(history(), marked=False)
    x = panel.history
    assert remembered(panel, x) is x
    assert np.isnan(remembered(panel_of(history(), marked=True), x)[:, HELD]).all()
