"""What is odd about the clock of a history: gaps, doubles, disorder, strange stamps, traces of clock changes.

Depends on ``serial``, ``grid`` and the zones.
"""

from __future__ import annotations

import numpy as np

from sercheck.grid import Axis, Grid
from sercheck.guess_clock import ZONES
from sercheck.intake.zone import DAY, NOT_A_STAMP, SECOND, Zone
from sercheck.portrait.findings import Finding, stamp_text, stretch_of
from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.season import median, phase_means

HOUR = 3600 * SECOND
AROUND = 14
"""Days on either side of a clock change whose cycles are compared: in two weeks the sun's day moves little (ours)."""
FEWEST_MOVES = 2
"""Clock changes that must move the cycle, back and forth, before it is told (ours)."""
BETTER = 0.5
"""The profile moved by an hour must leave less than this share of the squares that the unmoved one leaves (ours)."""
WEEKS = 6
"""Weeks on either side whose same hours tell what is usual (ours)."""
MOST_OF = 0.75
"""Share of the clock changes that must show the same (ours)."""
FAR = 6.0
"""Robust standard deviations from the usual that the values of changed hours must lie (ours)."""


def clock_findings(
    grid: Grid, column: str, x: Floats, steps: Ints, natural: dict[str, int]
) -> list[list[Finding]]:
    """What is odd about each series' clock.

    Args:
        grid: a block of history.
        column: the value column.
        x: its values, shape (S, T).
        steps: seasons of each series, shape (S, Q).
        natural: the seasons that the calendar names.
    """
    found: list[list[Finding]] = [[] for _ in grid.keys]
    _gaps(grid, found)
    _counted(grid, column, found)
    day = natural.get("day", 0)
    size = DAY // day if day else 0
    if day and size <= HOUR and len(grid.axis) >= 2 * AROUND * day:
        daily = (steps == day).any(axis=1)
        for changes in _changes(grid.axis):
            _moved(grid.axis, x, daily, day, changes, found)
            _changed_hours(grid.axis, x, day, changes, found)
    return found


def _gaps(grid: Grid, found: list[list[Finding]]) -> None:
    if grid.irregular:
        return
    T = grid.delivered.shape[1]
    first = np.where(grid.delivered.any(axis=1), grid.delivered.argmax(axis=1), T)
    last = T - 1 - grid.delivered[:, ::-1].argmax(axis=1)
    step = np.arange(T)
    inside = (step >= first[:, None]) & (step <= last[:, None])
    marks = ~grid.delivered & inside & grid.axis.expected & ~grid.axis.closed
    starts = marks & ~np.pad(marks, ((0, 0), (1, 0)))[:, :-1]
    count = starts.sum(axis=1)
    length = step - np.maximum.accumulate(np.where(marks, -1, step), axis=1)
    end = length.argmax(axis=1) if T else np.zeros(len(marks), dtype=np.int64)
    for row in np.flatnonzero(count).tolist():
        longest = int(length[row, end[row]])
        where = stretch_of(grid.axis, int(end[row]) - longest + 1, int(end[row]))
        rows = int(marks[row].sum())
        many = f"{int(count[row])} gaps, {rows} rows in all, the longest {longest}" if count[row] > 1 else (
            f"{longest} row{'s' if longest > 1 else ''} missing"
        )
        found[row].append(Finding("gap", where, many, float(rows)))


COUNTED = (
    ("doubles", "rows come twice with the same values"),
    ("differing", "rows come twice with different values; the last one counts"),
    ("disorder", "rows come before older ones"),
    ("off_grid", "stamps are unreadable, off the cadence or far from all others"),
)
NAMES = {"doubles": "doubles", "differing": "differing doubles", "disorder": "disorder", "off_grid": "off the grid"}


def _counted(grid: Grid, column: str, found: list[list[Finding]]) -> None:
    for name, about in COUNTED:
        counts = getattr(grid.tally, name)
        for row in np.flatnonzero(counts).tolist():
            many = int(counts[row])
            found[row].append(Finding(NAMES[name], f"{many} rows", f"{many} {about}", float(many)))
    for name, cells, about in (
        ("unreadable cells", grid.tally.unreadable, "cells hold text in place of a number"),
        ("infinite cells", grid.tally.infinite, "cells are infinite"),
    ):
        for row in np.flatnonzero(cells[column]).tolist():
            many = int(cells[column][row])
            found[row].append(Finding(name, f"{many} cells", f"{many} {about}", float(many)))


class _Change:
    """A family's clock changes within the history, as steps; ``ahead`` is True in spring."""

    def __init__(self, zone: str, at: Ints, ahead: Bools) -> None:
        self.zone, self.at, self.ahead = zone, at, ahead

    @property
    def place(self) -> str:
        return self.zone.split("/")[-1].replace("_", " ")


def _changes(axis: Axis) -> list[_Change]:
    """The clock changes of each family of zones that the history holds."""
    stamps = axis.stamps
    if len(stamps) < 2 or stamps[0] == NOT_A_STAMP:
        return []
    found = []
    for name in ZONES:
        offset = Zone(name).local(stamps) - stamps
        moved = np.flatnonzero(np.diff(offset)) + 1
        if len(moved):
            found.append(_Change(name, moved.astype(np.int64), np.diff(offset)[moved - 1] > 0))
    return found


def _moved(axis: Axis, x: Floats, daily: Bools, day: int, changes: _Change, found: list[list[Finding]]) -> None:
    """A daily cycle that is an hour earlier (or later) after the clocks went forward, and back after they went back."""
    hour = max(day // 24, 1)
    reach = AROUND * day
    votes = np.zeros(len(x))
    asked = 0
    for at, ahead in zip(changes.at.tolist(), changes.ahead.tolist(), strict=True):
        if at < reach or at + reach > x.shape[1]:
            continue
        asked += 1
        before, after = _profile(x, at - reach, at, day), _profile(x, at, at + reach, day)
        left = {move: np.nansum((after - np.roll(before, move, axis=1)) ** 2, axis=1) for move in (-hour, 0, hour)}
        early = (left[-hour] < BETTER * left[0]) & (left[-hour] < left[hour])
        late = (left[hour] < BETTER * left[0]) & (left[hour] < left[-hour])
        sign = 1.0 if ahead else -1.0
        votes += sign * (early.astype(float) - late.astype(float))
    if asked < FEWEST_MOVES:
        return
    for row in np.flatnonzero(daily & (np.abs(votes) >= max(FEWEST_MOVES, MOST_OF * asked))).tolist():
        way = "earlier in spring, later in autumn" if votes[row] > 0 else "later in spring, earlier in autumn"
        about = (
            f"the daily cycle moves by an hour at {int(abs(votes[row]))} of {asked} clock changes of "
            f"{changes.place} ({way}): stamps and cycle follow different clocks"
        )
        if not any(one.what == "cycle moves at clock changes" for one in found[row]):
            where = ", ".join(stamp_text(axis, at) for at in changes.at[:2].tolist())
            found[row].append(Finding("cycle moves at clock changes", where, about, float(asked)))


def _profile(x: Floats, first: int, last: int, day: int) -> Floats:
    """Mean day of a stretch about its own mean, shape (S, day)."""
    part = x[:, first:last]
    means = phase_means(part, np.arange(first, last) % day, day)[0]
    seen = ~np.isnan(means)
    middle = np.where(seen, means, 0.0).sum(axis=1) / np.maximum(seen.sum(axis=1), 1)
    return np.asarray(means - middle[:, None])


def _changed_hours(axis: Axis, x: Floats, day: int, changes: _Change, found: list[list[Finding]]) -> None:
    """Values of the hours that the wall clock skips or doubles, on stamps that run through: near zero, or summed.

    Stamps without an offset that were read as UTC are wall-clock readings; then the hour that does not exist lies at
    the reading of the change itself.
    """
    zone = Zone(changes.zone)
    twice, never = zone.doubtful(axis.stamps)  # the stamps as readings of that wall clock
    for marks, what, about in (
        (never, "skipped hour delivered", "an hour that the wall clock skips has values all of its own"),
        (twice, "doubled hour", "the hour that the wall clock shows twice has values all of its own"),
    ):
        at = np.flatnonzero(marks)
        week = 7 * day
        at = at[(at >= WEEKS * week) & (at < x.shape[1] - WEEKS * week)]
        if len(at) < FEWEST_MOVES:
            continue
        near = np.stack([x[:, at + shift * week] for shift in range(-WEEKS, WEEKS + 1) if shift], axis=2)
        middle = median(near)
        wide = 1.4826 * median(np.abs(near - middle[:, :, None]))
        with np.errstate(divide="ignore", invalid="ignore"):
            z = (x[:, at] - middle) / wide
        seen = np.isfinite(z)
        far = np.where(seen, np.sign(np.nan_to_num(z)) * (np.abs(np.nan_to_num(z)) >= FAR), 0.0)
        total = np.maximum(seen.sum(axis=1), 1)
        clear = (np.abs(far.sum(axis=1)) >= MOST_OF * total) & (total >= FEWEST_MOVES)
        for row in np.flatnonzero(clear).tolist():
            if any(one.what == what for one in found[row]):
                continue
            side = "low" if far[row].sum() < 0 else "high"
            where = stamp_text(axis, int(at[0]))
            sentence = f"{about}: far too {side} at {int(abs(far[row].sum()))} clock changes of {changes.place}"
            found[row].append(Finding(what, where, sentence, float(len(at))))
