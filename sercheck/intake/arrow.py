"""Between Arrow and numpy without pandas: Arrow's own bridge imports it, which costs more than reading a small batch.

Depends on numpy (pyarrow where used).
"""

from __future__ import annotations

from collections.abc import Iterable
from typing import TYPE_CHECKING, Any

import numpy as np

from sercheck.serial.arrays import Bools

if TYPE_CHECKING:
    import pyarrow as pa


def numbers(array: pa.Array) -> np.ndarray:
    """The numbers of a primitive array, as they lie in memory (no copy); a null has any number (see ``nulls``)."""
    width = array.type.bit_width // 8
    kinds = {"u": "u", "i": "i", "f": "f", "d": "f", "h": "f", "t": "i"}
    dtype = np.dtype(f"{kinds[str(array.type)[0]]}{width}")
    data = array.buffers()[1]
    if data is None or len(array) == 0:
        return np.zeros(len(array), dtype=dtype)
    return np.frombuffer(data, dtype=dtype, count=len(array), offset=array.offset * width)


def nulls(array: pa.Array) -> Bools | None:
    """Which cells are null; None when none is."""
    if array.null_count == 0:
        return None
    return ~_bits(array.buffers()[0], array.offset, len(array))


def bools(array: pa.Array) -> Bools:
    """A boolean array; null is False."""
    found = _bits(array.buffers()[1], array.offset, len(array))
    empty = nulls(array)
    return found if empty is None else found & ~empty


def codes(array: pa.DictionaryArray, null: int) -> np.ndarray:
    """The codes of a dictionary array, ``null`` where a cell is null."""
    found, empty = numbers(array.indices), nulls(array.indices)
    return found if empty is None else np.where(empty, null, found)


def mask(flags: Bools) -> pa.BooleanArray:
    """Flags as an Arrow array."""
    import pyarrow as pa

    packed = pa.py_buffer(np.packbits(flags, bitorder="little"))
    return pa.Array.from_buffers(pa.bool_(), len(flags), [None, packed])


def texts(names: Iterable[str]) -> pa.Array:
    """Texts as an Arrow array."""
    import pyarrow as pa

    encoded = [name.encode("utf-8") for name in names]
    ends = np.zeros(len(encoded) + 1, dtype=np.int64)
    np.cumsum(np.fromiter(map(len, encoded), dtype=np.int64, count=len(encoded)), out=ends[1:])
    data = pa.py_buffer(b"".join(encoded))
    return pa.Array.from_buffers(pa.large_string(), len(encoded), [None, pa.py_buffer(ends), data])


def _bits(buffer: Any, offset: int, n: int) -> Bools:
    if buffer is None or n == 0:
        return np.zeros(n, dtype=bool)
    first = offset // 8
    data = np.frombuffer(buffer, dtype=np.uint8, offset=first, count=(offset + n + 7) // 8 - first)
    return np.unpackbits(data, bitorder="little")[offset - 8 * first :][:n].astype(bool)
