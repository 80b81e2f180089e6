"""One file of any known format to chunks of compact columns; depends on the readers of the formats."""

from __future__ import annotations

from pathlib import Path

from sercheck.errors import BatchError
from sercheck.intake.build import Chunk
from sercheck.intake.calendar import Cadence
from sercheck.intake.csvfiles import read_csv
from sercheck.intake.jsonlines import read_json
from sercheck.intake.layout import Layout
from sercheck.intake.parquet import read_parquet
from sercheck.intake.paths import kind_of, told


def read_file(path: Path, layout: Layout, cadence: Cadence) -> list[Chunk]:
    """All rows of one file.

    Raises:
        BatchError: the file cannot be read, lacks a column or holds no rows.
    """
    kind, zipped = kind_of(path)
    with told(path):
        if path.stat().st_size == 0:
            raise BatchError(str(path), "the file is empty", "rows")
        if kind == "parquet":
            chunks = read_parquet(path, layout, cadence)
        elif kind == "json":
            chunks = read_json(path, zipped, layout, cadence)
        else:
            chunks = read_csv(path, zipped, "\t" if kind == "tsv" else ",", layout, cadence)
    if not any(len(chunk) for chunk in chunks):
        raise BatchError(str(path), "the file has columns and no rows", "at least one row")
    return chunks
