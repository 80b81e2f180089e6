"""Puts a fault into a real batch: which series it hits, what is then delivered, and what the intake counts of it.

Depends on the catalogue of faults, ``feed``, ``grid`` and ``intake``.
"""

from __future__ import annotations

import zlib
from collections.abc import Mapping
from dataclasses import dataclass, replace
from functools import cache

import numpy as np

from sercheck.grid import Axis, Grid, Tally
from sercheck.intake.assemble import planned_grids
from sercheck.intake.calendar import Cadence
from sercheck.intake.rows import Rows
from sercheck.intake.stretch import Plan
from sercheck.intake.zone import LATEST, NOT_A_STAMP
from sercheck.rehearsal.deliveries import DELIVERIES, Delivery
from sercheck.rehearsal.faults import Fault, catalogue
from sercheck.serial.arrays import Bools, Floats, Ints

EVERYTHING = 1 << 62
"""Cells of a block: more than any memory holds, so that all series come in one."""
USABLE = 0.5
"""Share of a batch's rows that a series must have for a fault to be put into it (ours)."""


def known_faults() -> dict[str, Fault | Delivery]:
    """Every fault by name, those of installed packages among them.

    Raises:
        UsageError: an announced fault cannot be loaded.
    """
    known: dict[str, Fault | Delivery] = {fault.name: fault for fault in catalogue()}
    return known | {fault.name: fault for fault in DELIVERIES}


@dataclass(frozen=True)
class Case:
    """One fault of one size, put into one series (or as many as it needs) or into all of them, for the nth time."""

    fault: Fault | Delivery
    size: float
    every: bool
    number: int

    def __reduce__(self) -> tuple[object, ...]:
        """Goes to another process by the name of its fault, whose function may be one that cannot go."""
        return _case, (self.fault.name, self.size, self.every, self.number)

    def generator(self, seed: int, day: int) -> np.random.Generator:
        """Its own chance; a fault that draws series draws the same ones every day."""
        same = _fewest(self.fault) > 1
        name = zlib.crc32(self.fault.name.encode())
        return np.random.default_rng(
            [seed, name, round(abs(self.size) * 1e6), int(self.every), self.number, 0 if same else day]
        )


@cache
def _in_this_process() -> dict[str, Fault | Delivery]:
    return known_faults()


def _case(name: str, size: float, every: bool, number: int) -> Case:
    return Case(_in_this_process()[name], size, every, number)


@dataclass(frozen=True)
class Broken:
    """What is delivered for the series that are hit in one batch; arrays of shape (m, n), the tally of shape (m,)."""

    values: Mapping[str, Floats]
    delivered: Bools
    tally: Tally


def hit(case: Case, grid: Grid, seed: int) -> Ints:
    """The series of the batch that a case hits, as places in the grid; empty where it cannot be put into it."""
    window = grid.delivered[:, grid.start :]
    able = np.flatnonzero(window.mean(axis=1) >= USABLE)
    fault = case.fault
    if case.every:
        chosen = able
    else:
        wanted = _fewest(fault) * (max(1, int(case.size)) if _fewest(fault) > 1 else 1)
        draw = np.random.default_rng([seed, case.number]).permutation(len(able))  # the same for all faults
        chosen = np.sort(able[draw[:wanted]]) if wanted <= len(able) else able[:0]
    if isinstance(fault, Fault) and len(chosen):
        steps = fault.steps(grid.axis.lengths, grid.start)
        if not fault.fits(len(chosen), window.shape[1], grid.start, steps):
            return chosen[:0]
    return chosen


def possible(fault: Fault | Delivery, *, every: bool, series: int) -> bool:
    """Whether a fault can be put into one series, or into all of so many."""
    if every:
        return series > 1 and _fewest(fault) == 1 and not (isinstance(fault, Delivery) and fault.whole)
    return series >= _fewest(fault)


def _fewest(fault: Fault | Delivery) -> int:
    return fault.fewest_series if isinstance(fault, Fault) else 1


def broken(case: Case, grid: Grid, rows: Ints, day: int, seed: int, cadence: Cadence) -> Broken:
    """What is delivered on one day of a fault.

    Args:
        case: the fault.
        grid: the batch of that day as it really was, with the history that really was before it.
        rows: the series that are hit.
        day: batches since the fault began.
        seed: of the rehearsal.
        cadence: for the intake.
    """
    whole = Broken(
        {name: values[rows, grid.start :] for name, values in grid.values.items()},
        grid.delivered[rows, grid.start :],
        part(grid.tally, rows),
    )
    fault = case.fault
    if isinstance(fault, Delivery):
        return _spoiled(fault, case, grid, rows, whole, case.generator(seed, day), cadence)
    if day and not fault.lasts:
        return whole
    return _damaged(fault, case, grid, rows, whole, day, seed)


def nothing_changed(sent: Broken, grid: Grid, rows: Ints) -> bool:
    """The fault left the batch as it was: there is nothing to catch."""
    was, now = part(grid.tally, rows), sent.tally
    counts = ("rows", "doubles", "differing", "disorder", "off_grid")
    return (
        all(np.array_equal(sent.values[name], column[rows, grid.start :], equal_nan=True)
            for name, column in grid.values.items())
        and np.array_equal(sent.delivered, grid.delivered[rows, grid.start :])
        and all(np.array_equal(getattr(was, name), getattr(now, name)) for name in counts)
    )  # fmt: skip


def part(tally: Tally, rows: Ints) -> Tally:
    """The tally of some series."""
    return Tally(
        tally.rows[rows], tally.doubles[rows], tally.differing[rows], tally.disorder[rows], tally.off_grid[rows],
        {name: counts[rows] for name, counts in tally.unreadable.items()},
        {name: counts[rows] for name, counts in tally.infinite.items()},
        tally.newest[rows],
    )  # fmt: skip


def _damaged(fault: Fault, case: Case, grid: Grid, rows: Ints, whole: Broken, day: int, seed: int) -> Broken:
    damage = replace(fault, damage=fault.later) if day and fault.later is not None else fault
    n = whole.delivered.shape[1]
    length = min(max(1, round(case.size * n)), n) if fault.partial else n
    at = int(case.generator(seed, day).integers(0, n - length + 1)) if length < n else 0
    delivered = whole.delivered.copy()
    values = {}
    for name, column in grid.values.items():
        known = column[rows]
        begin = grid.start + at
        steps = fault.steps(grid.axis.lengths, begin)
        chance = case.generator(seed, day)  # columns of a row are moved together
        out = damage.apply(known[:, begin : begin + length], known[:, :begin], case.size, chance, steps)
        values[name] = known[:, grid.start :].copy()
        values[name][:, at : at + length] = out
        lost = np.isnan(values[name]) & ~np.isnan(known[:, grid.start :])
        delivered = delivered & ~lost if fault.undelivered else delivered | ~np.isnan(values[name])
    return Broken(values, delivered, _recounted(whole, delivered, grid))


def _recounted(whole: Broken, delivered: Bools, grid: Grid) -> Tally:
    """The tally when rows come or stay away, their order and doubles as they were."""
    more = delivered.sum(axis=1) - whole.delivered.sum(axis=1)
    stamps = grid.axis.stamps[grid.start :]
    newest = np.where(delivered, stamps, NOT_A_STAMP).max(axis=1, initial=NOT_A_STAMP)
    unmoved = (delivered == whole.delivered).all(axis=1)
    return replace(
        whole.tally, rows=whole.tally.rows + more, newest=np.where(unmoved, whole.tally.newest, newest)
    )


def _spoiled(
    fault: Delivery, case: Case, grid: Grid, rows: Ints, whole: Broken, rng: np.random.Generator, cadence: Cadence
) -> Broken:
    """Rows made of the batch, spoiled, and laid on the grid anew by the intake, which counts them."""
    axis = grid.axis.cut(grid.start, len(grid.axis))
    series, steps = np.nonzero(whole.delivered)
    made = Rows(
        grid.keys[rows],
        series.astype(np.int32),
        axis.stamps[steps],
        {name: np.ascontiguousarray(column[whole.delivered]) for name, column in whole.values.items()},
    )
    sent = fault.spoil(made, case.size, rng, cadence.step)
    (laid,) = planned_grids(sent, None, _plan(cadence, axis), EVERYTHING)
    was, now = whole.tally, laid.tally
    return Broken(
        laid.values,
        laid.delivered,
        replace(
            was,
            rows=was.rows + now.rows - np.bincount(series, minlength=len(rows)),
            doubles=was.doubles + now.doubles,
            differing=was.differing + now.differing,
            disorder=was.disorder + now.disorder,
            off_grid=was.off_grid + now.off_grid,
            newest=now.newest,
        ),
    )


def _plan(cadence: Cadence, axis: Axis) -> Plan:
    return Plan(cadence, axis, 0, NOT_A_STAMP + 1, LATEST)
