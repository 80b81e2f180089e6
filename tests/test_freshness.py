"""The age of the newest row."""

from dataclasses import replace

import numpy as np
import pytest
from panels import HOUR, clock_of, panel_of

from sercheck.measure import Question, Stays
from sercheck.measures.freshness import NEVER, Fields, Freshness


def run(panel, stays, after=2 * HOUR, irregular=False):
    """Judge so many nanoseconds after the last step."""
    clock = clock_of(panel)
    clock = replace(clock, as_of=int(panel.axis.stamps[-1]) + after, grid=replace(clock.grid, irregular=irregular))
    return Freshness().run(panel, Question(Fields(), stays, 0.0, {}, clock))


@pytest.mark.parametrize(("after", "age", "p"), [(2 * HOUR, 7200, 1), (4 * HOUR, 14400, 0), (3 * HOUR, 10800, 0)])
def test_age_in_seconds(after, age, p):
    """The age is the time of judging less the newest stamp; three hours are not below three hours."""
    seen = run(panel_of(np.ones((1, 48)), 24), Stays("below", high=3 * 3600.0), after)
    assert seen.observed[0, 0] == age
    assert seen.upper.p_value("upper")[0, 0] == p
    assert seen.exact


def test_a_series_that_stopped_is_as_old_as_its_history():
    """A series without a row in the batch is dated by its newest row in history, so that it fails."""
    x = np.ones((2, 48))
    x[0, 20:], x[1, 40:] = np.nan, np.nan
    seen = run(panel_of(x, 24), Stays("below", high=86_400.0))
    np.testing.assert_array_equal(seen.observed[:, 0] / 3600, [2 + 28, 2 + 8])
    np.testing.assert_array_equal(seen.upper.p_value("upper")[:, 0], [0, 1])


def test_a_series_nobody_has_seen_is_undecided():
    """Without any row there is no age, and the reason says so."""
    seen = run(panel_of(np.full((1, 48), np.nan), 24), Stays("below", high=3600.0))
    assert np.isnan(seen.observed[0, 0])
    assert "no row" in seen.reasons[seen.undecided[0, 0]]


def test_an_irregular_feed_is_dated_by_its_batch_alone():
    """Without a shared axis only the batch's own newest stamp counts."""
    x = np.ones((1, 48))
    x[0, 24:] = np.nan
    panel = panel_of(x, 24)
    assert clock_of(panel).grid.tally.newest[0] == NEVER
    assert run(panel, Stays("below", high=3600.0), irregular=True).undecided[0, 0] >= 0


def test_a_row_from_the_future_has_a_negative_age():
    """`between: [0s, 3h]` refuses stamps that lie ahead of the judging clock."""
    seen = run(panel_of(np.ones((1, 48)), 24), Stays("between", 0.0, 10800.0), after=-HOUR)
    assert seen.observed[0, 0] == -3600
    assert seen.lower.p_value("lower")[0, 0] == 0


def test_bounds_are_lengths_in_time():
    """The rule file's lengths arrive in seconds."""
    assert Freshness.bounds_in == "time"
    assert not Freshness.of_values
