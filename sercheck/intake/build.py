"""From Arrow columns to ``Rows``: one chunk of a file after another, then all of them on one numbering of series."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from sercheck import limits
from sercheck.errors import BatchError
from sercheck.intake import arrow
from sercheck.intake.calendar import Cadence
from sercheck.intake.cells import join_names, sorted_names, to_names, to_values
from sercheck.intake.layout import Layout
from sercheck.intake.rows import Rows
from sercheck.intake.stamps import ReadStamps, read_stamps, resolve
from sercheck.intake.zone import NOT_A_STAMP
from sercheck.serial.arrays import Bools, Floats

if TYPE_CHECKING:
    import pyarrow as pa


@dataclass(frozen=True)
class Chunk:
    """Some rows of a file in compact columns; stamps as they were written."""

    names: np.ndarray
    codes: np.ndarray
    stamps: ReadStamps
    values: Mapping[str, Floats]

    def __len__(self) -> int:
        return len(self.codes)


def to_chunk(columns: Mapping[str, pa.Array], layout: Layout, cadence: Cadence, place: str) -> Chunk:
    """Turn Arrow columns into a chunk.

    Raises:
        BatchError: a column's type cannot be what the layout says it is.
    """
    limits.check()
    stamps = read_stamps(columns[layout.time], cadence, f"{place}, column {layout.time}")
    values = {name: to_values(columns[name], f"{place}, column {name}") for name in layout.values}
    if layout.series:
        parts = [to_names(columns[name], f"{place}, column {name}") for name in layout.series]
        names, codes = join_names(parts)
    else:
        names, codes = np.array([""], dtype=object), np.zeros(len(stamps.stamps), dtype=np.int32)
    return Chunk(names, codes, stamps, values)


def to_rows(chunks: list[Chunk], cadence: Cadence) -> Rows:
    """Join chunks in order of delivery; empties the list, so that no column is held twice for long."""
    names, codes = _one_numbering(chunks)
    read = _one_clock([chunk.stamps for chunk in chunks])
    values = {}
    for name in chunks[0].values:
        values[name] = _joined([chunk.values[name] for chunk in chunks])
    chunks.clear()
    return Rows(names, codes, resolve(read, codes, cadence.zone, whole_days=cadence.daily_or_longer), values)


def must_have_stamps(rows: Rows, layout: Layout, place: str) -> None:
    """Refuse rows of which not one can be placed in time.

    Raises:
        BatchError: no stamp could be read.
    """
    if not (rows.stamps != NOT_A_STAMP).any():
        raise BatchError(
            f"{place}, column {layout.time}", f"not one of {len(rows)} stamps can be read",
            "dates and times such as 2026-01-12 05:00 or 2026-01-12T05:00:00+01:00",
            "Is it the right column?",
        )  # fmt: skip


def _joined(parts: list[np.ndarray]) -> np.ndarray:
    return parts[0] if len(parts) == 1 else np.concatenate(parts)


def _one_numbering(chunks: list[Chunk]) -> tuple[np.ndarray, np.ndarray]:
    if len(chunks) == 1:
        return sorted_names(chunks[0].names, chunks[0].codes)
    every = arrow.texts(np.concatenate([chunk.names for chunk in chunks])).dictionary_encode()
    names = np.array(every.dictionary.to_pylist(), dtype=object)
    names, numbers = sorted_names(names, arrow.codes(every, -1).astype(np.int32))
    starts = np.cumsum([0, *(len(chunk.names) for chunk in chunks)])
    pieces = [numbers[start:][chunk.codes] for start, chunk in zip(starts, chunks, strict=False)]
    return names, np.concatenate(pieces)


def _one_clock(parts: list[ReadStamps]) -> ReadStamps:
    stamps = _joined([part.stamps for part in parts])
    kinds = {part.naive if isinstance(part.naive, bool) else None for part in parts}
    if len(kinds) == 1 and None not in kinds:
        return ReadStamps(stamps, parts[0].naive)
    flags: Bools = np.concatenate([np.broadcast_to(np.asarray(part.naive), part.stamps.shape) for part in parts])
    return ReadStamps(stamps, flags)
