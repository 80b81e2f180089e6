"""Gaps, doubles, disorder and rows off the grid."""

from dataclasses import replace

import numpy as np
import pytest
from panels import clock_of, panel_of

from sercheck.measure import Question, Stays
from sercheck.measures.spacing import Fields, Spacing, gaps


def run(panel, stays, look="gaps", irregular=False, **tally):
    """Run the measure with what intake counted."""
    clock = clock_of(panel)
    counted = replace(clock.grid.tally, **{name: np.array(value) for name, value in tally.items()})
    clock = replace(clock, grid=replace(clock.grid, tally=counted, irregular=irregular))
    return Spacing().run(panel, Question(Fields(look=look), stays, 0.0, {}, clock))


def slow_gaps(delivered, expected):
    """Count, first, length and longest of one series' gaps, one step at a time."""
    found = []
    inside = False
    for step in range(len(delivered)):
        if not expected[step]:
            continue
        if delivered[step]:
            inside = False
        elif inside:
            found[-1][1] += 1
        else:
            found.append([step, 1])
            inside = True
    return (len(found), *(found[0] if found else (-1, 0)), max((length for _, length in found), default=0))


def test_gaps_as_the_slow_twin_counts_them():
    """Number, first step, length and longest gap are those of a plain loop, closed steps left out."""
    rng = np.random.default_rng(1)
    for share in (0.0, 0.3, 0.9, 1.0):
        delivered = rng.random((40, 30)) >= share
        expected = rng.random(30) < 0.8
        got = gaps(delivered, expected)
        for row, told in zip(delivered, zip(got.count, got.first, got.length, got.longest, strict=True), strict=True):
            assert told == slow_gaps(row, expected)


def test_nothing_due_has_no_gap():
    """A window in which no row is due has no gap."""
    got = gaps(np.zeros((2, 5), dtype=bool), np.zeros(5, dtype=bool))
    np.testing.assert_array_equal([got.count, got.first, got.length], [[0, 0], [-1, -1], [0, 0]])


def test_one_gap_is_not_below_one():
    """No gap passes `below: 1`, one gap fails it; an empty cell in a delivered row is no gap."""
    x = np.ones((3, 48))
    x[1, 30:33], x[2, 30:33] = np.nan, np.nan
    panel = panel_of(x, 24)
    delivered = panel.delivered.copy()
    delivered[2] = True
    seen = run(replace(panel, delivered=delivered), Stays("below", high=1))
    np.testing.assert_array_equal(seen.observed[:, 0], [0, 1, 0])
    np.testing.assert_array_equal(seen.upper.p_value("upper")[:, 0], [1, 0, 1])
    np.testing.assert_array_equal(seen.n[:, 0], [24, 21, 24])
    np.testing.assert_array_equal(seen.n_missing[:, 0], [0, 3, 0])
    assert seen.exact
    assert seen.integer


def test_gaps_of_history_do_not_count():
    """Only the window is judged; a series without any row in it has one gap as long as the window."""
    x = np.ones((2, 48))
    x[0, 3:9], x[1, 24:] = np.nan, np.nan
    seen = run(panel_of(x, 24), Stays("below", high=0))
    np.testing.assert_array_equal(seen.observed[:, 0], [0, 1])
    np.testing.assert_array_equal(seen.upper.p_value("upper")[:, 0], [1, 0])  # below: 0 can only mean none


@pytest.mark.parametrize(
    ("look", "tally", "wanted"),
    [
        ("doubles", {"doubles": [2, 0], "differing": [1, 0]}, [3, 0]),
        ("disorder", {"disorder": [4, 1]}, [4, 1]),
        ("off_grid", {"off_grid": [0, 5]}, [0, 5]),
    ],
)
def test_what_intake_counted(look, tally, wanted):
    """Doubles (identical and differing), disorder and rows off the grid are told as intake counted them."""
    seen = run(panel_of(np.ones((2, 48)), 24), Stays("between", 0, 3), look, **tally)
    np.testing.assert_array_equal(seen.observed[:, 0], wanted)
    np.testing.assert_array_equal(seen.upper.p_value("upper")[:, 0], [1.0 if n <= 3 else 0.0 for n in wanted])


def test_an_irregular_feed_has_no_gaps():
    """Without cadence gaps are undecided, doubles are not."""
    panel = panel_of(np.ones((1, 48)), 24)
    seen = run(panel, Stays("below", high=1), irregular=True)
    assert "no cadence" in seen.reasons[seen.undecided[0, 0]]
    assert run(panel, Stays("below", high=1), "doubles", irregular=True).undecided[0, 0] < 0
