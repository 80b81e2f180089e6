"""What the columns of an unknown feed are, and how often it delivers; depends on ``intake``.

``study`` and ``draft`` use it. Everything can be said instead of guessed.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from sercheck.errors import BatchError, UsageError
from sercheck.guess_clock import cadence_of, zone_of
from sercheck.intake.calendar import Cadence, parse_length
from sercheck.intake.cells import to_values
from sercheck.intake.layout import Layout
from sercheck.intake.paths import check_columns
from sercheck.intake.peek import peek
from sercheck.intake.stamps import read_stamps
from sercheck.intake.zone import NOT_A_STAMP, Zone
from sercheck.serial.arrays import Floats, Ints

if TYPE_CHECKING:
    import pandas as pd
    import pyarrow as pa

    Given = str | Path | Sequence[str | Path] | pd.DataFrame

TIME_NAME = re.compile(
    r"(^|[_\W])(time|times|date|dates|datetime|timestamp|stamp|ts|at|day|hour|month|week|quarter|year|period|when|epoch)"
    r"($|[_\W])|timestamp|datetime|(_at|time|date)$",
    re.IGNORECASE,
)
"""Names that columns of stamps have."""
KEY_NAME = re.compile(
    r"(^|[_\W])(id|ids|key|code|no|number|nr|name|meter|site|station|sensor|store|plant)($|[_\W])|id$", re.IGNORECASE
)
"""Names that columns of series keys have."""
READABLE = 0.9
"""Share of a column's cells that must be stamps, or numbers (common practice: one in ten may be broken)."""
FEWER = 0.5
"""A key has fewer distinct values than half of the rows: each series comes at least twice."""
CLEAR = 0.01
"""Share of rows that may still be doubles of another when the keys are complete."""
YEARS = 1500, 2262
"""Numbers that may be years."""


@dataclass(frozen=True)
class Guess:
    """How to read a feed.

    Attributes:
        layout: its columns, cadence and zone; no seasons.
        told: a sentence for each thing that was found rather than given.
        counted: the time column only counts the rows: it has no stamps.
    """

    layout: Layout
    told: tuple[str, ...]
    counted: bool = False


def guess(
    given: Given,
    *,
    time: str | None = None,
    series: Sequence[str] | None = None,
    values: Sequence[str] | None = None,
    every: str | None = None,
    timezone: str | None = None,
) -> Guess:
    """Find the columns, the cadence and the zone of a feed from its first rows; what is given is taken as it is.

    The time column is the one whose cells are stamps (dates before numbers, telling names before others); without one,
    a column of whole numbers that only rises orders the rows. Value columns are all other columns of numbers but
    counters of the rows. Series keys are looked for only where the same stamp comes more than once. The cadence is the
    commonest step within a series; a feed whose steps are no multiples of it is ``irregular``.

    Args:
        given: files, a glob, or a DataFrame.
        time: the time column.
        series: the key columns; an empty list for a feed of one series.
        values: the value columns.
        every: the cadence.
        timezone: the zone of stamps without an offset.

    Raises:
        BatchError: a named column is not there, or the rows cannot be read.
        UsageError: no column can be the time, or no column holds numbers.
    """
    if every is not None:
        parse_length(every)
    if timezone is not None:
        Zone(timezone)
    columns = peek(given)
    place = "the history"
    asked = Layout(time or next(iter(columns)), tuple(series or ()), tuple(values or ()), every or "irregular")
    check_columns(columns, asked, place)
    told: list[str] = []
    clock = _Clock(columns, every)
    if time is None:
        time = clock.find(named={*(series or ()), *(values or ())})
        told.append(f"time: {time}")
    stamps, counted = clock.read(time)
    if series is None:
        series = _keys(columns, stamps, time, set(values or ()))
        if series:
            told.append(f"series: {', '.join(series)}")
    if values is None:
        values = _values(columns, {time, *series})
        told.append(f"values: {', '.join(values)}")
    codes = _codes(columns, series, len(stamps))
    if every is None:
        every = "irregular" if counted else clock.years(time) or cadence_of(stamps, codes)
        told.append(f"every: {every}")
    if timezone is None:
        timezone = zone_of(columns[time], stamps, every)
        told.append(f"timezone: {timezone}")
    return Guess(Layout(time, tuple(series), tuple(values), every, timezone), tuple(told), counted)


class _Clock:
    """The columns that may be the time."""

    def __init__(self, columns: dict[str, pa.Array], every: str | None) -> None:
        self.columns = columns
        self.every = every

    def find(self, named: set[str]) -> str:
        """The likeliest time column; ``named`` ones are something else."""
        best, best_score = "", 0.0
        for name, column in self.columns.items():
            score = 0.0 if name in named else self._score(name, column)
            if score > best_score:
                best, best_score = name, score
        if not best:
            shown = ", ".join(list(self.columns)[:20])
            raise UsageError(
                "the time column", f"none of the columns ({shown}) holds stamps or rising whole numbers",
                "a column of dates and times", "Name it with --time.",
            )  # fmt: skip
        return best

    def _score(self, name: str, column: pa.Array) -> float:
        """How likely a column is the time, 0 for not at all."""
        hint = 1.0 if TIME_NAME.search(name) else 0.0
        numbers = _numbers(column)
        if numbers is None:
            stamps = _stamps(column, "1h")
            return 3.0 + hint if stamps is not None and _share(stamps != NOT_A_STAMP, column) >= READABLE else 0.0
        if len(numbers) == 0 or np.isnan(numbers).mean() > 1 - READABLE:
            return 0.0
        if hint and (_are_years(numbers) or _stamps(column, "1h") is not None):
            return 2.0 + hint
        if _stamps(column, "1h") is not None and _rises(numbers):
            return 1.5
        return (1.0 if _are_years(numbers) else 0.5) + 0.1 * hint if _rises(numbers) and len(numbers) > 1 else 0.0

    def read(self, name: str) -> tuple[Ints, bool]:
        """Stamps of the time column, and whether they only count the rows."""
        column = self.columns[name]
        if self.every is not None:
            counts = parse_length(self.every).kind == "irregular" and _stamps(column, "1h") is None
            return read_stamps(column, Cadence(self.every), name).stamps, counts
        numbers = _numbers(column)
        if numbers is not None and self.years(name) is not None:
            return read_stamps(column, Cadence("YS"), name).stamps, False
        stamps = _stamps(column, "1h")
        if stamps is not None:
            return stamps, False
        return read_stamps(column, Cadence("irregular"), name).stamps, True

    def years(self, name: str) -> str | None:
        """``YS`` where the column holds years in order."""
        numbers = _numbers(self.columns[name])
        return "YS" if numbers is not None and _are_years(numbers) else None


def _numbers(column: pa.Array) -> Floats | None:
    """The column as numbers, None when fewer than ``READABLE`` of its cells are."""
    try:
        numbers = to_values(column, "")
    except BatchError:
        return None
    here = len(column) - column.null_count
    return numbers if np.isfinite(numbers).sum() >= READABLE * max(here, 1) else None


def _stamps(column: pa.Array, every: str) -> Ints | None:
    """The column as stamps, None when it cannot be."""
    try:
        return read_stamps(column, Cadence(every), "").stamps
    except BatchError:
        return None


def _share(marks: np.ndarray, column: pa.Array) -> float:
    return float(marks.sum()) / max(len(column), 1)


def _rises(numbers: Floats) -> bool:
    """Whole numbers that only rise."""
    whole = bool(np.isfinite(numbers).all()) and bool((numbers == np.floor(numbers)).all())
    return whole and bool((np.diff(numbers) > 0).all())


def _are_years(numbers: Floats) -> bool:
    """Whole numbers between 1500 and 2262, not always the same, of which neighbours differ by few."""
    if len(numbers) < 2 or not np.isfinite(numbers).all() or (numbers != np.floor(numbers)).any():
        return False
    inside = bool(numbers.min() >= YEARS[0] and numbers.max() <= YEARS[1])
    return inside and bool(numbers.max() > numbers.min()) and float(np.median(np.abs(np.diff(numbers)))) <= 1


def _keys(columns: dict[str, pa.Array], stamps: Ints, time: str, values: set[str]) -> list[str]:
    """The columns that together tell the series apart, as few as will do."""
    rows = len(stamps)
    if _doubles(stamps, np.zeros(rows, dtype=np.int64)) <= CLEAR:
        return []
    able: list[tuple[float, int, str, Ints]] = []
    numeric = [name for name, column in columns.items() if name != time and _numbers(column) is not None]
    for place, (name, column) in enumerate(columns.items()):
        if name == time or name in values:
            continue
        codes, count = _coded(column)
        number = _numbers(column)
        whole = number is None or bool((number[np.isfinite(number)] == np.floor(number[np.isfinite(number)])).all())
        hint = bool(KEY_NAME.search(name))
        if not whole or count < 2 or count > FEWER * rows or (number is not None and len(numeric) < 2):
            continue  # a column of numbers is a key only where another is left to hold the values
        able.append((0.0 if number is None else 1.0 if hint else 2.0, place, name, codes))
    able.sort(key=lambda one: one[:2])
    chosen: list[str] = []
    together, left = np.zeros(rows, dtype=np.int64), _doubles(stamps, np.zeros(rows, dtype=np.int64))
    single = [(_doubles(stamps, codes), rank, place, name) for rank, place, name, codes in able]
    complete = [one for one in single if one[0] <= CLEAR]
    if complete:
        return [min(complete, key=lambda one: one[1:3])[3]]
    for rank, _, name, codes in able:
        if rank > 1:  # numbers without a telling name count only where they are the whole key
            continue
        joined = np.unique(together * (codes.max(initial=0) + 1) + codes, return_inverse=True)[1].reshape(-1)
        now = _doubles(stamps, joined)
        if now < left:
            chosen.append(name)
            together, left = joined, now
        if left <= CLEAR:
            break
    return chosen


def _coded(column: pa.Array) -> tuple[Ints, int]:
    """A number for each distinct cell, and how many there are; a missing one is a cell like any other."""
    import pyarrow as pa

    coded = column if pa.types.is_dictionary(column.type) else column.dictionary_encode()
    codes = np.asarray(coded.indices.fill_null(len(coded.dictionary)), dtype=np.int64)
    return codes, len(coded.dictionary)


def _codes(columns: dict[str, pa.Array], series: Sequence[str], rows: int) -> Ints:
    together = np.zeros(rows, dtype=np.int64)
    for name in series:
        codes, _ = _coded(columns[name])
        together = np.unique(together * (codes.max(initial=0) + 1) + codes, return_inverse=True)[1].reshape(-1)
    return together.astype(np.int64)


def _doubles(stamps: Ints, codes: Ints) -> float:
    """Share of the rows whose series and stamp came before."""
    readable = stamps != NOT_A_STAMP
    order = np.lexsort((stamps[readable], codes[readable]))
    time, key = stamps[readable][order], codes[readable][order]
    same = (time[1:] == time[:-1]) & (key[1:] == key[:-1])
    return float(same.sum()) / max(len(time), 1)


def _values(columns: dict[str, pa.Array], used: set[str]) -> list[str]:
    """All columns of numbers but those that count the rows."""
    found: list[str] = []
    counters: list[str] = []
    for name, column in columns.items():
        numbers = None if name in used else _numbers(column)
        if numbers is None:
            continue
        counts = len(numbers) > 2 and _rises(numbers) and bool((np.diff(numbers) == 1).all())
        (counters if counts else found).append(name)
    found = found or counters
    if not found:
        shown = ", ".join(name for name in columns if name not in used) or "(none)"
        raise UsageError(
            "the value columns", f"none of the other columns ({shown}) holds numbers", "at least one column of numbers",
            "Name it with --values.",
        )  # fmt: skip
    return found


