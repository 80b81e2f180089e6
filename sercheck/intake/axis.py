"""From numbers of steps to the shared time axis: phases of seasons, closed days, groups; depends on ``grid``."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sercheck.errors import UsageError
from sercheck.grid import Axis
from sercheck.intake.calendar import MONDAY, Cadence, months_of, parse_length
from sercheck.intake.layout import Layout
from sercheck.intake.zone import DAY, Zone
from sercheck.serial.arrays import Bools, Ints


def build_axis(cadence: Cadence, layout: Layout, first: int, last: int) -> Axis:
    """The axis of the steps ``first`` to ``last`` (exclusive).

    Phases follow the wall clock of ``season_clock`` (else ``timezone``) where a season is a multiple of a day of steps
    below a day: hour of the day, hour of the week from Monday on. Seasons of a daily feed begin on a Monday, those of
    business days too; twelve months begin in January; all other seasons count steps.

    Raises:
        UsageError: a season or group is not a whole number of steps.
    """
    index = np.arange(first, last, dtype=np.int64)
    stamps = cadence.stamp_of(index)
    lengths = {name: cadence.steps(length) for name, length in layout.seasons.items()}
    days = cadence.days(stamps)
    closed = _closed(cadence, layout, days)
    expected = ~closed if cadence.kind in ("days", "business") else np.ones(len(index), dtype=bool)
    view = _View(cadence, index, stamps, days)
    clock = view.local if layout.season_clock is None else Zone(layout.season_clock).local(stamps)
    return Axis(
        stamps=stamps,
        index=index,
        lengths=lengths,
        phases={name: _phase(view, clock, length) for name, length in lengths.items()},
        closed=closed,
        expected=expected,
        groups={str(length): _group(view, length) for length in layout.group_lengths},
    )


def irregular_axis(layout: Layout, stamps: Ints) -> Axis:
    """The axis of an irregular feed: order of observation only, so no row is due and no day is closed.

    Raises:
        UsageError: a season or group is given in time.
    """
    index = np.arange(len(stamps), dtype=np.int64)
    cadence = Cadence("irregular", layout.timezone)
    lengths = {name: cadence.steps(length) for name, length in layout.seasons.items()}
    none = np.zeros(len(stamps), dtype=bool)
    return Axis(
        stamps=stamps,
        index=index,
        lengths=lengths,
        phases={name: index % length for name, length in lengths.items()},
        closed=none,
        expected=none,
        groups={str(length): index // cadence.steps(length) for length in layout.group_lengths},
    )


@dataclass(frozen=True)
class _View:
    """The steps seen as numbers, instants and local days."""

    cadence: Cadence
    index: Ints
    stamps: Ints
    days: Ints

    @property
    def local(self) -> Ints:
        return self.cadence.zone.local(self.stamps)


def _closed(cadence: Cadence, layout: Layout, days: Ints) -> Bools:
    if cadence.kind == "months":  # a holiday does not close a month
        return np.zeros(len(days), dtype=bool)
    return np.isin(days, np.array([day.toordinal() - 719_163 for day in layout.closed_days], dtype=np.int64))


def _phase(view: _View, clock: Ints, length: int) -> Ints:
    step = view.cadence.length.size
    if view.cadence.kind == "fixed":
        if length * step % DAY == 0 and DAY % step == 0:
            return (clock + MONDAY * DAY) // step % length
        return view.index % length
    if view.cadence.kind == "days" and step == 1:
        return (view.index + MONDAY) % length
    if view.cadence.kind == "months" and view.cadence.length.anchor and length * step % 12 == 0:
        return (view.index * step + view.cadence.length.anchor) % (length * step) // step
    return view.index % length


def _group(view: _View, length: str | int) -> Ints:
    """Number of the calendar stretch that holds each step; weeks begin on Monday."""
    cadence = view.cadence
    if isinstance(length, int):
        return view.index // cadence.steps(length)
    asked = parse_length(length, "every")
    if asked.kind == "months":
        return (months_of(view.days) - asked.anchor) // asked.size
    if asked.kind == "days" and cadence.kind != "months":
        return view.days // asked.size if asked.size % 7 else (view.days + MONDAY) // asked.size
    if asked.kind == "fixed" and cadence.kind == "fixed":
        cadence.steps(length)
        return view.local // asked.size
    if asked.kind == "business" and cadence.kind == "business":
        return view.index // cadence.steps(length)
    raise UsageError("after", f"groups of {length} cannot be made of steps of {cadence.every}", "a longer length")


