"""A source cut at a moment, and rows of two sources together; depends on ``stream`` and ``rows``."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace

import numpy as np

from sercheck.errors import BatchError
from sercheck.intake.calendar import Cadence
from sercheck.intake.rows import Fingerprint, Rows
from sercheck.intake.stream import MemorySource, Source
from sercheck.intake.stretch import Extent
from sercheck.intake.zone import EARLIEST
from sercheck.serial.arrays import Ints


def cut(source: Source | None, first: int) -> Source | None:
    """A source without the rows before ``first``; None when nothing is left."""
    if source is None or first <= EARLIEST:
        return source
    if isinstance(source, MemorySource):
        rows = source.rows()
        late = rows.stamps >= first
        if late.all():
            return source
        return MemorySource(compact(rows.take(late)), source.layout, source.paths) if late.any() else None
    return _Since(source, first)


class _Since(Source):
    """A stream without its rows before a moment."""

    def __init__(self, whole: Source, first: int) -> None:
        self._whole, self._first = whole, first
        self.layout, self.paths = whole.layout, whole.paths
        self._fingerprint: str | None = None

    @property
    def fingerprint(self) -> str:
        if self._fingerprint is None:
            for _ in self.blocks():
                pass
        return str(self._fingerprint)

    def sample(self) -> Ints:
        return self._whole.sample()

    def extent(self, cadence: Cadence) -> Extent:
        whole = self._whole.extent(cadence)
        if whole.last < self._first:
            since = np.datetime64(self._first, "ns").astype("datetime64[s]")
            raise BatchError("the history", f"no row since {since}Z", "rows of the time that teaches")
        return replace(whole, first=max(whole.first, self._first), low=max(whole.low, self._first))

    def blocks(self) -> Iterator[Rows]:
        counted = Fingerprint(self.layout.values)
        for rows in self._whole.blocks():
            late = compact(rows.take(rows.stamps >= self._first))
            if len(late):
                counted.add(late)
                yield late
        self._fingerprint = counted.text()

    def rows(self) -> Rows:
        whole = self._whole.rows()
        return compact(whole.take(whole.stamps >= self._first))


def both(one: Rows, other: Rows) -> Rows:
    """Rows of both, series by series, those of the first before those of the other."""
    names = np.array(sorted({*one.keys.tolist(), *other.keys.tolist()}), dtype=object)
    numbers = {name: number for number, name in enumerate(names)}
    codes = [
        np.array([numbers[name] for name in rows.keys.tolist()], dtype=np.int32)[rows.codes] for rows in (one, other)
    ]
    return Rows(
        names,
        np.concatenate(codes),
        np.concatenate([one.stamps, other.stamps]),
        {name: np.concatenate([one.values[name], other.values[name]]) for name in one.values},
    ).by_series()


def compact(rows: Rows) -> Rows:
    """The same rows with only the series that have one."""
    present = np.bincount(rows.codes, minlength=len(rows.keys)) > 0
    if present.all():
        return rows
    place = (np.cumsum(present) - 1).astype(np.int32)
    return Rows(rows.keys[present], place[rows.codes], rows.stamps, rows.values)
