"""CSV files to chunks of compact columns; depends on ``paths`` and ``build`` (pyarrow where used)."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

from sercheck.errors import BatchError
from sercheck.intake.build import Chunk, to_chunk
from sercheck.intake.calendar import Cadence
from sercheck.intake.layout import Layout
from sercheck.intake.paths import CSV_BLOCK, check_columns, opened

if TYPE_CHECKING:
    import pyarrow as pa

HEADER_BYTES = 1 << 20
"""Bytes in which a header must end (ours)."""


def read_csv(path: Path, zipped: bool, delimiter: str, layout: Layout, cadence: Cadence) -> list[Chunk]:
    """All rows of a CSV file; a value column with text in it is read cell by cell.

    Raises:
        BatchError: the header or the rows cannot be read.
    """
    import pyarrow as pa

    names = _header(path, zipped, delimiter)
    if not names:
        raise BatchError(str(path), "the file is empty", "a header and rows")
    other = next((sign for sign in ";\t|," if sign != delimiter and sign in names[0]), "") if len(names) == 1 else ""
    hint = f"The cells seem to be separated by {other!r}; {delimiter!r} is wanted." if other else ""
    check_columns(names, layout, str(path), hint)
    as_text, multiline = False, False
    while True:
        try:
            return _csv_chunks(path, zipped, delimiter, layout, cadence, as_text, multiline)
        except pa.ArrowInvalid as error:
            if "conversion error to double" in str(error) and not as_text:
                as_text = True  # a cell holds text: read again, and count it
            elif "parse error" in str(error) and not multiline:
                multiline = True  # a quoted cell may hold a line's end
            else:
                raise


def _csv_chunks(
    path: Path, zipped: bool, delimiter: str, layout: Layout, cadence: Cadence, as_text: bool, multiline: bool
) -> list[Chunk]:
    import pyarrow as pa
    from pyarrow import csv

    from sercheck.intake.cells import MISSING_WORDS

    coded = pa.dictionary(pa.int32(), pa.string())  # few distinct stamps and keys: each is read once
    types = {name: pa.string() if as_text else pa.float64() for name in layout.values}
    types |= dict.fromkeys((layout.time, *layout.series), coded)
    convert = csv.ConvertOptions(
        column_types=types, include_columns=list(layout.needed), null_values=list(MISSING_WORDS)
    )
    parse = csv.ParseOptions(delimiter=delimiter, newlines_in_values=multiline)
    with opened(path, zipped) as stream:
        reader = csv.open_csv(stream, csv.ReadOptions(block_size=CSV_BLOCK), parse, convert)
        batches = (dict(zip(batch.schema.names, batch.columns, strict=True)) for batch in reader if batch.num_rows)
        return [to_chunk(batch, layout, cadence, str(path)) for batch in batches]


def _header(path: Path, zipped: bool, delimiter: str) -> list[str]:
    import csv

    with opened(path, zipped) as stream:
        start = bytes(stream.read(HEADER_BYTES))
    if start[:2] in (b"\xff\xfe", b"\xfe\xff"):
        raise BatchError(str(path), "the file is UTF-16", "text in UTF-8")
    end = start.rfind(b"\n") if len(start) == HEADER_BYTES else -1
    text = start[: end if end > 0 else None].decode("utf-8-sig", errors="replace").replace("\r\n", "\n")
    try:
        return next((row for row in csv.reader(text.splitlines(keepends=True), delimiter=delimiter) if row), [])
    except csv.Error as error:
        raise BatchError(str(path), f"the header cannot be read ({error})", "a line with the columns' names") from error


def some_csv(path: Path, zipped: bool, delimiter: str, rows: int) -> dict[str, pa.Array]:
    """The first rows, about, of every column as text, missing words null.

    Raises:
        BatchError: the header or the rows cannot be read.
    """
    import pyarrow as pa
    from pyarrow import csv

    from sercheck.intake.cells import MISSING_WORDS

    names = _header(path, zipped, delimiter)
    if len(names) == 1 and (other := next((sign for sign in ";\t|" if sign in names[0]), "")):
        came, wanted = f"one column, {names[0][:80]!r}", f"cells separated by {delimiter!r}"
        raise BatchError(str(path), came, wanted, f"The cells seem to be separated by {other!r}.")
    convert = csv.ConvertOptions(
        column_types=dict.fromkeys(names, pa.string()), null_values=list(MISSING_WORDS), strings_can_be_null=True
    )
    read = csv.ReadOptions(block_size=CSV_BLOCK)
    parse = csv.ParseOptions(delimiter=delimiter, newlines_in_values=True)
    batches, count = [], 0
    with opened(path, zipped) as stream:
        for batch in csv.open_csv(stream, read, parse, convert):
            batches.append(batch)
            count += batch.num_rows
            if count >= rows:
                break
    table = pa.Table.from_batches(batches).slice(0, rows) if batches else pa.table({})
    return {name: table.column(place).combine_chunks() for place, name in enumerate(table.column_names)}
