"""Parquet files of which each has series of its own, in whatever order its rows are; depends on ``sorted_parquet``."""

from __future__ import annotations

from collections.abc import Iterator
from functools import cached_property
from itertools import groupby
from pathlib import Path

import numpy as np

from sercheck.intake.calendar import Cadence
from sercheck.intake.cells import join_names, to_names
from sercheck.intake.layout import Layout
from sercheck.intake.parquet import parquet_file
from sercheck.intake.paths import told
from sercheck.intake.rows import Rows
from sercheck.intake.sorted_parquet import BLOCK_ROWS, Group, KeyRange, SortedParquet
from sercheck.serial.arrays import Ints


class WholeFiles(SortedParquet):
    """Several files, a block each: no series is in two of them."""

    series = 1

    @classmethod
    def recognise(
        cls, paths: list[Path], layout: Layout, cadence: Cadence, block_rows: int = BLOCK_ROWS
    ) -> WholeFiles | None:
        """The files as a stream when together they have more rows than one block and their keys show them apart.

        The keys are read for it, and no more than those of two files where each holds all series.
        """
        if not layout.series or len(paths) < 2:
            return None
        groups: list[Group] = []
        for path in paths:
            with told(path), parquet_file(path, layout) as file:
                counts = [file.metadata.row_group(number).num_rows for number in range(file.num_row_groups)]
            groups += [Group(path, number, rows, None, None) for number, rows in enumerate(counts) if rows]
        total = sum(group.rows for group in groups)
        if total <= block_rows or {group.path for group in groups} != set(paths):
            return None
        seen: set[str] = set()
        for path in paths:
            own = keys_of(path, layout)
            if not own.isdisjoint(seen):
                return None
            seen |= own
        files = cls(groups, layout, cadence, block_rows)
        files.series = max(1, len(seen))
        return files

    @cached_property
    def per_series(self) -> float:
        """Rows of a series, on average."""
        return sum(group.rows for group in self.groups) / self.series

    @cached_property
    def _by_file(self) -> list[list[Group]]:
        return [list(groups) for _, groups in groupby(self.groups, key=lambda group: group.path)]

    def some_stamps(self) -> Ints:
        """Stamps of the first, the middle and the last row group of the first and of the last file."""
        chosen = []
        for groups in (self._by_file[0], self._by_file[-1]):
            chosen += [groups[place] for place in sorted({0, len(groups) // 2, len(groups) - 1})]
        return np.concatenate(list(self.stamps(chosen)))

    def blocks(self) -> Iterator[Rows]:
        """The rows of each file."""
        for piece in self.pieces():
            yield piece.rows()

    def pieces(self) -> list[KeyRange]:
        """A piece for each file."""
        return [KeyRange(tuple(groups), self.layout, self.cadence, None, None) for groups in self._by_file]


def keys_of(path: Path, layout: Layout) -> set[str]:
    """Names of the series in a file."""
    columns = list(layout.series)
    found: set[str] = set()
    with told(path), parquet_file(path, layout) as file:
        for number in range(file.num_row_groups):
            table = file.read_row_group(number, columns=columns)
            if len(columns) == 1:  # grouping loads a query engine, which one column does not need
                once = [table.column(0).unique()]
            else:
                once = [column.combine_chunks() for column in table.group_by(columns).aggregate([]).columns]
            parts = [to_names(keys, f"{path}, column {name}") for keys, name in zip(once, columns, strict=True)]
            found.update(join_names(parts)[0].tolist())
    return found
