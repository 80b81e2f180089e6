"""Parquet whose series run through several files, put together series by series by the workers of a cluster.

Every step is a pure function of its input, so what a lost worker had is made again. Depends on ``intake``.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Protocol

import numpy as np

from sercheck.intake.build import Chunk, must_have_stamps, to_rows
from sercheck.intake.calendar import Cadence
from sercheck.intake.layout import Layout
from sercheck.intake.parquet import group_chunk, parquet_file
from sercheck.intake.paths import told
from sercheck.intake.rows import Fingerprint, Rows
from sercheck.intake.stamps import resolve
from sercheck.intake.stream import Source
from sercheck.intake.stretch import SAMPLE, Extent, fences, within
from sercheck.intake.zone import NOT_A_STAMP
from sercheck.serial.arrays import Ints


@dataclass(frozen=True)
class Groups:
    """Row groups of one file: what one task reads."""

    path: Path
    numbers: tuple[int, ...]
    rows: int


class Submits(Protocol):
    """What is asked of a cluster."""

    def submit(self, function: Any, *args: Any) -> Any:
        """Begin a call; futures among its arguments (also in lists) are waited for."""

    def results(self, futures: Sequence[Any]) -> list[Any]:
        """Wait for calls."""


def row_groups(files: Sequence[Path], layout: Layout, block_rows: int) -> list[Groups]:
    """The row groups of files in order, about ``block_rows`` rows at a time."""
    found = []
    for path in files:
        with told(path), parquet_file(path, layout) as file:
            counts = [file.metadata.row_group(number).num_rows for number in range(file.num_row_groups)]
        first = 0
        for number in range(len(counts)):
            size = sum(counts[first : number + 1])
            if size >= block_rows or number == len(counts) - 1:
                found.append(Groups(path, tuple(range(first, number + 1)), size))
                first = number + 1
    return found


class Shuffled(Source):
    """Rows that lie in the memory of a cluster, in parts of neighbouring series.

    The place of the cadence's anchor and the fences of wild stamps are told from one stamp in so many over all files,
    as for rows in memory; an hour that comes twice is read as the first for that, and only for that.
    """

    def __init__(
        self, cluster: Submits, units: Sequence[Groups], layout: Layout, paths: tuple[str, ...], block_rows: int
    ) -> None:
        self._cluster, self.layout, self.paths = cluster, layout, paths
        self._cadence = Cadence(layout.every, layout.timezone)
        read = [cluster.submit(read_chunks, unit, layout, self._cadence) for unit in units]
        glances = cluster.results([cluster.submit(glance, chunks) for chunks in read])
        self.keys = np.array(sorted(set().union(*(names for names, _ in glances))), dtype=object)
        self._size = sum(unit.rows for unit in units)
        self._sample = self._some_stamps(read, [count for _, count in glances])
        self.edges = _edges(len(self.keys), max(1, -(-self._size // block_rows)))
        names = self.keys[self.edges[:-1]]
        split = [cluster.submit(split_chunks, chunks, names) for chunks in read]
        self.parts = [
            cluster.submit(assemble, [cluster.submit(pick, pieces, place) for pieces in split], self._cadence)
            for place in range(len(names))
        ]
        self._fingerprint: str | None = None
        if not (self._sample != NOT_A_STAMP).any():
            must_have_stamps(self.rows(), layout, paths[0] if len(paths) == 1 else f"{paths[0]} and others")

    def _some_stamps(self, read: list[Any], counts: list[int]) -> Ints:
        stride = 1 + sum(counts) // SAMPLE
        before = np.cumsum([0, *counts[:-1]])
        starts = (-before) % stride
        calls = [
            self._cluster.submit(some_stamps, chunks, int(start), stride, self._cadence)
            for chunks, start in zip(read, starts, strict=True)
        ]
        return np.concatenate(self._cluster.results(calls))

    @property
    def fingerprint(self) -> str:
        if self._fingerprint is None:
            whole = Fingerprint(self.layout.values)
            for mixed in self._cluster.results([self._cluster.submit(mixed_up, part) for part in self.parts]):
                whole.join(mixed)
            self._fingerprint = whole.text()
        return self._fingerprint

    def sample(self) -> Ints:
        return self._sample

    def extent(self, cadence: Cadence) -> Extent:
        low, high = fences(self._sample, cadence.step)
        found = self._cluster.results([self._cluster.submit(ends, part, cadence, low, high) for part in self.parts])
        on_grid, near = ([each[place] for each in found if each[place] is not None] for place in (0, 1))
        chosen = on_grid or near or [(low, low)]
        per_series = self._size / max(1, len(self.keys))
        return Extent(min(first for first, _ in chosen), max(last for _, last in chosen), low, high, per_series)

    def blocks(self) -> Iterator[Rows]:
        for part in self.parts:
            yield self._cluster.results([part])[0]

    def rows(self) -> Rows:
        return side_by_side(list(self.blocks()))

    def of_series(self, first: int, last: int) -> tuple[list[Any], int, int]:
        """Parts that hold the series ``first`` to ``last`` (exclusive) of all, and their places in these parts."""
        low = int(np.searchsorted(self.edges, first, side="right")) - 1
        high = int(np.searchsorted(self.edges, last, side="left"))
        return self.parts[low:high], first - int(self.edges[low]), last - int(self.edges[low])


def _edges(keys: int, parts: int) -> Ints:
    """Places at which so many names are cut into parts of equal size, the ends included."""
    return np.unique(np.linspace(0, keys, min(parts, keys) + 1).astype(np.int64))


def read_chunks(unit: Groups, layout: Layout, cadence: Cadence) -> list[Chunk]:
    """The rows of some row groups."""
    with told(unit.path), parquet_file(unit.path, layout) as file:
        return [group_chunk(file, number, layout, cadence, str(unit.path)) for number in unit.numbers]


def glance(chunks: Sequence[Chunk]) -> tuple[set[str], int]:
    """Names of the series, and how many stamps can be read (a reading that never was on the clock included)."""
    names = {str(name) for chunk in chunks for name in chunk.names}
    return names, sum(int((chunk.stamps.stamps != NOT_A_STAMP).sum()) for chunk in chunks)


def some_stamps(chunks: Sequence[Chunk], start: int, stride: int, cadence: Cadence) -> Ints:
    """Every so many-th readable stamp."""
    found = []
    for chunk in chunks:
        stamps = resolve(chunk.stamps, np.arange(len(chunk)), cadence.zone, whole_days=cadence.daily_or_longer)
        found.append(stamps[chunk.stamps.stamps != NOT_A_STAMP])
    return np.concatenate([np.zeros(0, dtype=np.int64), *found])[start::stride]


def split_chunks(chunks: Sequence[Chunk], firsts: np.ndarray) -> list[list[Chunk]]:
    """The rows of each part; ``firsts`` are the first names of the parts, in order."""
    pieces: list[list[Chunk]] = [[] for _ in firsts]
    for chunk in chunks:
        part = np.searchsorted(firsts, chunk.names, side="right") - 1
        order = np.argsort(part[chunk.codes], kind="stable")
        cuts = np.searchsorted(part[chunk.codes][order], np.arange(len(firsts) + 1))
        for place in np.unique(part).tolist():
            chosen = order[cuts[place] : cuts[place + 1]]
            if len(chosen):
                pieces[place].append(_taken(chunk, chosen))
    return pieces


def _taken(chunk: Chunk, rows: Ints) -> Chunk:
    """Some rows of a chunk, with only the names that they have."""
    used, codes = np.unique(chunk.codes[rows], return_inverse=True)
    values = {name: column[rows] for name, column in chunk.values.items()}
    return Chunk(chunk.names[used], codes.astype(np.int32), chunk.stamps.take(rows), values)


def pick(pieces: Sequence[list[Chunk]], place: int) -> list[Chunk]:
    """One part of a file."""
    return pieces[place]


def assemble(pieces: Sequence[Sequence[Chunk]], cadence: Cadence) -> Rows:
    """One part of all files, by series, rows in order of delivery."""
    return to_rows([chunk for piece in pieces for chunk in piece], cadence).by_series()


def ends(
    rows: Rows, cadence: Cadence, low: int, high: int
) -> tuple[tuple[int, int] | None, tuple[int, int] | None]:
    """First and last stamp between the fences: of those on the cadence, and of all; None where there is none."""
    near = within(rows.stamps, low, high)
    on_grid = cadence.index_of(rows.stamps)[1] & near
    chosen = [rows.stamps[flags] for flags in (on_grid, near)]
    first, last = ((int(s.min()), int(s.max())) if len(s) else None for s in chosen)
    return first, last


def mixed_up(rows: Rows) -> Fingerprint:
    """The fingerprint of some rows."""
    whole = Fingerprint(tuple(rows.values))
    whole.add(rows)
    return whole


def side_by_side(parts: Sequence[Rows]) -> Rows:
    """Parts of neighbouring series as one."""
    starts = np.cumsum([0, *(len(part.keys) for part in parts)])
    codes = [part.codes + np.int32(start) for part, start in zip(parts, starts, strict=False)]
    values = {name: np.concatenate([part.values[name] for part in parts]) for name in parts[0].values}
    return Rows(
        np.concatenate([part.keys for part in parts]),
        np.concatenate(codes),
        np.concatenate([part.stamps for part in parts]),
        values,
    )
