"""Stretches of a history that are suspicious in themselves: stuck, filled, replayed, broken, moved to another level.

Depends on ``serial``, ``grid``, ``facts`` and ``clock``.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import NamedTuple

import numpy as np

from sercheck.facts import facts_of
from sercheck.grid import Grid
from sercheck.intake.zone import DAY
from sercheck.portrait.clock import clock_findings
from sercheck.portrait.findings import Finding, stretch_of
from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.repeats import equal_to_earlier, midpoint_share, resting_value
from sercheck.serial.season import detrended

LONGEST_CYCLE = 1 << 12
"""Steps of the longest season by whose profile stretches are called odd (ours: a week of quarters of an hour)."""
LONG = 12
"""Equal values in a row that are a stuck stretch, or a day of them where that is more (as in what ``learn`` tells)."""
REPLAYED = 6
"""Rows in a row that must equal those of a day or week before (as in the sign of rows delivered again)."""
BY_CHANCE = 1e-4
"""Chance of so long a run anywhere, at the series' own share of such equalities, under which it is told (ours)."""
FILLED, DIFFERENT = 0.05, 0.5
"""Share of rows that equal the one before, or lie half-way, from which it is told of a series whose values are mostly
different from each other (ours)."""
FEWEST = 48
"""Rows below which shares say nothing (ours)."""


def oddities(
    grid: Grid, column: str, x: Floats, steps: Ints, told_breaks: Breaks, natural: dict[str, int]
) -> list[list[Finding]]:
    """What is odd about each series of a block, the clock's findings first.

    Args:
        grid: a block of history.
        column: the value column.
        x: its values, closed days missing, shape (S, T).
        steps: seasons of each series, 0 for none, shape (S, Q).
        told_breaks: broken days and changes of level (``breaks``).
        natural: the seasons that the calendar names.
    """
    found = clock_findings(grid, column, x, steps, natural)
    stuck = _stuck(x, natural.get("day", 1))
    looks = (
        _told_breaks(grid, told_breaks), _told_stuck(grid, stuck), _replayed(grid, x, natural),
        _filled(grid, x, stuck),
    )  # fmt: skip
    for told in looks:
        for row, own in enumerate(told):
            found[row] += own
    return found


class Breaks(NamedTuple):
    """Broken days and changes of level of a block, every array of shape (S,).

    Attributes:
        broken: first step of the longest stretch of broken days, -1 for none.
        length: its values.
        level: first step after a change of level, -1 for none.
        change: the change.
    """

    broken: Ints
    length: Ints
    level: Ints
    change: Floats

    def without(self, x: Floats) -> Floats:
        """The series without their changes of level."""
        after = (self.level[:, None] >= 0) & (np.arange(x.shape[1]) >= self.level[:, None])
        return np.where(after, x - self.change[:, None], x)

    def only(self, rows: Bools) -> Breaks:
        """The same with the changes of level of some series only."""
        return self._replace(level=np.where(rows, self.level, -1), change=np.where(rows, self.change, 0.0))


def breaks(grid: Grid, column: str, x: Floats, steps: Ints) -> Breaks:
    """Broken days and changes of level, by the facts that ``learn`` tells too.

    A line in time looks like a change of level to a test of one: a change counts where it leaves less than a line does.

    Args:
        grid: a block of history.
        column: the value column.
        x: its values, closed days missing, shape (S, T).
        steps: seasons of each series, 0 for none, shape (S, Q).
    """
    S = len(x)
    found = Breaks(np.full(S, -1), np.zeros(S, np.int64), np.full(S, -1), np.zeros(S))
    if x.shape[1] < FEWEST:
        return found
    top = np.max(np.abs(x), axis=1, where=~np.isnan(x), initial=0.0)
    rest = x / np.where(top > 0, top, 1.0)[:, None]  # squares of the largest doubles overflow
    cycles = [tuple(sorted({int(s) for s in own if 1 < s <= LONGEST_CYCLE})) for own in steps.tolist()]
    for cycle in sorted(set(cycles)):
        rows = np.flatnonzero(np.array([own == cycle for own in cycles]))
        facts = facts_of(_part(grid, column, rest[rows], rows, cycle), column, (), {})
        found.broken[rows], found.length[rows] = facts.places["broken stretch"], facts.sizes["broken stretch"]
        found.level[rows], found.change[rows] = facts.places["level change"], facts.sizes["level change"]
    line = np.nansum(detrended(rest) ** 2, axis=1)
    step = found.without(rest)
    middle = np.nansum(step, axis=1) / np.maximum((~np.isnan(step)).sum(axis=1), 1)
    better = np.nansum((step - middle[:, None]) ** 2, axis=1) < line
    return found._replace(change=found.change * top).only((found.level >= 0) & better)


def _told_breaks(grid: Grid, told: Breaks) -> list[list[Finding]]:
    found: list[list[Finding]] = [[] for _ in grid.keys]
    for row in np.flatnonzero(told.broken >= 0).tolist():
        first, many = int(told.broken[row]), int(told.length[row])
        where = stretch_of(grid.axis, first, first + many - 1)
        found[row].append(Finding("broken stretch", where, f"{many} values far from the usual cycle", float(many)))
    for row in np.flatnonzero(told.level >= 0).tolist():
        at, size = int(told.level[row]), float(told.change[row])
        about = f"the level goes {'up' if size > 0 else 'down'} by {abs(size):.4g} and stays there"
        found[row].append(Finding("level change", stretch_of(grid.axis, at, at), about, 1.0))
    return found


def _stuck(x: Floats, per_day: int) -> tuple[Ints, Ints]:
    """Values in the longest run of equal ones and the step it begins at, where it is long; 0 values where not.

    A value that the series rests at (zero at night) is no sign.
    """
    with np.errstate(invalid="ignore"):
        marks = (equal_to_earlier(x) == 1) & (x != resting_value(x)[:, None])
    if not x.shape[1]:
        return np.zeros(len(x), dtype=np.int64), np.zeros(len(x), dtype=np.int64)
    length, at = longest_runs(marks)
    ends = np.fmin.reduce(x, axis=1, initial=np.inf), np.fmax.reduce(x, axis=1, initial=-np.inf)
    long = (length + 1 >= max(per_day, LONG)) & (ends[0] < ends[1])
    return np.where(long, length + 1, 0), at - 1


def _told_stuck(grid: Grid, stuck: tuple[Ints, Ints]) -> list[list[Finding]]:
    found: list[list[Finding]] = [[] for _ in grid.keys]
    for row in np.flatnonzero(stuck[0]).tolist():
        many, first = int(stuck[0][row]), int(stuck[1][row])
        where = stretch_of(grid.axis, first, first + many - 1)
        found[row].append(Finding("stuck", where, f"{many} equal values in a row", float(many)))
    return found


def _part(grid: Grid, column: str, x: Floats, rows: Ints, cycle: tuple[int, ...]) -> Grid:
    """Some series of the block on an axis that knows their seasons."""
    axis = grid.axis
    index = np.arange(len(axis))
    known = replace(
        axis,
        stamps=index * DAY if grid.irregular else axis.stamps,
        lengths={f"s{s}": s for s in cycle},
        phases={f"s{s}": index % s for s in cycle},
    )
    tally = replace(
        grid.tally,
        **{
            name: getattr(grid.tally, name)[rows]
            for name in ("rows", "doubles", "differing", "disorder", "off_grid", "newest")
        },
    )
    return Grid(grid.keys[rows], known, 0, {column: x}, grid.delivered[rows], tally, grid.irregular)


def _replayed(grid: Grid, x: Floats, natural: dict[str, int]) -> list[list[Finding]]:
    """Stretches whose rows equal those a day or a week earlier, more of them in a row than chance gives."""
    found: list[list[Finding]] = [[] for _ in grid.keys]
    with np.errstate(invalid="ignore"):
        rests = (x == resting_value(x)[:, None]) | (equal_to_earlier(x) == 1)
    for name, lag in natural.items():
        if name not in ("day", "week") or 2 * lag > x.shape[1] or lag < 2:
            continue
        marks = (equal_to_earlier(x, lag) == 1) & ~rests
        length, at = longest_runs(marks)
        for row in np.flatnonzero((length >= REPLAYED) & (_run_chance(marks, length, at) < BY_CHANCE)).tolist():
            first, many = int(at[row]), int(length[row])
            about = f"{many} rows in a row equal those one {name} earlier"
            found[row].append(Finding("replayed", stretch_of(grid.axis, first, first + many - 1), about, float(many)))
    return found


def _run_chance(marks: Bools, length: Ints, at: Ints) -> Floats:
    """Chance of a run of so many marks anywhere, 1 - exp(-T p01 p11^(length - 1)), the run itself left out."""
    step = np.arange(marks.shape[1])
    outside = (step < at[:, None]) | (step > (at + length)[:, None])
    outside = outside[:, 1:] & outside[:, :-1]
    before, now = marks[:, :-1], marks[:, 1:]
    p11 = ((before & now & outside).sum(axis=1) + 0.5) / ((before & outside).sum(axis=1) + 1)
    p01 = ((~before & now & outside).sum(axis=1) + 0.5) / ((~before & outside).sum(axis=1) + 1)
    return np.asarray(-np.expm1(-marks.shape[1] * p01 * p11 ** (length - 1.0)))


def longest_runs(marks: Bools) -> tuple[Ints, Ints]:
    """Length of the longest run of marks of each series and the step it begins at."""
    step = np.arange(marks.shape[1])
    length = step - np.maximum.accumulate(np.where(marks, -1, step), axis=1)
    end = length.argmax(axis=1)
    longest = np.take_along_axis(length, end[:, None], axis=1)[:, 0]
    return longest, end - longest + 1


def _filled(grid: Grid, x: Floats, stuck: tuple[Ints, Ints]) -> list[list[Finding]]:
    """Many values that equal the one before, or lie half-way between neighbours, where values hardly come twice."""
    found: list[list[Finding]] = [[] for _ in grid.keys]
    n = (~np.isnan(x)).sum(axis=1)
    if x.shape[1] < FEWEST:
        return found
    ordered = np.sort(x, axis=1)
    different = 1 + (np.diff(ordered, axis=1) > 0).sum(axis=1)
    able = (n >= FEWEST) & (different >= DIFFERENT * n)
    with np.errstate(invalid="ignore"):
        rests = x == resting_value(x)[:, None]
    step = np.arange(x.shape[1])
    within = (step >= stuck[1][:, None]) & (step < (stuck[1] + stuck[0])[:, None])
    marks = np.where(rests | within, np.nan, equal_to_earlier(x))
    looks: tuple[tuple[str, Callable[[], Floats], str], ...] = (
        ("filled forward", lambda: _share(marks), "of the rows equal the row before, though values hardly come twice"),
        ("interpolated", lambda: midpoint_share(x), "of the rows lie exactly half-way between their neighbours"),
    )
    for what, share_of, about in looks:
        share = share_of()
        for row in np.flatnonzero(able & (share >= FILLED)).tolist():
            where = stretch_of(grid.axis, 0, x.shape[1] - 1)
            found[row].append(Finding(what, where, f"{share[row]:.0%} {about}", float(share[row] * n[row])))
    return found


def _share(marks: Floats) -> Floats:
    seen = ~np.isnan(marks)
    return np.asarray(np.where(seen, marks, 0.0).sum(axis=1) / np.maximum(seen.sum(axis=1), 1))
