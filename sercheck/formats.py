"""Columns of records as JSON lines, CSV and Parquet; depends on nothing of ours.

All functions take ``columns``, a dict from name to array: float64 with NaN for null, or objects that are text or None.
``whole`` names the float columns that hold whole numbers. A column that repeats one value costs nothing (an array of
stride 0). Lines are made a block at a time, so memory stays flat.
"""

from __future__ import annotations

import json
import re
from collections.abc import Callable, Collection, Iterator, Mapping
from typing import TYPE_CHECKING, Any, BinaryIO

import numpy as np

if TYPE_CHECKING:
    import pyarrow as pa

Columns = Mapping[str, np.ndarray]
BLOCK = 8192
"""Records turned into text at a time (8192 × 36 short texts are a few megabytes)."""
MEMO = 100_000
"""Texts remembered a column before the memo is emptied: names repeat, record ids never do."""
# C1 controls act on terminals, and some readers take U+0085, U+2028 and U+2029 for ends of lines.
_LINE_BREAKERS = re.compile("[\x7f-\x9f\u2028\u2029]")
_CSV_SPECIAL = re.compile('[",\n\r\x0b\x0c\x1c-\x1e\x85\u2028\u2029]|^\\s|\\s$')


def json_lines(columns: Columns, whole: Collection[str]) -> Iterator[str]:
    """JSON objects, one a line, in blocks of lines.

    A float is its shortest decimal that reads back as the same float, null is null.
    """
    head = [json.dumps(name).replace("%", "%%") + ": " for name in columns]
    return _lines(columns, whole, head, ("{", ", ", "}\n"), json_text, "null")


def csv_lines(columns: Columns, whole: Collection[str]) -> Iterator[str]:
    """RFC 4180 rows under a header, in blocks of lines; null is nothing at all, an empty text is ``""``."""
    yield ",".join(map(csv_text, columns)) + "\n"
    yield from _lines(columns, whole, [""] * len(columns), ("", ",", "\n"), csv_text, "")


def json_text(text: str) -> str:
    """One text as JSON on one line, readable beyond ASCII."""
    quoted = json.dumps(text, ensure_ascii=False)
    return quoted if text.isascii() and "\x7f" not in text else _LINE_BREAKERS.sub(_escape, quoted)


def csv_text(text: str) -> str:
    """One text as a CSV cell."""
    return '"' + text.replace('"', '""') + '"' if not text or _CSV_SPECIAL.search(text) else text


def write_parquet(columns: Columns, whole: Collection[str], file: BinaryIO) -> None:
    """One Parquet table: int64, double and string columns, all nullable."""
    import pyarrow.parquet as pq

    pq.write_table(arrow_table(columns, whole), file)


def arrow_table(columns: Columns, whole: Collection[str]) -> pa.Table:
    """The same as a table in memory."""
    import pyarrow as pa

    return pa.table({name: _arrow(column, name in whole) for name, column in columns.items()})


def _arrow(column: np.ndarray, whole: bool) -> Any:
    import pyarrow as pa

    if column.dtype == object:
        return pa.array(column, type=pa.string(), from_pandas=True)
    null = np.isnan(column)
    if whole:
        return pa.array(np.where(null, 0, column).astype(np.int64), mask=null)
    return pa.array(column, mask=null)


def _lines(
    columns: Columns,
    whole: Collection[str],
    head: list[str],
    frame: tuple[str, str, str],
    quote: Callable[[str], str],
    null: str,
) -> Iterator[str]:
    """Fill one template per row; what is the same in every row stands in the template itself."""
    size = len(next(iter(columns.values())))
    writers = {
        name: _Texts(quote, null) if column.dtype == object else _Numbers(name in whole, null)
        for name, column in columns.items()
    }
    varying = [name for name, column in columns.items() if size and column.strides != (0,)]
    cells = [
        "%s" if name in varying or not size else writers[name](column[:1])[0].replace("%", "%%")
        for name, column in columns.items()
    ]
    start, comma, end = frame
    template = start + comma.join(a + b for a, b in zip(head, cells, strict=True)) + end
    for first in range(0, size, BLOCK):
        part = slice(first, min(first + BLOCK, size))
        texts = [writers[name](columns[name][part]) for name in varying]
        rows = zip(*texts, strict=True) if texts else iter([()] * (part.stop - first))
        yield "".join([template % row for row in rows])


class _Texts(dict[str | None, str]):
    """Quotes each distinct text once."""

    def __init__(self, quote: Callable[[str], str], null: str) -> None:
        super().__init__({None: null})
        self.quote, self.null = quote, null

    def __missing__(self, text: str) -> str:
        quoted = self[text] = self.quote(text)
        return quoted

    def __call__(self, column: np.ndarray) -> list[str]:
        if len(self) > MEMO:
            self.clear()
            self[None] = self.null
        return list(map(self.__getitem__, column.tolist()))


class _Numbers:
    """Writes floats by their shortest exact decimal."""

    def __init__(self, whole: bool, null: str) -> None:
        self.whole, self.null = whole, null

    def __call__(self, column: np.ndarray) -> list[str]:
        missing = np.isnan(column)
        values = np.where(missing, 0, column).astype(np.int64) if self.whole else column
        texts = list(map(repr, values.tolist()))
        for place in np.flatnonzero(missing).tolist():
            texts[place] = self.null
        return texts


def _escape(found: re.Match[str]) -> str:
    return f"\\u{ord(found[0]):04x}"
