"""JSON lines to chunks of compact columns; depends on ``paths`` and ``build``."""

from __future__ import annotations

import gzip
import json
from itertools import islice
from pathlib import Path
from typing import TYPE_CHECKING, Any, TextIO

from sercheck.errors import BatchError
from sercheck.intake.build import Chunk, to_chunk
from sercheck.intake.calendar import Cadence
from sercheck.intake.layout import Layout
from sercheck.intake.paths import CSV_BLOCK, check_columns, opened

if TYPE_CHECKING:
    import pyarrow as pa

LINES = 200_000
"""Lines turned into columns at a time (ours)."""


def read_json(path: Path, zipped: bool, layout: Layout, cadence: Cadence) -> list[Chunk]:
    """All rows of a file with one JSON object a line (a single JSON list of objects is read as well).

    Raises:
        BatchError: a line is no JSON object, or no line has a needed column.
    """
    import pyarrow as pa

    try:
        columns = _fast(path, zipped, layout)
        chunks = [to_chunk(columns, layout, cadence, str(path))]
    except (pa.ArrowInvalid, KeyError, json.JSONDecodeError, RecursionError):
        chunks = _slow(path, zipped, layout, cadence)
    return chunks


def _fast(path: Path, zipped: bool, layout: Layout) -> dict[str, pa.Array]:
    """Arrow's reader, told the types of the first line; it gives up where a column changes its type."""
    import pyarrow as pa
    from pyarrow import json as reader

    with _text(path, zipped) as lines:
        first = json.loads(next((line for line in lines if line.strip()), ""), parse_constant=_no_constant)
    if not isinstance(first, dict) or any(name not in first for name in layout.needed):
        raise KeyError("the first line lacks a column")
    types = {name: _arrow_type(first[name]) for name in layout.needed}
    types |= {name: pa.float64() for name in layout.values if types[name] == pa.int64()}
    options = reader.ParseOptions(
        explicit_schema=pa.schema(list(types.items())), unexpected_field_behavior="ignore"
    )
    with opened(path, zipped) as stream:
        table = reader.read_json(stream, reader.ReadOptions(block_size=CSV_BLOCK), options)
    return {name: pa.concat_arrays(table.column(name).chunks) for name in layout.needed}


def _arrow_type(cell: object) -> pa.DataType:
    import pyarrow as pa

    if isinstance(cell, str):
        return pa.string()
    if isinstance(cell, bool):
        return pa.bool_()
    if isinstance(cell, int):
        return pa.int64()
    if isinstance(cell, float):
        return pa.float64()
    raise KeyError("the first line does not tell the type")


def _no_constant(word: str) -> float:
    raise KeyError(f"{word} is no JSON number")


def _text(path: Path, zipped: bool) -> TextIO:
    if zipped:
        return gzip.open(path, "rt", encoding="utf-8-sig")
    return path.open(encoding="utf-8-sig")


def _slow(path: Path, zipped: bool, layout: Layout, cadence: Cadence) -> list[Chunk]:
    """Any JSON, line by line: columns that change their type, NaN and Infinity, missing fields."""
    chunks, seen = [], dict[str, None]()
    with _text(path, zipped) as lines:
        objects = _objects(lines, path)
        while block := list(islice(objects, LINES)):
            for row in block:
                seen.update(dict.fromkeys(row))
            check_columns(seen, layout, str(path))
            columns = {name: _column([row.get(name) for row in block]) for name in layout.needed}
            chunks.append(to_chunk(columns, layout, cadence, str(path)))
    return chunks


def some_json(path: Path, zipped: bool, rows: int) -> dict[str, pa.Array]:
    """The first rows of every field they have; a missing field is null.

    Raises:
        BatchError: a line is no JSON object.
    """
    with _text(path, zipped) as lines:
        block = list(islice(_objects(lines, path), rows))
    names = dict.fromkeys(name for row in block for name in row)
    return {name: _column([row.get(name) for row in block]) for name in names}


def _objects(lines: TextIO, path: Path) -> Any:
    for number, line in enumerate(lines, 1):
        if not line.strip():
            continue
        try:
            row = json.loads(line if number > 1 or not line.lstrip().startswith("[") else line + lines.read())
        except (json.JSONDecodeError, RecursionError) as error:
            raise BatchError(f"{path}:{number}", "the line is no JSON", "one JSON object a line") from error
        if isinstance(row, list) and number == 1 and all(isinstance(item, dict) for item in row):
            yield from row
        elif isinstance(row, dict):
            yield row
        else:
            raise BatchError(f"{path}:{number}", "the line is no JSON object", 'such as {"read_at": "…", "kwh": 1}')


def _column(cells: list[Any]) -> pa.Array:
    """Cells of any types; a mixed column is what its texts say."""
    import pyarrow as pa

    kinds = {type(cell) for cell in cells if cell is not None}
    if kinds <= {int, float} or kinds in ({str}, {bool}):
        try:
            return pa.array([float(cell) for cell in cells] if kinds == {int, float} and None not in cells else cells)
        except (pa.ArrowInvalid, OverflowError):
            pass
    return pa.array([None if cell is None else cell if isinstance(cell, str) else json.dumps(cell) for cell in cells],
                    pa.string())  # fmt: skip
