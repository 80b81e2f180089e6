"""Between a feed's archive and its rows: batches kept as tables by local day, history read back as a source of blocks.

Depends on ``intake`` and ``store.archive``.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from sercheck.intake import arrow
from sercheck.intake.calendar import Cadence
from sercheck.intake.layout import Layout
from sercheck.intake.paths import told
from sercheck.intake.rows import Fingerprint, Rows
from sercheck.intake.since import compact
from sercheck.intake.stream import MemorySource, ReadForFingerprint, Source
from sercheck.intake.stretch import Extent, extent, span, within
from sercheck.intake.zone import DAY, EARLIEST, LATEST
from sercheck.serial.arrays import Bools, Ints
from sercheck.store.archive import Archive, Log, Part, What
from sercheck.store.objects import opened_object, trouble
from sercheck.store.where import without_password

if TYPE_CHECKING:
    import pyarrow as pa

BLOCK_ROWS = 4_000_000
"""Rows of a block, about (ours: some 80 MB of compact columns; sixteen weeks of hours of 1,500 series)."""
SILENT = 366 * DAY
"""Silence of a feed after which a batch is rather stamped with a wrong year (ours)."""
OPEN_DAYS = 92
"""Days whose files are written at a time (ours: a quarter; a process may usually open 1,024 files)."""


def keep(
    archive: Archive,
    batch_id: str,
    fingerprint: str,
    blocks: Iterable[Rows],
    cadence: Cadence,
    what: What,
    between: tuple[int, int],
) -> int:
    """Keep the rows of a batch whose stamps lie between two instants (both included); how many they were.

    Of rows with one stamp the last delivered is kept; unreadable and wild stamps have no day to be kept under. A row of
    a daily or longer cadence is kept at the stamp of its step, so that a later one for the same step replaces it.
    """
    with archive.adding(batch_id, fingerprint, what) as adding:
        for rows in blocks:
            for day, table, first, last in _day_tables(tidied(rows, cadence, *between), cadence):
                adding.add(day, table, first, last)
    return adding.rows


def keep_history(
    archive: Archive, source: Source, cadence: Cadence, known: Log, between: tuple[int, int]
) -> tuple[int, int]:
    """Fill the archive from history, a quarter of days at a time; rows kept now, and rows that were there before.

    Killed in between, the quarters that were finished stay; a repeat adds the others.
    """
    first, last = (int(day) for day in cadence.days(np.array(between)))
    kept = there = 0
    for quarter in range(first // OPEN_DAYS, last // OPEN_DAYS + 1):
        begin, end = quarter * OPEN_DAYS, (quarter + 1) * OPEN_DAYS
        low, high = cadence.zone.utc(np.array([begin, end]) * DAY)
        batch_id = f"learned-{source.fingerprint}-{day_name(max(begin, first))}"
        before = known.states.get(batch_id)
        if before is not None:
            there += before.rows
            continue
        part = max(between[0], int(low)), min(between[1], int(high) - 1)
        kept += keep(archive, batch_id, source.fingerprint, source.blocks(), cadence, "released", part)
    return kept, there


def tidied(rows: Rows, cadence: Cadence, low: int, high: int) -> Rows:
    """Rows whose stamps lie between two instants, by series and stamp, the last delivered of each stamp."""
    stamps = rows.stamps
    if cadence.daily_or_longer:
        index, on_grid = cadence.index_of(stamps)
        stamps = np.where(on_grid, cadence.stamp_of(np.where(on_grid, index, 0)), stamps)
    near = within(stamps, low, high)
    rows = Rows(rows.keys, rows.codes, stamps, rows.values)
    rows = (rows if near.all() else rows.take(near)).by_series()
    return rows if _in_order(rows) else _each_once(rows, np.zeros(len(rows), dtype=np.int64))


def _in_order(rows: Rows) -> bool:
    codes, stamps = rows.codes, rows.stamps
    return bool(((codes[1:] > codes[:-1]) | ((codes[1:] == codes[:-1]) & (stamps[1:] > stamps[:-1]))).all())


def _each_once(rows: Rows, number: Ints) -> Rows:
    """Rows by series and stamp, of equal stamps the one with the largest number, then the last delivered."""
    codes, stamps = rows.codes, rows.stamps
    order = np.lexsort((number, stamps, codes))
    codes, stamps = codes[order], stamps[order]
    last = np.append((codes[1:] != codes[:-1]) | (stamps[1:] != stamps[:-1]), True)[: len(order)]
    return rows.take(order[last])


def day_name(day: int) -> str:
    """A local day since 1970 as 2026-01-12."""
    return str(np.datetime64(day, "D"))


def _day_tables(rows: Rows, cadence: Cadence) -> Iterator[tuple[str, pa.Table, int, int]]:
    days = cadence.days(rows.stamps)
    if len(days) == 0:
        return
    first = int(days.min())
    if (days == first).all():
        yield day_name(first), _table(rows), int(rows.stamps.min()), int(rows.stamps.max())
        return
    order = np.argsort(days - first, kind="stable")
    edges = np.flatnonzero(np.diff(days[order], prepend=first - 1))
    for begin, end in zip(edges, [*edges[1:], len(order)], strict=True):
        part = rows.take(order[begin:end])
        yield day_name(int(days[order[begin]])), _table(part), int(part.stamps.min()), int(part.stamps.max())


def _table(rows: Rows) -> pa.Table:
    """Rows as an Arrow table; only the series that have a row are named."""
    import pyarrow as pa

    present = np.bincount(rows.codes, minlength=len(rows.keys)) > 0
    place = (np.cumsum(present) - 1).astype(np.int32)
    names = arrow.texts(rows.keys[present])
    n = len(rows)

    def column(values: np.ndarray, kind: pa.DataType) -> pa.Array:
        return pa.Array.from_buffers(kind, n, [None, pa.py_buffer(np.ascontiguousarray(values))])

    series = pa.DictionaryArray.from_arrays(column(place[rows.codes], pa.int32()), names)
    columns = {"series": series, "stamp": column(rows.stamps, pa.timestamp("ns", "UTC"))}
    columns |= {value_column(name): column(values, pa.float64()) for name, values in rows.values.items()}
    return pa.table(columns)


def value_column(name: str) -> str:
    """The name of a value column in the archive, which no name of a feed's can meet with ``series`` or ``stamp``."""
    return f"value.{name}"


def archived(
    archive: Archive,
    layout: Layout,
    first: int,
    before: int,
    log: Log | None = None,
    block_rows: int = BLOCK_ROWS,
) -> Source | None:
    """The history that the archive holds from ``first`` to just before ``before`` (nanoseconds UTC); None for none.

    Only days, row groups and columns that are needed are read; above ``block_rows`` rows by blocks of series, with flat
    memory. The newest release wins where batches overlap.
    """
    low, high = max(first, EARLIEST), min(before, LATEST)
    if high <= low:
        return None
    edges = np.array([low - DAY, high + DAY]) // DAY  # a local day is never more than a day off the one in UTC
    parts = archive.parts(day_name(int(edges[0])), day_name(int(edges[1])), log)
    groups = [group for number, part in enumerate(parts) for group in _groups(number, part, low, high)]
    if not groups:
        return None
    source = ArchiveSource(parts, groups, layout, (low, high), block_rows)
    if source.streams:
        return source
    rows = source.rows()
    return Remembered(rows, layout) if len(rows) else None


class Remembered(Source):
    """History of a feed in memory. A batch may come long after it: a feed may have been silent, or held."""

    def __init__(self, rows: Rows, layout: Layout, paths: tuple[str, ...] = ()) -> None:
        self._inner, self.layout, self.paths = MemorySource(rows, layout), layout, paths

    @property
    def fingerprint(self) -> str:
        return self._inner.fingerprint

    def sample(self) -> Ints:
        return self._inner.sample()

    def extent(self, cadence: Cadence) -> Extent:
        return replace(self._inner.extent(cadence), reach=SILENT)

    def blocks(self) -> Iterator[Rows]:
        return self._inner.blocks()

    def rows(self) -> Rows:
        return self._inner.rows()


@dataclass(frozen=True)
class _Group:
    """One row group: the place of its part, its number there, its rows, its range of keys and whether all its stamps
    are asked for.
    """

    part: int
    number: int
    rows: int
    least: str
    most: str | None
    whole: bool
    first: int
    last: int


@contextmanager
def _opened(part: Part) -> Iterator[Any]:
    """A part for pyarrow to read; trouble with it is told in one sentence."""
    if isinstance(part.path, Path):
        with told(part.path):
            yield part.path
        return
    with told(without_password(part.path)), trouble(part.path):
        file = opened_object(part.path, part.content)
        try:
            yield file
        finally:
            file.close()


def _groups(place: int, part: Part, low: int, high: int) -> Iterator[_Group]:
    import pyarrow.parquet as pq

    with _opened(part) as file:
        metadata = pq.read_metadata(file)
    for number in range(metadata.num_row_groups):
        group = metadata.row_group(number)
        keys, stamps = (group.column(column).statistics for column in (0, 1))
        first, last = stamps.min_raw, stamps.max_raw
        if last < low or first >= high:
            continue
        named = keys is not None and keys.has_min_max
        least, most = (keys.min, keys.max) if named else ("", None)
        yield _Group(place, number, group.num_rows, least, most, first >= low and last < high, first, last)


class ArchiveSource(ReadForFingerprint):
    """History in the archive, read by blocks of series across all its days."""

    def __init__(
        self, parts: list[Part], groups: list[_Group], layout: Layout, between: tuple[int, int], block_rows: int
    ) -> None:
        self._parts, self._groups, self._between = parts, groups, between
        self.layout, self.paths = layout, ()
        self._bounds = _bounds(groups, block_rows)
        self._sample: Ints | None = None

    @property
    def streams(self) -> bool:
        """There are several blocks."""
        return len(self._bounds) > 1

    def sample(self) -> Ints:
        if self._sample is None:
            self._sample = next(self.blocks()).stamps
        return self._sample

    def extent(self, cadence: Cadence) -> Extent:
        low, high = self._between
        first = max(min(group.first for group in self._groups), low)
        last = min(max(group.last for group in self._groups), high - 1)
        some = next(self.blocks())
        own = extent(some, cadence)
        if cadence.irregular or cadence.index_of(np.array([first, last]))[1].all():
            return Extent(first, last, low, high, own.per_series, SILENT)
        parts = [span(rows.stamps, cadence, low, high, own.per_series) for rows in self.blocks()]
        ends = min(part.first for part in parts), max(part.last for part in parts)
        return Extent(*ends, low, high, own.per_series, SILENT)

    def blocks(self) -> Iterator[Rows]:
        whole = Fingerprint(self.layout.values)
        for bound, end in zip(self._bounds, [*self._bounds[1:], None], strict=True):
            rows = self._read(bound, end)
            if len(rows):
                whole.add(rows)
                yield rows
        self._fingerprint = whole.text()

    def rows(self) -> Rows:
        return self._read("", None)

    def _read(self, least: str, end: str | None) -> Rows:
        """The rows of the series from ``least`` to just before ``end``."""
        wanted = [g for g in self._groups if (end is None or g.least < end) and (g.most is None or g.most >= least)]
        by_part: dict[int, list[_Group]] = {}
        for group in wanted:
            by_part.setdefault(group.part, []).append(group)
        pieces = []
        for place, groups in by_part.items():
            part = self._parts[place]
            inside = all(g.most is not None and g.least >= least and (end is None or g.most < end) for g in groups)
            pieces.append(_piece(part, groups, self.layout, self._between, (least, end), inside))
        return _joined(pieces, self.layout)


def _bounds(groups: list[_Group], block_rows: int) -> list[str]:
    """The first key of each block, the first of all being the empty text."""
    bounds, size = [""], 0
    if any(group.most is None for group in groups):
        return bounds
    for group in sorted(groups, key=lambda group: group.least):
        if size + group.rows > block_rows and group.least > bounds[-1] and size:
            bounds.append(group.least)
            size = 0
        size += group.rows
    return bounds


@dataclass(frozen=True)
class _Piece:
    """Rows of one file, and the number of the release they came with."""

    names: tuple[str, ...]
    codes: np.ndarray
    stamps: Ints
    values: dict[str, np.ndarray]
    number: int


def _piece(
    part: Part,
    groups: list[_Group],
    layout: Layout,
    between: tuple[int, int],
    keys: tuple[str, str | None],
    inside: bool,
) -> _Piece:
    import pyarrow as pa
    import pyarrow.parquet as pq

    far = isinstance(part.path, str)  # pieces that lie together are then asked for at once
    with _opened(part) as opened, pq.ParquetFile(opened, read_dictionary=["series"], pre_buffer=far) as file:
        there = set(file.schema_arrow.names)
        columns = ["series", "stamp", *(value_column(name) for name in layout.values if value_column(name) in there)]
        table = file.read_row_groups([group.number for group in groups], columns=columns).unify_dictionaries()

    def column(name: str) -> Any:
        data = table.column(name)
        whole = data.chunk(0) if data.num_chunks == 1 else data.combine_chunks()
        return whole.combine_chunks() if isinstance(whole, pa.ChunkedArray) else whole

    series = column("series")
    names = tuple(series.dictionary.to_pylist())
    codes, stamps = arrow.codes(series, -1), arrow.numbers(column("stamp"))
    values = {
        name: arrow.numbers(column(value_column(name))) if value_column(name) in there else np.full(len(codes), np.nan)
        for name in layout.values
    }
    chosen: Bools | None = None
    if not all(group.whole for group in groups):
        chosen = (stamps >= between[0]) & (stamps < between[1])
    if not inside:
        asked = np.array([keys[0] <= name and (keys[1] is None or name < keys[1]) for name in names], dtype=bool)
        chosen = asked[codes] if chosen is None else chosen & asked[codes]
    if chosen is not None and not chosen.all():
        codes, stamps = codes[chosen], stamps[chosen]
        values = {name: column[chosen] for name, column in values.items()}
    return _Piece(names, codes, stamps, values, part.number)


def _joined(pieces: list[_Piece], layout: Layout) -> Rows:
    """Pieces in order of day and release as rows by series and stamp, the newest release of each stamp."""
    names = np.array(sorted(set().union(*(piece.names for piece in pieces))), dtype=object)
    numbers = {name: number for number, name in enumerate(names)}
    codes, last_names, places = [], None, np.zeros(0, dtype=np.int32)
    for piece in pieces:
        if piece.names != last_names:  # most days have the same series
            places = np.array([numbers[name] for name in piece.names], dtype=np.int32)
            last_names = piece.names
        codes.append(places[piece.codes])
    whole = Rows(
        names,
        np.concatenate([np.zeros(0, dtype=np.int32), *codes]),
        np.concatenate([np.zeros(0, dtype=np.int64), *(piece.stamps for piece in pieces)]),
        {name: np.concatenate([np.zeros(0), *(piece.values[name] for piece in pieces)]) for name in layout.values},
    )
    number = np.repeat([piece.number for piece in pieces], [len(piece.stamps) for piece in pieces])
    grouped = whole.by_series()
    return compact(grouped if _in_order(grouped) else _each_once(whole, number))
