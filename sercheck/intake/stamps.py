"""Stamps of any kind to nanoseconds UTC; depends on the calendar and the zone's clock (pyarrow where used)."""

from __future__ import annotations

from contextlib import suppress
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from sercheck.errors import BatchError
from sercheck.intake import arrow
from sercheck.intake.calendar import Cadence
from sercheck.intake.zone import DAY, EARLIEST, LATEST, NOT_A_STAMP, SECOND, Zone
from sercheck.serial.arrays import Bools, Floats, Ints

if TYPE_CHECKING:
    import pyarrow as pa

SMALLEST_EPOCH = 1e8
"""Numbers below are no seconds since 1970 of a living feed (1e8 s is March 1973)."""
_UNITS = ((1e11, SECOND), (1e14, 1_000_000), (1e17, 1_000), (np.inf, 1))
"""Seconds, milliseconds, microseconds, nanoseconds: each reaches from 1973 to past 5000, so magnitude tells them."""
_UNIT_NANOSECONDS = {"s": SECOND, "ms": 1_000_000, "us": 1_000, "ns": 1}

_NUMBER = r"^\s*[+-]?\d+(\.\d*)?\s*$"
_COMPACT_DATE = r"^\s*(?P<y>\d{4})(?P<m>\d{2})(?P<d>\d{2})(?:[ T]?(?P<h>\d{2})(?P<i>\d{2})(?P<s>\d{2})?(?P<z>Z)?)?\s*$"
_ISO = (
    r"^\s*(?P<y>\d{4})[-/](?P<m>\d{1,2})(?:[-/](?P<d>\d{1,2})"
    r"(?:[ T]+(?P<h>\d{1,2})(?::?(?P<i>\d{2})(?::?(?P<s>\d{2})(?:[.,](?P<f>\d{1,9})\d*)?)?)?"
    r"\s*(?P<z>[Zz]|UTC|GMT|[+-]\d{2}(?::?\d{2})?)?)?)?\s*$"
)
_QUARTER = r"^\s*(?P<y>\d{4})-?[Qq](?P<q>[1-4])\s*$"
_YEAR = r"^\s*(?P<y>\d{4})\s*$"


@dataclass(frozen=True)
class ReadStamps:
    """Stamps as they stand in a column.

    Attributes:
        stamps: int64 nanoseconds: UTC, or wall-clock readings where ``naive``; the smallest int64 is unreadable.
        naive: without an offset, so still to be read on the feed's clock; one flag, or one for each row when mixed.
    """

    stamps: Ints
    naive: bool | Bools

    def take(self, rows: np.ndarray) -> ReadStamps:
        """The stamps at the places ``rows``; a negative place is unreadable."""
        naive = self.naive if isinstance(self.naive, bool) else self.naive[rows]
        if len(self.stamps) == 0:
            return ReadStamps(np.full(len(rows), NOT_A_STAMP, dtype=np.int64), False)
        stamps = self.stamps[rows]
        return ReadStamps(np.where(rows < 0, NOT_A_STAMP, stamps) if (rows < 0).any() else stamps, naive)


def read_stamps(column: pa.Array, cadence: Cadence, place: str) -> ReadStamps:
    """Read a column of stamps of any type: timestamps, dates, text, numbers, or a dictionary of these.

    Text is ISO 8601 with or without an offset, with ``-`` or ``/``; ``1949-01``; ``1960Q1``; a bare year where the
    cadence is a year. Numbers order the rows of an irregular feed; else they are seconds, milliseconds, microseconds
    or nanoseconds since 1970 by their magnitude.

    Raises:
        BatchError: the type cannot hold stamps, or the numbers are too small for an epoch.
    """
    import pyarrow as pa
    import pyarrow.compute as pc

    kind = column.type
    if pa.types.is_dictionary(kind):
        return read_stamps(column.dictionary, cadence, place).take(arrow.codes(column, -1))
    if pa.types.is_null(kind):
        return ReadStamps(np.full(len(column), NOT_A_STAMP, dtype=np.int64), False)
    if pa.types.is_timestamp(kind):
        return ReadStamps(_to_nanoseconds(_as_integers(column), _UNIT_NANOSECONDS[kind.unit]), kind.tz is None)
    if pa.types.is_date(kind):
        days = _as_integers(pc.cast(column, pa.date32(), safe=False), pa.int32())
        return ReadStamps(_to_nanoseconds(days, DAY), True)
    if pa.types.is_string(kind) or pa.types.is_large_string(kind) or pa.types.is_string_view(kind):
        text = column.cast(pa.string()) if pa.types.is_string_view(kind) else column
        return _read_text(text, cadence, place)
    if pa.types.is_integer(kind) or pa.types.is_floating(kind) or pa.types.is_decimal(kind):
        numbers = _floats(pc.cast(column, pa.float64(), safe=False))
        if pa.types.is_integer(kind) and column.null_count == 0:
            return _from_numbers(numbers, cadence, place, arrow.numbers(column).astype(np.int64))
        return _from_numbers(numbers, cadence, place)
    raise BatchError(place, f"the time column is of type {kind}", "timestamps, dates, text or numbers")


def resolve(read: ReadStamps, codes: np.ndarray, zone: Zone, *, whole_days: bool = False) -> Ints:
    """Put naive stamps on the zone's clock.

    A reading that comes twice in autumn is told apart by the order of delivery within its series: the first is summer
    time, the second winter time; the other way round in a series that is delivered backwards. A reading that never
    comes in spring is no stamp.

    Args:
        read: stamps as read.
        codes: number of the series of each row, in order of delivery.
        zone: the feed's clock.
        whole_days: stamps stand for days or longer, so that a midnight the clock skipped is still that day.

    Returns:
        int64 nanoseconds UTC; the smallest int64 where there is none.
    """
    if read.naive is False or zone.is_utc:
        return read.stamps
    local = read.stamps
    readable = local != NOT_A_STAMP
    twice, never = zone.doubtful(local)
    if not isinstance(read.naive, bool):
        twice, never = twice & read.naive, never & read.naive
    twice, never = twice & readable, never & readable & (not whole_days)
    second = None
    if twice.any():
        second = np.zeros(len(local), dtype=bool)
        where = np.flatnonzero(twice)
        second[where] = _comes_second(codes, local, where)
    stamps = np.where(readable & ~never, zone.utc(local, second), NOT_A_STAMP)
    return stamps if isinstance(read.naive, bool) else np.where(read.naive, stamps, local)


def _comes_second(codes: np.ndarray, local: Ints, where: Ints) -> Bools:
    """Of the rows ``where``, those that stand for the later instant."""
    order = np.argsort(codes, kind="stable")
    series, shown = codes[order], local[order]
    same = (series[1:] == series[:-1]) & (shown[1:] != NOT_A_STAMP) & (shown[:-1] != NOT_A_STAMP)
    direction = np.where(same, np.sign(shown[1:] - shown[:-1]), 0)
    balance = np.bincount(series[1:], weights=direction, minlength=int(series.max()) + 1)
    key, reading = codes[where], local[where]
    sorted_ = np.lexsort((np.arange(len(where)), reading, key))
    fresh = np.ones(len(where), dtype=bool)
    fresh[1:] = (np.diff(key[sorted_]) != 0) | (np.diff(reading[sorted_]) != 0)
    starts = np.flatnonzero(fresh)
    group = np.cumsum(fresh) - 1
    nth = np.arange(len(where)) - starts[group]
    alone = (np.bincount(group) == 1)[group]
    later = np.empty(len(where), dtype=bool)
    later[sorted_] = np.where(alone, False, (nth % 2 == 1) ^ (balance[key[sorted_]] < 0))
    return later


def _as_integers(column: pa.Array, width: pa.DataType | None = None) -> Ints:
    import pyarrow as pa

    numbers = arrow.numbers(column.view(width or pa.int64())).astype(np.int64, copy=False)
    empty = arrow.nulls(column)
    return numbers if empty is None else np.where(empty, NOT_A_STAMP, numbers)


def _floats(column: pa.Array) -> Floats:
    """Numbers with NaN for null."""
    numbers, empty = arrow.numbers(column), arrow.nulls(column)
    return numbers if empty is None else np.where(empty, np.nan, numbers)


def _to_nanoseconds(counts: Ints, unit: int) -> Ints:
    """Multiply by the unit; what int64 nanoseconds cannot hold becomes unreadable."""
    if counts.size == 0:
        return counts
    low, high = EARLIEST // unit + 1, LATEST // unit
    if counts.min() >= low and counts.max() <= high:
        return counts if unit == 1 else counts * unit
    inside = (counts >= low) & (counts <= high)
    return np.where(inside, np.where(inside, counts, 0) * unit, NOT_A_STAMP)


def _from_numbers(numbers: np.ndarray, cadence: Cadence, place: str, exact: Ints | None = None) -> ReadStamps:
    finite = np.isfinite(numbers)
    sizes = np.abs(numbers[finite])
    middle = float(np.median(sizes)) if sizes.size else 0.0
    if middle < SMALLEST_EPOCH and not cadence.irregular:
        if sizes.size == 0:
            return ReadStamps(np.full(len(numbers), NOT_A_STAMP, dtype=np.int64), False)
        if _is_yearly(cadence) and 1000 <= middle <= 9999:
            return _civil({"y": np.where(finite, numbers, -1)}, len(numbers))
        raise BatchError(
            place, f"numbers such as {numbers[finite][0]:g} stand in the time column",
            "dates, or seconds, milliseconds, microseconds or nanoseconds since 1970",
            "If the numbers only order the rows, write `every: irregular`.",
        )  # fmt: skip
    unit = next(unit for most, unit in _UNITS if middle < most)
    if exact is not None:
        return ReadStamps(_to_nanoseconds(exact, unit), False)
    # A float holds a time of today to a quarter of a microsecond, so microseconds are what it can mean.
    with np.errstate(invalid="ignore"):
        whole = np.floor(numbers)
        rest = np.round((numbers - whole) * unit / 1_000) * 1_000 if unit > 1 else np.zeros(len(numbers))
        inside = finite & (np.abs(whole) < LATEST / unit)
    stamps = np.where(inside, whole, 0).astype(np.int64) * unit + np.where(inside, rest, 0).astype(np.int64)
    return ReadStamps(np.where(inside, stamps, NOT_A_STAMP), False)


def _is_yearly(cadence: Cadence) -> bool:
    return cadence.kind == "months" and cadence.length.size % 12 == 0


def _read_text(column: pa.Array, cadence: Cadence, place: str) -> ReadStamps:
    import pyarrow as pa
    import pyarrow.compute as pc

    for zone in (None, "UTC"):
        try:
            whole = pc.cast(column, pa.timestamp("us", zone))
        except pa.ArrowInvalid:
            continue
        if not (zone is None and column.null_count == len(column)):
            return ReadStamps(_to_nanoseconds(_as_integers(whole), 1_000), zone is None)
    if _is_yearly(cadence) and _matches(column, _YEAR).all():
        return _civil(_parts(column, _YEAR), len(column))
    is_number = _matches(column, _NUMBER)
    stamps = np.full(len(column), NOT_A_STAMP, dtype=np.int64)
    naive = np.ones(len(column), dtype=bool)
    left = np.ones(len(column), dtype=bool)
    for pattern in (_ISO, _QUARTER, _COMPACT_DATE):
        here = left & _matches(column, pattern)
        if cadence.irregular and pattern is _COMPACT_DATE:
            here &= ~is_number
        if here.any():
            found = _civil(_parts(column.filter(arrow.mask(here)), pattern), int(here.sum()))
            stamps[here], naive[here] = found.stamps, found.naive
            left &= ~here
    numeric = left & is_number
    if numeric.any():
        texts = pc.utf8_trim_whitespace(column.filter(arrow.mask(numeric)))
        exact = None
        with suppress(pa.ArrowInvalid):  # fractions stay floats
            exact = arrow.numbers(pc.cast(texts, pa.int64()))
        numbers = arrow.numbers(pc.cast(texts, pa.float64()))
        stray = (~left).any()  # a bare number among dates is an unreadable stamp, not a reason to refuse the feed
        if not (stray and np.median(np.abs(numbers)) < SMALLEST_EPOCH and not cadence.irregular):
            found = _from_numbers(numbers, cadence, place, exact)
            stamps[numeric], naive[numeric] = found.stamps, found.naive
    return ReadStamps(stamps, naive if not naive.all() and naive.any() else bool(naive.all()))


def _matches(column: pa.Array, pattern: str) -> Bools:
    import pyarrow.compute as pc

    return arrow.bools(pc.match_substring_regex(column, pattern))


def _parts(column: pa.Array, pattern: str) -> dict[str, np.ndarray]:
    """The named parts of each text as integers (-1 where absent); ``z`` as a flag and an offset in nanoseconds."""
    import pyarrow.compute as pc

    found = pc.extract_regex(column, pattern)
    parts: dict[str, np.ndarray] = {}
    for field, texts in zip(found.type, found.flatten(), strict=True):
        if field.name == "z":
            parts |= _offset_parts(texts)
        elif field.name == "f":
            parts["f"] = _integers(pc.utf8_rpad(texts, 9, "0"))
        else:
            parts[field.name] = _integers(texts)
    return parts


def _integers(texts: pa.Array) -> Ints:
    """Digits as a number, -1 for an empty text."""
    import pyarrow as pa
    import pyarrow.compute as pc

    filled = pc.replace_substring_regex(texts, "^$", "-1")
    numbers = arrow.numbers(pc.cast(filled, pa.int64()))
    empty = arrow.nulls(filled)
    return numbers if empty is None else np.where(empty, -1, numbers)


def _offset_parts(texts: pa.Array) -> dict[str, np.ndarray]:
    import pyarrow.compute as pc

    digits = pc.utf8_rpad(pc.replace_substring_regex(texts, r"[^0-9]", ""), 4, "0")
    clock = _integers(digits)
    minutes = clock // 100 * 60 + clock % 100
    west = arrow.bools(pc.match_substring_regex(texts, "^-"))
    given = arrow.bools(pc.match_substring_regex(texts, "."))
    return {"aware": given, "offset": np.where(west, -minutes, minutes) * 60 * SECOND}


def _civil(parts: dict[str, np.ndarray], n: int) -> ReadStamps:
    """Years, months, days and times of day to nanoseconds; a date that does not exist is unreadable."""
    absent = np.full(n, -1, dtype=np.int64)

    def part(name: str, default: int) -> Ints:
        values = parts.get(name, absent).astype(np.int64)
        return np.where(values < 0, default, values)

    quarter = part("q", 1)
    year, month, day = part("y", -1), part("m", 1) + (quarter - 1) * 3, part("d", 1)
    hour, minute, second = part("h", 0), part("i", 0), part("s", 0)
    good = (year >= 1678) & (year < 2262) & (month >= 1) & (month <= 12) & (day >= 1)
    months = np.where(good, (year - 1970) * 12 + month - 1, 0)
    first = months.astype("datetime64[M]").astype("datetime64[D]").astype(np.int64)
    length = (months + 1).astype("datetime64[M]").astype("datetime64[D]").astype(np.int64) - first
    # 24:00 is the midnight that ends the day (ISO 8601).
    in_day = (hour < 24) | ((hour == 24) & (minute == 0) & (second == 0))
    good &= (day <= length) & in_day & (minute < 60) & (second < 60)
    clock = ((hour * 60 + minute) * 60 + second) * SECOND + part("f", 0)
    stamps = np.where(good, (first + day - 1) * DAY + clock - parts.get("offset", np.zeros(n, dtype=np.int64)), 0)
    aware = parts.get("aware", np.zeros(n, dtype=bool))
    naive: bool | Bools = ~aware if aware.any() and not aware.all() else not aware.any()
    return ReadStamps(np.where(good, stamps, NOT_A_STAMP), naive)
