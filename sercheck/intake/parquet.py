"""Parquet files to chunks of compact columns, by row groups; depends on ``build`` (pyarrow where used)."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

from sercheck.intake.build import Chunk, to_chunk
from sercheck.intake.calendar import Cadence
from sercheck.intake.layout import Layout
from sercheck.intake.paths import check_columns

if TYPE_CHECKING:
    import pyarrow as pa


def parquet_file(path: Path, layout: Layout) -> Any:
    """The open Parquet file; text keys are read as codes and only the asked pages are held.

    Raises:
        BatchError: a needed column is missing.
    """
    import pyarrow.parquet as pq

    metadata = pq.read_metadata(path)
    schema = metadata.schema.to_arrow_schema()
    check_columns(schema.names, layout, str(path))
    texts = [name for name in layout.series if str(schema.field(name).type) in ("string", "large_string")]
    return pq.ParquetFile(path, metadata=metadata, read_dictionary=texts, pre_buffer=False)


def group_chunk(file: Any, group: int, layout: Layout, cadence: Cadence, place: str) -> Chunk:
    """One row group of an open Parquet file."""
    return table_chunk(file.read_row_group(group, columns=list(layout.needed)), layout, cadence, place)


def table_chunk(table: pa.Table, layout: Layout, cadence: Cadence, place: str) -> Chunk:
    """An Arrow table as a chunk."""
    import pyarrow as pa

    columns = {}
    for name in layout.needed:
        column = table.column(name)
        whole = column.chunk(0) if column.num_chunks == 1 else column.unify_dictionaries().combine_chunks()
        columns[name] = whole.combine_chunks() if isinstance(whole, pa.ChunkedArray) else whole
    return to_chunk(columns, layout, cadence, place)


def read_parquet(path: Path, layout: Layout, cadence: Cadence) -> list[Chunk]:
    """All rows of a Parquet file."""
    file = parquet_file(path, layout)
    with file:
        groups = (group_chunk(file, group, layout, cadence, str(path)) for group in range(file.num_row_groups))
        return [chunk for chunk in groups if len(chunk)]


def some_parquet(path: Path, rows: int) -> dict[str, pa.Array]:
    """The first rows of every column."""
    import pyarrow as pa
    import pyarrow.parquet as pq

    with pq.ParquetFile(path) as file:
        batches, count = [], 0
        for batch in file.iter_batches(batch_size=min(rows, 1 << 16)):
            batches.append(batch)
            count += batch.num_rows
            if count >= rows:
                break
        table = pa.Table.from_batches(batches, schema=file.schema_arrow).slice(0, rows)
    return {name: table.column(place).combine_chunks() for place, name in enumerate(table.column_names)}
