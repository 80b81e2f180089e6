"""A source cut at a moment, and rows of two sources together; depends on ``stream`` and ``rows``."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from sercheck.intake.calendar import Cadence
from sercheck.intake.layout import Layout
from sercheck.intake.rows import Fingerprint, Rows
from sercheck.intake.stream import MemorySource, Piece, ReadForFingerprint, Source, open_feed
from sercheck.intake.stretch import Extent
from sercheck.intake.zone import EARLIEST, LATEST
from sercheck.serial.arrays import Ints

if TYPE_CHECKING:
    from sercheck.intake.stream import Given


def window(given: Given, layout: Layout, cadence: Cadence, first: int, before: int = LATEST) -> Source | None:
    """The rows of a feed in a window (see ``cut``); a database is asked for no more than it."""
    whole = first <= EARLIEST and before >= LATEST
    return cut(open_feed(given, layout, between=None if whole else (first, before)), cadence, first, before)


def cut(source: Source | None, cadence: Cadence, first: int, before: int = LATEST) -> Source | None:
    """A source without the rows before ``first`` and from ``before`` on (nanoseconds UTC); None when nothing is left.

    Args:
        source: rows in memory or a stream; None gives None.
        cadence: the anchored cadence.
        first: rows before are left out.
        before: rows at or after are left out; by default none.
    """
    if source is None or (first <= EARLIEST and before >= LATEST):
        return source
    if isinstance(source, MemorySource):
        rows = _between(source.rows(), first, before)
        if len(rows) == len(source.rows()):
            return source if len(rows) else None
        return MemorySource(rows, source.layout, source.paths) if len(rows) else None
    whole = source.extent(cadence)
    return _Cut(source, first, before) if whole.last >= first and whole.first < before else None


def _between(rows: Rows, first: int, before: int) -> Rows:
    inside = (rows.stamps >= first) & (rows.stamps < before)
    return rows if inside.all() else compact(rows.take(inside))


class _Cut(ReadForFingerprint):
    """A stream without its rows before one moment and from another on."""

    def __init__(self, whole: Source, first: int, before: int) -> None:
        self._whole, self._first, self._before = whole, first, before
        self.layout, self.paths = whole.layout, whole.paths

    def sample(self) -> Ints:
        return self._whole.sample()

    def extent(self, cadence: Cadence) -> Extent:
        whole = self._whole.extent(cadence)
        inside = replace(whole, first=max(whole.first, self._first), last=min(whole.last, self._before - 1))
        if cadence.irregular:
            return inside
        ends = cadence.stamp_of(cadence.index_of(np.array([inside.first, inside.last]))[0])
        first = int(ends[0]) if ends[0] >= inside.first else int(ends[0]) + cadence.step
        return replace(inside, first=min(first, int(ends[1])), last=int(ends[1]))

    def blocks(self) -> Iterator[Rows]:
        counted = Fingerprint(self.layout.values)
        for rows in self._whole.blocks():
            inside = _between(rows, self._first, self._before)
            if len(inside):
                counted.add(inside)
                yield inside
        self._fingerprint = counted.text()

    def rows(self) -> Rows:
        return _between(self._whole.rows(), self._first, self._before)

    def pieces(self) -> Sequence[Piece] | None:
        whole = self._whole.pieces()
        return None if whole is None else [_CutPiece(piece, self._first, self._before) for piece in whole]


@dataclass(frozen=True)
class _CutPiece:
    """A piece without its rows before one moment and from another on."""

    whole: Piece
    first: int
    before: int

    def rows(self) -> Rows:
        return _between(self.whole.rows(), self.first, self.before)


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
