"""Stretches of a history that are suspicious in themselves: stuck, filled, replayed, broken, moved to another level.

Depends on ``serial``, ``grid``, ``facts`` and ``clock``.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from sercheck.facts import facts_of
from sercheck.grid import Axis, Grid
from sercheck.intake.zone import DAY
from sercheck.portrait.clock import clock_findings
from sercheck.portrait.findings import Finding, stretch_of
from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.repeats import equal_to_earlier, midpoint_share, resting_value
from sercheck.serial.season import detrended

LONGEST_CYCLE = 1 << 12
"""Steps of the longest season by whose profile stretches are called odd (ours: a week of quarters of an hour)."""
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
    grid: Grid, column: str, x: Floats, steps: Ints, wanders: Bools, natural: dict[str, int]
) -> list[list[Finding]]:
    """What is odd about each series of a block, the clock's findings first.

    Args:
        grid: a block of history.
        column: the value column.
        x: its values, closed days missing, shape (S, T).
        steps: seasons of each series, 0 for none, shape (S, Q).
        wanders: series whose level does not come back: they have no level that could jump.
        natural: the seasons that the calendar names.
    """
    found = clock_findings(grid, column, x, steps, natural)
    for told in (_stretches(grid, column, x, steps, wanders), _replayed(grid, x, natural), _filled(grid, x)):
        for row, own in enumerate(told):
            found[row] += own
    return found


def _stretches(grid: Grid, column: str, x: Floats, steps: Ints, wanders: Bools) -> list[list[Finding]]:
    """Stuck stretches, broken days and changes of level, by the facts that ``learn`` tells too."""
    found: list[list[Finding]] = [[] for _ in grid.keys]
    if x.shape[1] < 2:
        return found
    cycles = [tuple(sorted({int(s) for s in own if 1 < s <= LONGEST_CYCLE})) for own in steps.tolist()]
    for cycle in sorted(set(cycles)):
        rows = np.flatnonzero(np.array([own == cycle for own in cycles]))
        part = _part(grid, column, detrended(x[rows]), rows, cycle)
        facts = facts_of(part, column, (), {})
        for place, row in enumerate(rows.tolist()):
            for what in ("stuck", "broken stretch", "level change") if x.shape[1] >= FEWEST else ("stuck",):
                at, size = int(facts.places[what][place]), float(facts.sizes[what][place])
                if at < 0 or (what == "level change" and (wanders[row] or size == 0)):
                    continue
                found[row].append(_sentence(grid.axis, what, at, size))
    return found


def _sentence(axis: Axis, what: str, at: int, size: float) -> Finding:
    if what == "level change":
        way = "up" if size > 0 else "down"
        return Finding(what, stretch_of(axis, at, at), f"the level goes {way} by {abs(size):.4g} and stays there", 1.0)
    last = at + int(size) - 1
    about = {
        "stuck": f"{int(size)} equal values in a row",
        "broken stretch": f"{int(size)} values far from the usual cycle",
    }[what]
    return Finding(what, stretch_of(axis, at, last), about, size)


def _part(grid: Grid, column: str, x: Floats, rows: Ints, cycle: tuple[int, ...]) -> Grid:
    """Some series of the block, their trend taken out, on an axis that knows their seasons."""
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


def _filled(grid: Grid, x: Floats) -> list[list[Finding]]:
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
    marks = np.where(rests, np.nan, equal_to_earlier(x))
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
