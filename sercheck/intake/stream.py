"""The front door: a feed's rows as a source of blocks, in memory or by row groups of sorted Parquet; then its grids."""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Protocol

import numpy as np

from sercheck.grid import Grid
from sercheck.intake import sorted_parquet
from sercheck.intake.assemble import grids, planned_grids
from sercheck.intake.build import Chunk, must_have_stamps, to_rows
from sercheck.intake.calendar import Cadence
from sercheck.intake.databases import DatabaseRows, is_source, named, read_rows
from sercheck.intake.files import read_file
from sercheck.intake.frames import frame_chunk
from sercheck.intake.layout import Layout
from sercheck.intake.pairs import aligned, places_of
from sercheck.intake.paths import expand, kind_of
from sercheck.intake.rows import Fingerprint, Rows
from sercheck.intake.sorted_parquet import SortedParquet
from sercheck.intake.stretch import Extent, Plan, extent, fences, plan, span
from sercheck.intake.whole_files import WholeFiles
from sercheck.intake.zone import NOT_A_STAMP
from sercheck.serial.arrays import Ints

if TYPE_CHECKING:
    import pandas as pd

    Given = str | Path | Sequence[str | Path] | pd.DataFrame | DatabaseRows


class Piece(Protocol):
    """A part of a feed that any process can read by itself, each of its series whole; it can be sent to one."""

    def rows(self) -> Rows:
        """Its rows, none perhaps."""


class Source(ABC):
    """The rows of a batch or a history."""

    layout: Layout
    paths: tuple[str, ...]

    @property
    @abstractmethod
    def fingerprint(self) -> str:
        """Fingerprint of the content; of a stream once all blocks were read (else it is read for it)."""

    @abstractmethod
    def sample(self) -> Ints:
        """Some stamps, nanoseconds UTC, spread over the feed."""

    @abstractmethod
    def extent(self, cadence: Cadence) -> Extent:
        """Where the feed lies in time, on the anchored cadence."""

    @abstractmethod
    def blocks(self) -> Iterator[Rows]:
        """All rows, each series whole in one block."""

    @abstractmethod
    def rows(self) -> Rows:
        """All rows at once."""

    def pieces(self) -> Sequence[Piece] | None:
        """What ``blocks`` yields, in its order, to be read elsewhere; None where only this process can read it."""
        return None


class MemorySource(Source):
    """Rows held in memory."""

    def __init__(self, rows: Rows, layout: Layout, paths: tuple[str, ...] = ()) -> None:
        self._rows, self.layout, self.paths = rows, layout, paths
        self._fingerprint: str | None = None

    @property
    def fingerprint(self) -> str:
        if self._fingerprint is None:
            whole = Fingerprint(self.layout.values)
            whole.add(self._rows)
            self._fingerprint = whole.text()
        return self._fingerprint

    def sample(self) -> Ints:
        return self._rows.stamps

    def extent(self, cadence: Cadence) -> Extent:
        return extent(self._rows, cadence)

    def blocks(self) -> Iterator[Rows]:
        yield self._rows

    def rows(self) -> Rows:
        return self._rows


class ReadForFingerprint(Source):
    """A source that knows its fingerprint once ``blocks`` came to its end, which sets it."""

    _fingerprint: str | None = None

    @property
    def fingerprint(self) -> str:
        if self._fingerprint is None:
            for _ in self.blocks():
                pass
        return str(self._fingerprint)

    def was_read(self, fingerprint: Fingerprint) -> None:
        """All pieces were read elsewhere, and this is what their content is."""
        self._fingerprint = fingerprint.text()


class StreamSource(ReadForFingerprint):
    """Parquet sorted by key, read by row groups; no more than a block of series is held."""

    def __init__(self, files: SortedParquet, layout: Layout, paths: tuple[str, ...]) -> None:
        self._files, self.layout, self.paths = files, layout, paths
        self._sample: Ints | None = None

    def sample(self) -> Ints:
        if self._sample is None:
            self._sample = self._files.some_stamps()
            if not (self._sample != NOT_A_STAMP).any():
                self._sample = np.concatenate(list(self._files.stamps()))
        return self._sample

    def extent(self, cadence: Cadence) -> Extent:
        low, high = fences(self.sample(), cadence.step)
        per_series = self._files.per_series
        ends = self._files.ends()
        if ends is not None and low <= ends[0] and ends[1] <= high:
            stamps = np.array(ends, dtype=np.int64)
            if cadence.irregular or cadence.index_of(stamps)[1].all():
                return Extent(ends[0], ends[1], low, high, per_series)
        parts = [span(stamps, cadence, low, high, per_series) for stamps in self._files.stamps()]
        real = [part for part in parts if part.last > low] or parts
        return Extent(min(p.first for p in real), max(p.last for p in real), low, high, per_series)

    def blocks(self) -> Iterator[Rows]:
        whole = Fingerprint(self.layout.values)
        for rows in self._files.blocks():
            whole.add(rows)
            yield rows
        self._fingerprint = whole.text()

    def rows(self) -> Rows:
        return to_rows(self._files.chunks(), self._files.cadence)

    def pieces(self) -> Sequence[Piece]:
        return self._files.pieces()


def open_feed(
    given: Given, layout: Layout, block_rows: int | None = None, between: tuple[int, int] | None = None
) -> Source:
    """Open a feed.

    Args:
        given: a file, several, a glob, a DataFrame, or rows of a database (``db:NAME?table=...``,
            ``sercheck.rows``). Parquet of more than ``block_rows`` rows whose row groups are
            sorted by key, or of whose files each has series of its own, is streamed; everything else is read into
            compact columns (20 bytes a row and 8 for every further value column).
        layout: the feed's columns and clocks.
        block_rows: rows of a streamed block, about (default ``BLOCK_ROWS``).
        between: a window, nanoseconds UTC, that a database is asked for; what comes may be more, and files come whole.

    Raises:
        BatchError: the feed cannot be read or placed in time; the sentence says where and why.
    """
    cadence = Cadence(layout.every, layout.timezone)
    if isinstance(given, DatabaseRows) or any(map(is_source, _each(given))):
        return _with_databases(given, layout, cadence, between)
    if not isinstance(given, str | Path | Sequence):
        rows = to_rows([frame_chunk(given, layout, cadence)], cadence)
        must_have_stamps(rows, layout, "DataFrame")
        return MemorySource(rows, layout)
    files = expand(given)
    paths = tuple(map(str, files))
    if all(kind_of(path)[0] == "parquet" for path in files) and not cadence.irregular:
        apart = files_apart(files, layout, cadence, block_rows)
        if apart is not None:
            return StreamSource(apart, layout, paths)
    rows = to_rows([chunk for path in files for chunk in read_file(path, layout, cadence)], cadence)
    must_have_stamps(rows, layout, paths[0] if len(paths) == 1 else f"{paths[0]} and {len(paths) - 1} more")
    return MemorySource(rows, layout, paths)


def files_apart(
    files: list[Path], layout: Layout, cadence: Cadence, block_rows: int | None = None
) -> SortedParquet | None:
    """Parquet files of which blocks of whole series can be read one by one; None where that does not pay or work."""
    rows = sorted_parquet.BLOCK_ROWS if block_rows is None else block_rows
    return SortedParquet.recognise(files, layout, cadence, rows) or WholeFiles.recognise(files, layout, cadence, rows)


def _each(given: Given) -> list[str | Path]:
    return [given] if isinstance(given, str | Path) else list(given) if isinstance(given, list | tuple) else []


def _with_databases(given: Given, layout: Layout, cadence: Cadence, between: tuple[int, int] | None) -> Source:
    """Rows of databases, and of files where both are named, in the order they are named."""
    chunks: list[Chunk] = []
    paths: list[str] = []
    everything: list[str | Path | DatabaseRows] = [given] if isinstance(given, DatabaseRows) else [*_each(given)]
    for one in everything:
        if isinstance(one, DatabaseRows) or is_source(one):
            asked = one if isinstance(one, DatabaseRows) else named(str(one))
            chunks += read_rows(asked, layout, cadence, between)
            paths.append(asked.place)
        else:
            files = expand([one])
            chunks += [chunk for path in files for chunk in read_file(path, layout, cadence)]
            paths += map(str, files)
    rows = to_rows(chunks, cadence)
    if between is None:
        must_have_stamps(rows, layout, ", ".join(paths))
    return MemorySource(rows, layout, tuple(paths))


def feed_cadence(batch: Source, history: Source | None, layout: Layout) -> Cadence:
    """The feed's cadence, anchored at history's stamps, else at the batch's."""
    return Cadence(layout.every, layout.timezone).anchored((history or batch).sample())


def feed_grids(
    batch: Source,
    history: Source | None,
    layout: Layout,
    need_steps: int | None = None,
    block_cells: int | None = None,
) -> Iterator[Grid]:
    """Grids of a feed, block by block (see ``assemble.grids``), with flat memory where a source is a stream.

    With a history the batch is held in memory (one batch is small beside it) and history is streamed.
    """
    cadence = feed_cadence(batch, history, layout)
    if cadence.irregular or (isinstance(batch, MemorySource) and isinstance(history, MemorySource | None)):
        past = None if history is None else history.rows()
        yield from grids(batch.rows(), past, cadence, layout, need_steps, block_cells)
        return
    if history is None:
        laid = plan(batch.extent(cadence), None, cadence, layout, need_steps)
        for rows in batch.blocks():
            yield from planned_grids(rows, None, laid, block_cells)
    else:
        rows, laid = plan_beside(batch, history, cadence, layout, need_steps)
        yield from _beside(rows, history, laid, block_cells)


def plan_beside(
    batch: Source, history: Source, cadence: Cadence, layout: Layout, need_steps: int | None = None
) -> tuple[Rows, Plan]:
    """The batch's rows by series, and the axis that they share with a history that is read block by block."""
    rows, past = batch.rows().by_series(), history.extent(cadence)
    return rows, plan(extent(rows, cadence, past), past, cadence, layout, need_steps)


def _beside(batch: Rows, history: Source, laid: Plan, block_cells: int | None) -> Iterator[Grid]:
    """History's blocks, each with the batch's rows of the same series; then the series that only the batch knows."""
    left = np.ones(len(batch.keys), dtype=bool)
    for past in history.blocks():
        left[known(past.keys, batch.keys)] = False
        yield from planned_grids(aligned(batch, past.keys), past, laid, block_cells)
    if left.any():
        yield from planned_grids(aligned(batch, batch.keys[left]), None, laid, block_cells)


def known(names: np.ndarray, among: np.ndarray) -> Ints:
    """Places of the names that are among others."""
    place = places_of(names, among)
    return place[place >= 0]

