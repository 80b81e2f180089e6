"""Parquet whose row groups are sorted by key, read series by series with flat memory; depends on ``parquet``."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from sercheck.intake import arrow
from sercheck.intake.build import Chunk, to_rows
from sercheck.intake.calendar import Cadence
from sercheck.intake.layout import Layout
from sercheck.intake.parquet import parquet_file, table_chunk
from sercheck.intake.paths import told
from sercheck.intake.rows import Rows
from sercheck.intake.stamps import ReadStamps, read_stamps, resolve
from sercheck.intake.zone import NOT_A_STAMP
from sercheck.serial.arrays import Ints

if TYPE_CHECKING:
    import pyarrow as pa

BLOCK_ROWS = 1_000_000
"""Rows of a block, about (ours: some 30 MB of compact columns, and as long as the usual largest row group)."""


@dataclass(frozen=True)
class Group:
    """One row group: its file and number there, its rows, and the smallest and largest key in it."""

    path: Path
    number: int
    rows: int
    least: Any
    most: Any


class SortedParquet:
    """Files that hold one sequence of series, in order of key."""

    def __init__(self, groups: list[Group], layout: Layout, cadence: Cadence, block_rows: int) -> None:
        self.groups, self.layout, self.cadence, self.block_rows = groups, layout, cadence, block_rows

    @classmethod
    def recognise(
        cls, paths: list[Path], layout: Layout, cadence: Cadence, block_rows: int = BLOCK_ROWS
    ) -> SortedParquet | None:
        """The files as a stream when they have more rows than one block and their statistics show them sorted.

        Raises:
            BatchError: a file is no Parquet or lacks a column.
        """
        if not layout.series:
            return None
        groups: list[Group] = []
        for path in paths:
            with told(path):
                found = _groups(path, layout)
            if found is None:
                return None
            groups += found
        in_order = all(_not_after(one.most, other.least) for one, other in pairwise(groups))
        if len(groups) < 2 or sum(group.rows for group in groups) <= block_rows or not in_order:
            return None
        return cls(groups, layout, cadence, block_rows)

    @cached_property
    def per_series(self) -> float:
        """Rows of a series, about: those of a first group over its series."""
        key = list(self.layout.series)
        table = next(self._tables([self.groups[0]], key))
        # grouping loads a query engine and with it pandas, which one column does not need
        found = table.column(0).unique() if len(key) == 1 else table.group_by(key).aggregate([])
        return self.groups[0].rows / max(1, len(found))

    def some_stamps(self) -> Ints:
        """Stamps of the first, the middle and the last row group."""
        places = sorted({0, len(self.groups) // 2, len(self.groups) - 1})
        return np.concatenate(list(self.stamps([self.groups[place] for place in places])))

    def stamps(self, groups: list[Group] | None = None) -> Iterator[Ints]:
        """Stamps of each row group, nanoseconds UTC (an hour that comes twice is read as the first)."""
        name = self.layout.time
        for table in self._tables(self.groups if groups is None else groups, [name]):
            parts = [read_stamps(part, self.cadence, name) for part in table.column(name).chunks]
            codes = [np.arange(len(part.stamps)) for part in parts]
            yield np.concatenate([self._resolved(part, code) for part, code in zip(parts, codes, strict=True)])

    def _resolved(self, read: ReadStamps, codes: np.ndarray) -> Ints:
        return resolve(read, codes, self.cadence.zone, whole_days=self.cadence.daily_or_longer)

    def ends(self) -> tuple[int, int] | None:
        """First and last stamp by the statistics in the footers, or None where these do not tell."""
        import pyarrow as pa

        found: list[Any] = []
        kind = None
        for path in dict.fromkeys(group.path for group in self.groups):
            with told(path), parquet_file(path, self.layout) as file:
                kind = file.schema_arrow.field(self.layout.time).type
                place = file.schema_arrow.names.index(self.layout.time)
                if not (pa.types.is_timestamp(kind) or pa.types.is_date(kind)):
                    return None
                for number in range(file.num_row_groups):
                    statistics = file.metadata.row_group(number).column(place).statistics
                    if statistics is None or not statistics.has_min_max:
                        return None
                    found += [statistics.min, statistics.max]
        ends = pa.array([min(found), max(found)], kind)
        stamps = self._resolved(read_stamps(ends, self.cadence, self.layout.time), np.arange(2))
        return None if (stamps == NOT_A_STAMP).any() else (int(stamps[0]), int(stamps[1]))

    def blocks(self) -> Iterator[Rows]:
        """Rows of whole series, in order of key; a series that runs over into the next row group waits for it."""
        waiting: list[pa.Table] = []
        cuts = set(self._cuts)
        tables = self._tables(self.groups, list(self.layout.needed))
        for place, table in enumerate(tables, start=1):
            waiting.append(table)
            if place in cuts:
                ready, waiting = self._split(waiting, self.groups[place] if place < len(self.groups) else None)
                yield self._rows(ready)

    @cached_property
    def _cuts(self) -> list[int]:
        """How many row groups are read when a block is complete: its rows have keys below the least of the next group.

        A block has ``block_rows`` rows or more; a key that fills row groups to their ends leaves nothing to cut.
        """
        cuts: list[int] = []
        size, done = 0, None
        for place, group in enumerate(self.groups[:-1], start=1):
            size += group.rows
            least = self.groups[place].least
            if size >= self.block_rows and least != (self.groups[0].least if done is None else done):
                cuts.append(place)
                size, done = 0, least
        return [*cuts, len(self.groups)]

    def pieces(self) -> list[KeyRange]:
        """What ``blocks`` yields, each to be read by itself; a row group that straddles two is read for both."""
        made = []
        bounds = [None, *(self.groups[cut].least for cut in self._cuts[:-1]), None]
        for low, cut, least, before in zip([0, *self._cuts], self._cuts, bounds, bounds[1:], strict=False):
            while low > 0 and self.groups[low - 1].most == least:  # its last rows belong to this block
                low -= 1  # noqa: PLW2901  the block begins earlier than its cut
            made.append(KeyRange(tuple(self.groups[low:cut]), self.layout, self.cadence, least, before))
        return made

    def chunks(self) -> list[Chunk]:
        """All rows, row group after row group."""
        tables = self._tables(self.groups, list(self.layout.needed))
        return [table_chunk(table, self.layout, self.cadence, str(self.groups[0].path)) for table in tables]

    def _rows(self, tables: list[pa.Table]) -> Rows:
        place = str(self.groups[0].path)
        return to_rows([table_chunk(table, self.layout, self.cadence, place) for table in tables], self.cadence)

    def between(self, least: Any, before: Any) -> Rows:
        """The rows whose key is ``least`` or more and smaller than ``before`` (None: no bound)."""
        parts = []
        for table in self._tables(self.groups, list(self.layout.needed)):
            keys = table.column(self.layout.series[0])
            inside = np.ones(table.num_rows, dtype=bool) if least is None else ~_before(keys, least)
            if before is not None:
                inside &= _before(keys, before)
            if inside.any():
                parts.append(table if inside.all() else table.filter(arrow.mask(inside)))
        return self._rows(parts)

    def _split(self, tables: list[pa.Table], after: Group | None) -> tuple[list[pa.Table], list[pa.Table]]:
        """Rows of series that are complete, and those whose key may come again in the next group."""
        if after is None:
            return tables, []
        ready: list[pa.Table] = []
        waiting: list[pa.Table] = []
        for table in tables:
            done = _before(table.column(self.layout.series[0]), after.least)
            if done.all():
                ready.append(table)
                continue
            first = int(np.argmin(done))
            if not done[first:].any():  # sorted inside the group as well: no copy
                ready += [table.slice(0, first)] if first else []
                waiting.append(table.slice(first))
            else:
                ready.append(table.filter(arrow.mask(done)))
                waiting.append(table.filter(arrow.mask(~done)))
        return ready, waiting

    def _tables(self, groups: list[Group], columns: list[str]) -> Iterator[pa.Table]:
        opened: tuple[Path, Any] | None = None
        for group in groups:
            with told(group.path):
                if opened is None or opened[0] != group.path:
                    if opened is not None:
                        opened[1].close()
                    opened = (group.path, parquet_file(group.path, self.layout))
                table = opened[1].read_row_group(group.number, columns=columns)
            yield table
        if opened is not None:
            opened[1].close()


@dataclass(frozen=True)
class KeyRange:
    """The rows of some row groups whose key is ``least`` or more and smaller than ``before`` (None: no bound)."""

    groups: tuple[Group, ...]
    layout: Layout
    cadence: Cadence
    least: Any
    before: Any

    def rows(self) -> Rows:
        """The rows, each series whole."""
        files = SortedParquet(list(self.groups), self.layout, self.cadence, 0)
        return files.between(self.least, self.before)


def _groups(path: Path, layout: Layout) -> list[Group] | None:
    """The row groups with the range of their first key column; None where the footer does not tell."""
    with parquet_file(path, layout) as file:
        metadata = file.metadata
        place = file.schema_arrow.names.index(layout.series[0])
        if metadata.num_columns != len(file.schema_arrow.names):  # nested columns shift the places
            return None
        found = []
        for number in range(metadata.num_row_groups):
            group = metadata.row_group(number)
            statistics = group.column(place).statistics
            if statistics is None or not statistics.has_min_max or statistics.null_count:
                return None
            found.append(Group(path, number, group.num_rows, statistics.min, statistics.max))
    return found


def _not_after(one: Any, other: Any) -> bool:
    return type(one) is type(other) and isinstance(one, str | int) and one <= other


def _before(column: pa.ChunkedArray, bound: Any) -> np.ndarray:
    """Rows whose key is smaller, compared once a distinct key."""
    import pyarrow as pa
    import pyarrow.compute as pc

    parts = []
    for part in column.chunks:
        if pa.types.is_dictionary(part.type):
            smaller = np.array([word < bound for word in part.dictionary.to_pylist()], dtype=bool)
            parts.append(smaller[arrow.codes(part, -1)])
        else:
            parts.append(arrow.bools(pc.less(part, pa.scalar(bound, part.type))))
    return np.concatenate(parts) if parts else np.zeros(0, dtype=bool)
