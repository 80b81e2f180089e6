"""Wall clocks: many stamps at once between UTC and the clock of a zone; depends on numpy and ``errors``."""

from __future__ import annotations

from datetime import UTC, datetime
from functools import lru_cache
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

import numpy as np

from sercheck.errors import UsageError
from sercheck.serial.arrays import Bools, Ints

SECOND = 1_000_000_000
DAY = 86_400 * SECOND
NOT_A_STAMP = int(np.iinfo(np.int64).min)
"""Stands for a stamp that could not be read, as in numpy and Arrow."""
EARLIEST = int(np.datetime64("1678-01-01", "ns").astype(np.int64))
LATEST = int(np.datetime64("2262-01-01", "ns").astype(np.int64))
"""Whole years that int64 nanoseconds can hold; a stamp outside cannot be placed."""


@lru_cache(maxsize=256)
def _zone(name: str) -> ZoneInfo:
    try:
        return ZoneInfo(name)
    except (ZoneInfoNotFoundError, ValueError, OSError) as error:
        raise UsageError(
            "timezone", f"unknown zone {name!r}", "an IANA zone such as Europe/Oslo", "Look for a slip of spelling."
        ) from error


def _offset(zone: ZoneInfo, second: int) -> int:
    shift = datetime.fromtimestamp(second, UTC).astimezone(zone).utcoffset()
    return int(shift.total_seconds()) if shift is not None else 0


@lru_cache(maxsize=64)
def _changes(name: str, first_year: int, last_year: int) -> tuple[Ints, Ints]:
    """Instants at which the zone's offset changes (nanoseconds UTC) and the offsets between them (one more).

    Found by looking at every day and halving the days on which the offset moved: no zone changes twice within a day.
    """
    zone = _zone(name)
    start = int(np.datetime64(f"{first_year:04d}-01-01", "s").astype(np.int64)) - 2 * 86_400
    end = int(np.datetime64(f"{last_year + 1:04d}-01-01", "s").astype(np.int64)) + 2 * 86_400
    offsets = [_offset(zone, second) for second in range(start, end, 86_400)]
    moved = [day for day in range(1, len(offsets)) if offsets[day] != offsets[day - 1]]
    instants = []
    for day in moved:
        low, high = start + (day - 1) * 86_400, start + day * 86_400
        while high - low > 1:
            middle = (low + high) // 2
            low, high = (middle, high) if _offset(zone, middle) == offsets[day - 1] else (low, middle)
        instants.append(high)
    kept = [offsets[0], *(offsets[day] for day in moved)]
    return np.array(instants, dtype=np.int64) * SECOND, np.array(kept, dtype=np.int64) * SECOND


class Zone:
    """The clock of one IANA zone.

    Raises:
        UsageError: no such zone.
    """

    def __init__(self, name: str) -> None:
        self.name = name
        _zone(name)
        self.is_utc = name in ("UTC", "Etc/UTC", "Zulu", "GMT", "Etc/GMT")

    def _table(self, stamps: Ints) -> tuple[Ints, Ints]:
        readable = stamps[(stamps > EARLIEST) & (stamps < LATEST)]
        if readable.size == 0:
            return _changes(self.name, 2000, 2000)
        low, high = (int(np.datetime64(int(x), "ns").astype("datetime64[Y]").astype(np.int64)) + 1970
                     for x in (readable.min(), readable.max()))  # fmt: skip
        return _changes(self.name, low, high)

    def local(self, stamps: Ints) -> Ints:
        """What the wall clock shows at each instant, as nanoseconds since 1970-01-01 00:00 on that clock."""
        if self.is_utc:
            return stamps
        instants, offsets = self._table(stamps)
        return stamps + offsets[np.searchsorted(instants, stamps, side="right")]

    def doubtful(self, local: Ints) -> tuple[Bools, Bools]:
        """Wall-clock readings that come twice (autumn), and those that never come (spring)."""
        if self.is_utc:
            none = np.zeros(local.shape, dtype=bool)
            return none, none
        before, after, offsets = self._sides(local)
        return offsets[after] < offsets[before], offsets[after] > offsets[before]

    def utc(self, local: Ints, second: Bools | None = None) -> Ints:
        """The instant at which the wall clock shows ``local``.

        Args:
            local: wall-clock readings in nanoseconds.
            second: where the reading comes twice, take the later instant; None takes the first everywhere.

        Returns:
            Nanoseconds UTC. A reading that never comes gives the instant that the clock would have had it not been
            moved (an hour later on the wall).
        """
        if self.is_utc:
            return local
        before, after, offsets = self._sides(local)
        return local - offsets[before if second is None else np.where(second, after, before)]

    def _sides(self, local: Ints) -> tuple[Ints, Ints, Ints]:
        instants, offsets = self._table(local)
        shown = np.stack([instants + offsets[:-1], instants + offsets[1:]])
        before = np.searchsorted(shown.max(axis=0), local, side="right")
        after = np.searchsorted(shown.min(axis=0), local, side="right")
        return before, after, offsets
