"""Cadence and zone of a feed from its stamps, and the seasons that the calendar names for a cadence.

Depends on ``intake``.
"""

from __future__ import annotations

import re
from typing import TYPE_CHECKING

import numpy as np

from sercheck.intake.calendar import MONDAY, parse_length
from sercheck.intake.zone import DAY, NOT_A_STAMP, SECOND, Zone
from sercheck.serial.arrays import Ints

if TYPE_CHECKING:
    import pyarrow as pa

MULTIPLES = 0.8
"""Share of the steps that must be whole multiples of the cadence (ours: one in five may be off)."""
SMALLEST = 0.05
"""Share of the steps that the shortest common one must have to be the cadence of a feed with many gaps (ours)."""
HOUR = 3600 * SECOND
YEAR = 365.2425
"""Days of a year of the Gregorian calendar, on average."""
ZONES = (
    "Europe/Berlin", "Europe/London", "Europe/Helsinki", "America/New_York", "Australia/Sydney", "Pacific/Auckland",
    "America/Santiago",
)  # fmt: skip
"""One zone for each family of clock changes; others move their clocks at the same readings."""
FEWEST_CHANGES = 1
"""Clock changes in spring that must be seen to tell a zone from stamps without an offset."""
_UNITS = (("D", DAY), ("h", HOUR), ("min", 60 * SECOND), ("s", SECOND), ("ms", 1_000_000), ("us", 1_000), ("ns", 1))
_OFFSET = re.compile(r"([+-])(\d{2}):?(\d{2})$")


def cadence_of(stamps: Ints, codes: Ints) -> str:
    """The cadence as a pandas offset, or ``irregular``.

    Args:
        stamps: nanoseconds, UTC or on the feed's own clock; the smallest int64 is unreadable.
        codes: number of the series of each stamp.
    """
    readable = stamps != NOT_A_STAMP
    order = np.lexsort((stamps[readable], codes[readable]))
    time, key = stamps[readable][order], codes[readable][order]
    step = np.diff(time)[(np.diff(key) == 0) & (np.diff(time) > 0)]
    if not len(step):
        return "irregular"
    sizes, counts = np.unique(step, return_counts=True)
    common = int(sizes[counts.argmax()])
    days = np.unique(time // DAY)
    longer = _calendar(sizes, counts, days)
    if longer:
        return longer
    small = sizes[counts >= max(SMALLEST * len(step), 2)]
    for size in (common, int(small.min()) if len(small) else common):
        if (step % size == 0).mean() >= MULTIPLES:
            return _spelled(size)
    return "irregular"


def _calendar(sizes: Ints, counts: Ints, days: Ints) -> str | None:
    """Cadences whose steps differ in length: business days, months, quarters, years."""
    def share(low: float, high: float) -> float:
        return float(counts[(sizes >= low * DAY) & (sizes <= high * DAY)].sum() / counts.sum())

    if share(28, 31) >= MULTIPLES:
        return "MS"
    if share(89, 92.1) >= MULTIPLES:
        first = int((days[0]).astype("datetime64[D]").astype("datetime64[M]").astype(np.int64)) % 3
        return ("QS", "QS-FEB", "QS-MAR")[first]
    if share(365, 366) >= MULTIPLES:
        return "YS"
    weekday = (days + MONDAY) % 7
    daily = share(0.9, 1.1) >= 0.5
    if daily and len(days) >= 10 and (weekday < 5).all() and share(2.9, 3.1) > 0:
        return "B"
    return "D" if daily and share(0.9, 1.1) + share(1.9, 1000) >= 0.99 and (sizes >= DAY * 0.9).all() else None


def _spelled(size: int) -> str:
    """Nanoseconds as the largest unit that divides them."""
    unit, length = next((unit, length) for unit, length in _UNITS if size % length == 0)
    return f"{size // length if size > length else ''}{unit}" if unit == "D" else f"{size // length}{unit}"


def zone_of(column: pa.Array, stamps: Ints, every: str) -> str:
    """The zone of the stamps: what the column's type or its offsets say, else what clock changes have left in them.

    Stamps without an offset lie in a zone when the readings that its clock skips in spring are missing while their
    neighbours are there; without such a trace they count as UTC, which skips and doubles nothing.
    """
    import pyarrow as pa

    kind = column.type.value_type if pa.types.is_dictionary(column.type) else column.type
    if pa.types.is_timestamp(kind) and kind.tz is not None:
        return _known(kind.tz)
    if pa.types.is_string(kind) or pa.types.is_large_string(kind):
        offsets, at = _offsets(column)
        if offsets is not None:
            return _by_offsets(offsets, stamps[at])
    length = parse_length(every)
    if length.kind != "fixed" or length.size > HOUR:
        return "UTC"
    return _by_traces(stamps[stamps != NOT_A_STAMP], length.size)


def _known(name: str) -> str:
    from sercheck.errors import UsageError

    fixed = re.fullmatch(r"([+-])(\d{2}):?(\d{2})", name)
    if fixed:
        return _fixed(int(fixed[2]) * 3600 + int(fixed[3]) * 60, fixed[1])
    try:
        return Zone(name).name
    except UsageError:
        return "UTC"


def _fixed(seconds: int, sign: str) -> str:
    """A zone of one offset; POSIX counts westward. Offsets of part of an hour have none and are read as UTC."""
    if seconds % 3600 or seconds == 0:
        return "UTC"
    return f"Etc/GMT{'-' if sign == '+' else '+'}{seconds // 3600}"


def _offsets(column: pa.Array) -> tuple[Ints | None, Ints]:
    """Offsets in seconds of texts that end in one, and their places; None when there are none."""
    import pyarrow.compute as pc

    texts = pc.utf8_rtrim_whitespace(column)
    with_time = pc.match_substring_regex(texts, r"\d{2}:\d{2}.*[+-]\d{2}:?\d{2}$").fill_null(False)
    at = np.flatnonzero(np.asarray(with_time))
    if len(at) < max(1, len(column) // 2):
        return None, at
    tails = [text[-6:] for text in texts.take(at).to_pylist()]
    known = {tail: _seconds(tail) for tail in set(tails)}
    return np.array([known[tail] for tail in tails], dtype=np.int64), at


def _seconds(tail: str) -> int:
    found = _OFFSET.search(tail)
    assert found is not None
    size = int(found[2]) * 3600 + int(found[3]) * 60
    return size if found[1] == "+" else -size


def _by_offsets(offsets: Ints, stamps: Ints) -> str:
    """A zone that has these offsets at these instants."""
    each = np.unique(offsets)
    if len(each) == 1:
        return _fixed(abs(int(each[0])), "+" if each[0] >= 0 else "-")
    for name in (*ZONES, "America/Chicago", "America/Denver", "America/Los_Angeles", "Australia/Adelaide"):
        if ((Zone(name).local(stamps) - stamps) == offsets * SECOND).all():
            return name
    return "UTC"


def _by_traces(readings: Ints, size: int) -> str:
    """The zone whose skipped readings are the ones that are missing, else UTC."""
    there = np.unique(readings)
    if len(there) < 3:
        return "UTC"
    found: dict[str, int] = {}
    for name in ZONES:
        zone = Zone(name)
        gap = np.flatnonzero(np.diff(there) > size)
        missing = there[gap] + size
        _, never = zone.doubtful(missing)
        skipped = int((never & (np.diff(there)[gap] <= HOUR + size)).sum())
        _, kept = zone.doubtful(there)
        if skipped >= FEWEST_CHANGES and not kept.any():
            found[name] = skipped
    return max(found, key=lambda name: found[name]) if found else "UTC"


def calendar_seasons(every: str) -> dict[str, tuple[int, str | int]]:
    """The seasons that clock and calendar name for a cadence.

    Returns:
        Name to the length in whole steps, and as a rule file writes it (a length in time, or steps); empty for an
        irregular feed.
    """
    length = parse_length(every)
    found: dict[str, tuple[int, str | int]] = {}
    if length.kind == "fixed":
        per_day = DAY / length.size
        if HOUR % length.size == 0 and HOUR // length.size >= 4:
            found["hour"] = HOUR // length.size, "1h"
        if per_day == int(per_day) and per_day >= 2:
            found["day"] = int(per_day), "1D"
        if 7 * per_day == int(7 * per_day):
            found["week"] = int(7 * per_day), "7D"
        steps = round(YEAR * per_day)
        found["year"] = steps, steps
    elif length.kind == "days":
        if 7 % length.size == 0 and length.size < 7:
            found["week"] = 7 // length.size, "7D"
        steps = round(YEAR / length.size)
        found["year"] = steps, steps
    elif length.kind == "business":
        if length.size == 1:
            found["week"] = 5, 5
            found["year"] = 261, 261
    elif length.kind == "months" and 12 % length.size == 0 and length.size < 12:
        found["year"] = 12 // length.size, 12 // length.size
    return {name: told for name, told in found.items() if told[0] >= 2}
