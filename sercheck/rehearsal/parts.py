"""The records of a rehearsal as Parquet: written in parts by many processes, joined into one file; needs pyarrow."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from sercheck.formats import arrow_table
from sercheck.outputs import whole_file
from sercheck.record import INTEGERS, Records

if TYPE_CHECKING:
    import pyarrow as pa

WHOLE = INTEGERS | {"try", "series_hit"}
NUMBERS = {"size", "try", "series_hit"}


def tagged(table: Records, tags: Mapping[str, object]) -> pa.Table:
    """Records with further columns before them, each the same value throughout."""
    size = len(table)
    own = {
        name: np.broadcast_to(np.array([np.nan if value is None else value], dtype=np.float64), (size,))
        if name in NUMBERS
        else np.broadcast_to(np.array([value], dtype=object), (size,))
        for name, value in tags.items()
    }
    return arrow_table({**own, **table.columns}, WHOLE)


def write_part(parts: Sequence[pa.Table], path: Path) -> None:
    """Write tables as one file, which has its name when it is whole."""
    import pyarrow as pa
    import pyarrow.parquet as pq

    draft = path.with_suffix(".draft")
    pq.write_table(pa.concat_tables(parts), draft)
    draft.replace(path)


def join(folder: Path, path: str | Path) -> None:
    """Join all parts into one file, whole or not at all.

    Raises:
        OutputError: the file cannot be written.
    """
    import pyarrow.parquet as pq

    files = sorted(folder.glob("*.parquet"))
    with whole_file(path) as file:
        if not files:
            nothing = dict.fromkeys(("batch", "fault", "began"), None) | dict.fromkeys(NUMBERS, None)
            pq.write_table(tagged(Records.empty(), nothing), file)
            return
        with pq.ParquetWriter(file, pq.read_schema(files[0])) as writer:
            for part in files:
                writer.write_table(pq.read_table(part))
