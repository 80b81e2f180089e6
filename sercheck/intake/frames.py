"""Pandas frames to chunks of compact columns; depends on ``paths`` and ``build`` (pandas and pyarrow where used)."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from sercheck.errors import BatchError
from sercheck.intake.build import Chunk, to_chunk
from sercheck.intake.calendar import Cadence
from sercheck.intake.layout import Layout
from sercheck.intake.paths import check_columns

if TYPE_CHECKING:
    import pandas as pd
    import pyarrow as pa


def frame_chunk(frame: pd.DataFrame, layout: Layout, cadence: Cadence, place: str = "DataFrame") -> Chunk:
    """A pandas frame (a column may also be a level of its index) as a chunk; the frame stays as it is.

    Raises:
        BatchError: a needed column is missing, twice or of a type that cannot serve.
    """
    import pandas as pd
    import pyarrow as pa

    if not isinstance(frame, pd.DataFrame):
        raise BatchError("input", f"a {type(frame).__name__}", "a path, several, a glob, or one DataFrame")
    levels = [str(name) for name in frame.index.names if name is not None and name not in frame.columns]
    check_columns([*map(str, frame.columns), *levels], layout, place)
    columns = {}
    for name in layout.needed:
        values = frame.index.get_level_values(name) if name in levels else frame[name]
        columns[name] = _frame_column(values, always_text=name == layout.time)
    if len(frame) == 0:
        raise BatchError(place, "it has columns and no rows", "at least one row")
    try:
        return to_chunk(columns, layout, cadence, place)
    except pa.ArrowException as error:
        raise BatchError(place, f"it cannot be read ({' '.join(str(error).split())[:200]})", "plain columns") from error


def _frame_column(values: Any, *, always_text: bool) -> pa.Array:
    import pandas as pd
    import pyarrow as pa

    plain = not (isinstance(values.dtype, pd.PeriodDtype) or (always_text and values.dtype == object))
    if plain:
        try:
            column = pa.array(values, from_pandas=True)
        except (pa.ArrowInvalid, pa.ArrowTypeError, pa.ArrowNotImplementedError, OverflowError, UnicodeEncodeError):
            plain = False
    if not plain:  # a column of mixed objects is what its texts say; half a surrogate pair is told by its escape
        cells = zip(values, values.notna(), strict=True)
        texts = [str(cell).encode("utf-8", "backslashreplace").decode() if here else None for cell, here in cells]
        column = pa.array(texts, pa.string())
    return column.combine_chunks() if isinstance(column, pa.ChunkedArray) else column


def some_frame(frame: pd.DataFrame, rows: int) -> dict[str, pa.Array]:
    """The first rows of every column and of every named level of the index."""
    import pandas as pd

    if not isinstance(frame, pd.DataFrame):
        raise BatchError("input", f"a {type(frame).__name__}", "a path, several, a glob, or one DataFrame")
    part = frame.iloc[:rows]
    columns = {str(name): _frame_column(part.iloc[:, place], always_text=True) for place, name in enumerate(part)}
    levels = [str(name) for name in part.index.names if name is not None and name not in part.columns]
    return {
        **{name: _frame_column(part.index.get_level_values(name), always_text=True) for name in levels},
        **columns,
    }
