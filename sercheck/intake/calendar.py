"""The cadence: stamps to numbers of steps and back, lengths to steps, days and months on the local clock.

Depends on numpy, ``errors`` and the zone's clock.
"""

from __future__ import annotations

import re
from dataclasses import dataclass, replace
from functools import cached_property
from typing import Literal

import numpy as np

from sercheck.errors import UsageError
from sercheck.intake.zone import DAY, NOT_A_STAMP, SECOND, Zone
from sercheck.serial.arrays import Bools, Ints

Kind = Literal["fixed", "days", "business", "months", "irregular"]

MONDAY = 3
"""Days from Monday 1969-12-29 to 1970-01-01, a Thursday: days counted from a Monday make weeks begin on Monday."""
SAMPLE = 100_000
"""Stamps looked at to find where on the clock a feed delivers (ours: the commonest place needs no more)."""
WALL_SHARE = 1.1
"""A step of several hours counts on the wall clock when that fits this many times as many stamps (ours)."""

_FIXED = {"h": 3600 * SECOND, "min": 60 * SECOND, "s": SECOND, "ms": 1_000_000, "us": 1_000, "ns": 1}
_DAYS = {"D": 1, "W": 7}
_MONTHS = {"MS": 1, "ME": 1, "M": 1, "QS": 3, "QE": 3, "Q": 3, "YS": 12, "YE": 12, "Y": 12}
_OLD_WORDS = {"H": "h", "T": "min", "S": "s", "d": "D", "m": "min", "A": "Y", "AS": "YS", "AE": "YE"}
_MONTH_NAMES = ("JAN", "FEB", "MAR", "APR", "MAY", "JUN", "JUL", "AUG", "SEP", "OCT", "NOV", "DEC")
_USUAL_MONTH = 365.2425 / 12
"""Days of a month of the Gregorian calendar, on average."""


@dataclass(frozen=True)
class Length:
    """A length in time: ``size`` nanoseconds (fixed), days, business days or months."""

    kind: Kind
    size: int
    anchor: int = 0
    at_end: bool = False


def parse_length(text: str, place: str = "every") -> Length:
    """Read a length such as ``1h``, ``15min``, ``7D``, ``W``, ``B``, ``MS``, ``QS-FEB``, ``YE`` or ``irregular``.

    Raises:
        UsageError: no such length.
    """
    if text == "irregular":
        return Length("irregular", 1)
    found = re.fullmatch(r"\s*(\d*)\s*([A-Za-z]+)(?:-([A-Za-z]{3}))?\s*", text)
    count = int(found[1] or 1) if found else 0
    unit = _OLD_WORDS.get(found[2], found[2]) if found else ""
    month = (found[3] or "").upper() if found else ""
    if count > 0 and unit in _FIXED:
        size = count * _FIXED[unit]
        return Length("days", size // DAY) if size % DAY == 0 else Length("fixed", size)
    if count > 0 and unit in _DAYS:
        return Length("days", count * _DAYS[unit])
    if count > 0 and unit == "B":
        return Length("business", count)
    if count > 0 and unit in _MONTHS:
        size, ends = count * _MONTHS[unit], unit.endswith("E") or unit in ("M", "Q", "Y")
        # QS-FEB begins in February; QE-JAN ends with January, so begins in February too.
        named = _MONTH_NAMES.index(month) + (1 if ends else 0) if month in _MONTH_NAMES else 0
        return Length("months", size, named % size, ends)
    raise UsageError(place, f"{text!r} is no length in time", "a pandas offset such as 15min, 1h, D, 7D, B, MS or YS")


def months_of(days: Ints) -> Ints:
    """Months since January 1970 of local days since 1970-01-01."""
    return days.astype("datetime64[D]").astype("datetime64[M]").astype(np.int64)


def first_days(months: Ints) -> Ints:
    """First local day of months counted from January 1970."""
    return months.astype("datetime64[M]").astype("datetime64[D]").astype(np.int64)


def business_days(days: Ints) -> Ints:
    """Business days since Monday 1969-12-29; a weekend counts as the Friday before."""
    week, weekday = np.divmod(days + MONDAY, 7)
    return week * 5 + np.minimum(weekday, 4)


@dataclass(frozen=True)
class Cadence:
    """How often a feed delivers.

    Fixed lengths below a day count steps in UTC; days and business days count on the local calendar, months, quarters
    and years are periods of it (any day inside a period stands for it). A step of several hours that divides the day
    counts on the wall clock when the stamps follow it (``anchored`` finds out).

    Attributes:
        every: pandas offset or ``irregular``.
        timezone: zone whose calendar counts.
        anchor: place of the stamps within a step: nanoseconds for a fixed length, days for several days; None when
            not looked for yet (counts as 0).
        wall: a fixed length is counted on the wall clock.
    """

    every: str
    timezone: str = "UTC"
    anchor: int | None = None
    wall: bool = False

    @cached_property
    def length(self) -> Length:
        """The cadence's own length."""
        return parse_length(self.every)

    @cached_property
    def zone(self) -> Zone:
        """The clock of ``timezone``."""
        return Zone(self.timezone)

    @property
    def kind(self) -> Kind:
        """What a step is counted in."""
        return self.length.kind

    @property
    def irregular(self) -> bool:
        """No cadence: rows are only ordered."""
        return self.kind == "irregular"

    @property
    def daily_or_longer(self) -> bool:
        """A step is a day or more."""
        return self.kind in ("days", "business", "months")

    @property
    def step(self) -> int:
        """Nanoseconds of one step: the usual one where the calendar varies, 0 for an irregular feed."""
        sizes = {
            "fixed": self.length.size,
            "days": self.length.size * DAY,
            "business": self.length.size * DAY,
            "months": round(self.length.size * _USUAL_MONTH * DAY),
            "irregular": 0,
        }
        return sizes[self.kind]

    def anchored(self, stamps: Ints) -> Cadence:
        """The same cadence with its anchor at the commonest place of the stamps within a step."""
        readable = stamps[stamps != NOT_A_STAMP]
        sample = readable[:: 1 + len(readable) // SAMPLE]
        if sample.size == 0 or self.kind not in ("fixed", "days") or (self.kind == "days" and self.length.size == 1):
            return self
        if self.kind == "days":
            return replace(self, anchor=_commonest((self.days(sample) + MONDAY) % self.length.size)[0])
        size = self.length.size
        anchor, share = _commonest(sample % size)
        if size > 3600 * SECOND and DAY % size == 0 and not self.zone.is_utc:
            on_wall, wall_share = _commonest(self.zone.local(sample) % size)
            if wall_share > WALL_SHARE * share:
                return replace(self, anchor=on_wall, wall=True)
        return replace(self, anchor=anchor, wall=False)

    def days(self, stamps: Ints) -> Ints:
        """Local days since 1970-01-01."""
        return self.zone.local(stamps) // DAY

    def index_of(self, stamps: Ints) -> tuple[Ints, Bools]:
        """Number of the step of each stamp, and whether the stamp lies on the cadence.

        Args:
            stamps: int64 nanoseconds UTC; unreadable ones (the smallest int64) are off the grid.

        Returns:
            Index counted on the cadence itself (the same for every batch) and flags, both of the shape of ``stamps``.

        Raises:
            UsageError: the feed is irregular.
        """
        readable = stamps != NOT_A_STAMP
        kind, size = self.kind, self.length.size
        if kind == "irregular":
            raise UsageError("every", "an irregular feed has no steps in time")
        if kind == "fixed":
            index, rest = np.divmod((self.zone.local(stamps) if self.wall else stamps) - (self.anchor or 0), size)
            return index, readable & (rest == 0)
        days = self.days(stamps)
        if kind == "months":
            return (months_of(days) - self.length.anchor) // size, readable
        if kind == "business":
            index, rest = np.divmod(business_days(days), size)
            return index, readable & (rest == 0) & ((days + MONDAY) % 7 < 5)
        index, rest = np.divmod(days + MONDAY - (self.anchor or 0) if size > 1 else days, size)
        return index, readable & (rest == 0)

    def stamp_of(self, index: Ints) -> Ints:
        """The instant that stands for each step: nanoseconds UTC; local midnight for days and longer."""
        kind, size = self.kind, self.length.size
        if kind == "fixed":
            shown = index * size + (self.anchor or 0)
            return self.zone.utc(shown) if self.wall else shown
        if kind == "months":
            months = index * size + self.length.anchor
            days = first_days(months + size) - 1 if self.length.at_end else first_days(months)
        elif kind == "business":
            week, weekday = np.divmod(index * size, 5)
            days = week * 7 + weekday - MONDAY
        elif kind == "days":
            days = index * size + (self.anchor or 0) - MONDAY if size > 1 else index
        else:
            raise UsageError("every", "an irregular feed has no steps in time")
        return self.zone.utc(days * DAY)

    def steps(self, length: str | int) -> int:
        """How many steps a length in time is (a local day counts as 24 hours); an int is steps already.

        Raises:
            UsageError: the length is not a whole number of steps, or the feed is irregular.
        """
        if isinstance(length, int):
            if length < 1:
                raise UsageError("a length", f"{length} steps", "1 or more")
            return length
        asked, own = parse_length(length, "a length"), self.length
        if self.irregular or asked.kind == "irregular":
            raise UsageError(
                "a length", f"{length} cannot be counted in steps: the feed is irregular", "a number of steps"
            )
        size = self._in_own_unit(asked)
        if size is None or size % own.size:
            raise UsageError(
                "a length", f"{length} is not a whole number of steps of {self.every}", "a multiple of the cadence",
                "Write it in steps, or choose another length.",
            )  # fmt: skip
        return size // own.size

    def _in_own_unit(self, asked: Length) -> int | None:
        own = self.kind
        if own == "fixed" and asked.kind in ("fixed", "days"):
            return asked.size if asked.kind == "fixed" else asked.size * DAY
        if own == "business" and asked.kind == "days":
            return asked.size // 7 * 5 if asked.size % 7 == 0 else None
        return asked.size if own == asked.kind else None

    def period(self, length: str | int, stamp: int, *, floor: bool) -> tuple[int, int]:
        """A stretch of a length in time around or from a stamp, on the local calendar (a day may have 23 hours).

        Args:
            length: time as text, or steps.
            stamp: nanoseconds UTC.
            floor: begin at the start of the local day, month or part of the day that holds the stamp; else at the
                stamp itself.

        Returns:
            First and last step (exclusive) as numbers on the cadence.
        """
        first = int(self.index_of(np.array([stamp]))[0][0])
        if isinstance(length, int):
            return first, first + length
        asked = parse_length(length)
        if asked.kind == "months" and self.kind in ("fixed", "days", "business"):
            return self._months_from(asked, stamp, floor=floor)
        steps = self.steps(length)
        if self.daily_or_longer:
            if not floor or asked.kind != "months":
                return first, first + steps
            begin = self._period_of_months(asked, first)
            return begin, begin + steps
        local = int(self.zone.local(np.array([stamp]))[0])
        size = asked.size if asked.kind == "fixed" else asked.size * DAY
        part = asked.size if asked.kind == "fixed" and DAY % asked.size == 0 else DAY
        begin_local = local - local % part if floor else local
        ends = self.zone.utc(np.array([begin_local, begin_local + size]))
        low, high = (self._at_or_after(int(end)) for end in ends)
        return (low if floor else first), (high if asked.kind == "days" else (low if floor else first) + steps)

    def _months_from(self, asked: Length, stamp: int, *, floor: bool) -> tuple[int, int]:
        """Months of the calendar in steps of days or less; without ``floor`` from the stamp's own day of the month."""
        local = int(self.zone.local(np.array([stamp]))[0])
        month = int(months_of(np.array([local // DAY]))[0])
        begin = month - (month - asked.anchor) % asked.size if floor else month
        low, high = (int(day) * DAY for day in first_days(np.array([begin, begin + asked.size])))
        into = 0 if floor else local - int(first_days(np.array([month]))[0]) * DAY
        ends = self.zone.utc(np.array([low + into, high + into]))
        return self._at_or_after(int(ends[0])), self._at_or_after(int(ends[1]))

    def _period_of_months(self, asked: Length, index: int) -> int:
        months = index * self.length.size + self.length.anchor
        return (months - (months - asked.anchor) % asked.size - self.length.anchor) // self.length.size

    def _at_or_after(self, stamp: int) -> int:
        index, on_grid = self.index_of(np.array([stamp]))
        return int(index[0]) + (0 if on_grid[0] else 1)


def _commonest(places: Ints) -> tuple[int, float]:
    found, counts = np.unique(places, return_counts=True)
    best = int(np.argmax(counts))
    return int(found[best]), float(counts[best]) / len(places)
