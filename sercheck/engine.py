"""The line from a block of series to what the judge decides on: grid, transforms, measures.

``gate``, the rehearsal and a distributed run all call ``measure_block`` and ``decide``; nothing else measures. Depends
on the grid, the transforms, the measures and the compiled rules.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from fnmatch import fnmatchcase
from typing import Protocol

import numpy as np

from sercheck import limits, stopwatch
from sercheck.errors import UsageError
from sercheck.grid import Grid, Panel
from sercheck.judge import Judged, Seen, judge
from sercheck.measure import Clock, Measure, Measurement, Question
from sercheck.measures import get
from sercheck.rulebook.compiled import Rule, Rulebook
from sercheck.serial.arrays import Bools
from sercheck.suspects import with_causes
from sercheck.together import pooled
from sercheck.transforms import apply

LARGE, SMALL = 1e150, 1e-150
"""Magnitudes whose squares are near the ends of float64 (1.8e308 and 2.2e-308)."""


class Steps(Protocol):
    """What the engine needs to know of a cadence."""

    def steps(self, length: str | int) -> int:
        """A length in time or steps as a number of steps."""

    @property
    def step(self) -> int:
        """Nanoseconds of one step."""


@dataclass(frozen=True)
class Run:
    """What is the same for all blocks of one run.

    Attributes:
        book: the rule file.
        cadence: turns lengths in time into steps.
        as_of: int64 nanoseconds since 1970 UTC at which the batch is judged.
        rests: names of the rules that held one of the last seven batches: their longer look, which would see the same
            days again, rests.
    """

    book: Rulebook
    cadence: Steps
    as_of: int
    rests: frozenset[str] = frozenset()


def measure_block(grid: Grid, run: Run) -> tuple[list[Seen], list[str]]:
    """Measure every rule on every series of the block.

    A column is transformed once for all the rules that ask for the same transforms and window, and what they compute
    from it in common is computed once (``Panel.remember``).

    Returns:
        What was seen, in the order of the rules, and notes for the reader.
    """
    seen, notes = look_at_block(grid, run)
    stopwatch.begin("causes")
    return name_causes(seen, grid, run), notes


def look_at_block(grid: Grid, run: Run) -> tuple[list[Seen], list[str]]:
    """As ``measure_block``, but no cause is named yet: the rows of the grid need not be of one batch."""
    with np.errstate(all="ignore" if _extreme(grid) else None):
        return _measured(grid, run)


def name_causes(seen: Sequence[Seen], grid: Grid, run: Run) -> list[Seen]:
    """The same measurements with the likely causes of the series that may fail; the grid is that of the batch."""
    with np.errstate(all="ignore" if _extreme(grid) else None):
        return with_causes(run.book, seen, grid)


def _extreme(grid: Grid) -> bool:
    """Squares of the values leave the range of float64: sums become infinite, variances nought.

    What cannot be computed then is judged undecided; it needs no warning beside the answer.
    """
    for values in grid.values.values():
        for part in (values[:, : grid.start], values[:, grid.start :]):
            largest = max(np.fmax.reduce(part, axis=None, initial=0.0), -np.fmin.reduce(part, axis=None, initial=0.0))
            if largest > LARGE or 0 < largest < SMALL:
                return True
    return False


def _measured(grid: Grid, run: Run) -> tuple[list[Seen], list[str]]:
    panels: dict[object, Panel] = {}
    seen: list[Seen] = []
    notes: list[str] = []

    def transformed(column: str, rule: Rule, chosen: Bools) -> Panel:
        stretch = (column, rule.window, chosen.tobytes())
        if stretch not in panels:
            panels[stretch] = _panel(grid, rule, column, chosen, run)
        key = (*stretch, rule.after)
        if key not in panels:
            panels[key] = apply(rule.after, panels[stretch])
            notes.extend(panels[key].notes)
        return panels[key]

    for place, rule in enumerate(run.book.rules):
        limits.check()
        stopwatch.begin(f"measure {rule.name}")
        measure = get(rule.measure)
        chosen = chosen_series(rule, grid.keys)
        if not chosen.any():
            continue
        for column in rule.columns if measure.of_values else ("",):
            panel = transformed(column, rule, chosen)
            others = measure.beside(rule.fields)
            if others:
                panel = replace(panel, beside={name: transformed(name, rule, chosen) for name in others})
            seen.append(_look(place, rule, measure, panel, grid, chosen, run))
    return seen, notes


def decide(book: Rulebook, seen: Sequence[Seen]) -> list[Judged]:
    """Judge everything that was measured, rule by rule: the risk of a rule is shared among all its blocks."""
    told: list[Judged] = []
    for place, rule in enumerate(book.rules):
        parts = [part for part in seen if part.rule == place]
        alone = tuple(way for way in rule.across if way != "together")
        share = rule.false_alarm / len(rule.across)
        if alone:
            told += judge(replace(rule, across=alone, false_alarm=share * len(alone)), parts)
        if parts and "together" in rule.across:
            columns = dict.fromkeys(part.column for part in parts)
            whole = [pooled([part for part in parts if part.column == column]) for column in columns]
            told += judge(replace(rule, across=("batch",), false_alarm=share), whole)
    return told


def chosen_series(rule: Rule, keys: np.ndarray) -> Bools:
    """The series that a rule is for, shape (S,)."""
    if not rule.only:
        return np.ones(len(keys), dtype=bool)
    return np.array([any(fnmatchcase(key, glob) for glob in rule.only) for key in keys.tolist()], dtype=bool)


def _panel(grid: Grid, rule: Rule, column: str, chosen: Bools, run: Run) -> Panel:
    whole = rule.window == "batch"
    start = grid.start if whole else max(len(grid.axis) - run.cadence.steps(rule.window), 0)
    values = grid.values[column] if column else np.where(grid.delivered, 1.0, np.nan)
    if chosen.all():
        return Panel(values, start, grid.axis, grid.delivered, column)
    return Panel(values[chosen], start, grid.axis, grid.delivered[chosen], column)


def _look(place: int, rule: Rule, measure: Measure, panel: Panel, grid: Grid, chosen: Bools, run: Run) -> Seen:
    clock = Clock(_part(grid, chosen), run.as_of, run.cadence.step, run.book.timezone)
    question = Question(
        rule.fields,
        rule.stays,
        rule.false_alarm,
        dict(panel.axis.lengths),
        clock,
        rests=rule.name in run.rests,
        together="together" in rule.across,
    )
    if panel.values.shape[1] == panel.start:
        raise UsageError(
            f"rule '{rule.name}'", "after its transforms no step of the window is left", todo="Ask for a longer window."
        )
    measurement = measure.run(panel, question)
    unable = next((one.unable for one in (panel, *panel.beside.values()) if one.unable), "")
    if unable:
        measurement = _undecided(measurement, np.ones(len(panel.values), dtype=bool), unable)
    if measure.of_values and not measure.of_missing:
        silent = np.asarray(np.isnan(grid.values[panel.column][chosen, grid.start :]).all(axis=1))
        measurement = _undecided(measurement, silent, "the batch holds no value of this series")
    first, last = int(panel.axis.stamps[panel.start]), int(panel.axis.stamps[-1])
    return Seen(place, grid.keys[chosen], panel.column or None, measurement, first, last)


def _undecided(seen: Measurement, series: Bools, reason: str) -> Measurement:
    """Nothing can be said of some series, whatever their history lets a measure say."""
    if not series.any():
        return seen
    index = np.where(series[:, None], len(seen.reasons), seen.undecided)
    return replace(seen, undecided=index, reasons=(*seen.reasons, reason))


def _part(grid: Grid, chosen: Bools) -> Grid:
    """The chosen series of a grid, tally included."""
    if chosen.all():
        return grid
    tally = grid.tally
    part = replace(
        tally,
        rows=tally.rows[chosen],
        doubles=tally.doubles[chosen],
        differing=tally.differing[chosen],
        disorder=tally.disorder[chosen],
        off_grid=tally.off_grid[chosen],
        unreadable={name: counts[chosen] for name, counts in tally.unreadable.items()},
        infinite={name: counts[chosen] for name, counts in tally.infinite.items()},
        newest=tally.newest[chosen],
    )
    return replace(
        grid,
        keys=grid.keys[chosen],
        values={name: values[chosen] for name, values in grid.values.items()},
        delivered=grid.delivered[chosen],
        tally=part,
    )
