"""A look at the first rows of a feed whose columns nobody has named yet; depends on the readers of the formats."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from sercheck.errors import BatchError
from sercheck.intake.csvfiles import some_csv
from sercheck.intake.databases import DatabaseRows, is_source, named, some_rows
from sercheck.intake.frames import some_frame
from sercheck.intake.jsonlines import some_json
from sercheck.intake.parquet import some_parquet
from sercheck.intake.paths import expand, kind_of, told

if TYPE_CHECKING:
    import pandas as pd
    import pyarrow as pa

    Given = str | Path | Sequence[str | Path] | pd.DataFrame | DatabaseRows

ROWS = 200_000
"""Rows looked at: four thousand steps of fifty series that come together, in a fraction of a second (ours)."""


def peek(given: Given, rows: int = ROWS) -> dict[str, pa.Array]:
    """The first rows of every column; those of CSV as text.

    Args:
        given: a file, several, a glob (the first file that has rows is looked at), a DataFrame, or rows of a database.
        rows: how many, at most.

    Raises:
        BatchError: a file cannot be read, or there is not one row.
    """
    first = next(iter(given), "") if isinstance(given, list | tuple) else given
    if isinstance(given, DatabaseRows) or is_source(first):
        asked = given if isinstance(given, DatabaseRows) else named(str(first))
        place, columns = asked.place, some_rows(asked, rows)
    elif not isinstance(given, str | Path | Sequence):
        columns = some_frame(given, rows)
        place = "DataFrame"
    else:
        files = expand(given)
        place, columns = str(files[0]), {}
        for path in files:
            columns = _file(path, rows)
            if columns and len(next(iter(columns.values()))):
                break
    if not columns or not len(next(iter(columns.values()))):
        raise BatchError(place, "there are no rows", "at least one row")
    return columns


def _file(path: Path, rows: int) -> dict[str, pa.Array]:
    kind, zipped = kind_of(path)
    with told(path):
        if path.stat().st_size == 0:
            raise BatchError(str(path), "the file is empty", "rows")
        if kind == "parquet":
            return some_parquet(path, rows)
        if kind == "json":
            return some_json(path, zipped, rows)
        return some_csv(path, zipped, "\t" if kind == "tsv" else ",", rows)
