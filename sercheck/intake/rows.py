"""Rows of a feed in compact columns, and the fingerprint of their content; depends on ``arrow``."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from sercheck.intake import arrow
from sercheck.serial.arrays import Bools, Floats, Ints

_QUIET = 0x7FF8_0000_0000_0000
UNREADABLE = _QUIET | 1
INFINITE = _QUIET | 2
"""Bit patterns of NaN that tell why a cell has no number; a plain missing one is the usual NaN.

They travel with the value at no cost, and arithmetic treats them as it treats any NaN.
"""
CHUNK = 1 << 15
"""Rows mixed at a time, so that the work stays in a processor's cache."""

_LANE = np.uint64(0x9E37_79B9_7F4A_7C15)
_MIX_1 = np.uint64(0xBF58_476D_1CE4_E5B9)
_MIX_2 = np.uint64(0x94D0_49BB_1331_11EB)
"""Odd constants of the splitmix64 generator (Steele, Lea and Flood 2014)."""


@dataclass(frozen=True)
class Rows:
    """Rows in order of delivery.

    Attributes:
        keys: names of the series, sorted, shape (K,) of str objects; every one has a row.
        codes: number of each row's series in ``keys``, int32, shape (N,).
        stamps: int64 nanoseconds UTC, shape (N,); the smallest int64 where the stamp cannot be read or never was on
            the clock.
        values: a float64 array of shape (N,) for each value column; NaN is missing, and the bit patterns
            ``UNREADABLE`` and ``INFINITE`` tell why.
    """

    keys: np.ndarray
    codes: np.ndarray
    stamps: Ints
    values: Mapping[str, Floats]

    def __len__(self) -> int:
        return len(self.stamps)

    @cached_property
    def grouped(self) -> bool:
        """The rows of a series stand together, in the order of ``keys``."""
        return bool((self.codes[1:] >= self.codes[:-1]).all())

    def by_series(self) -> Rows:
        """The same rows with those of a series together, each series in order of delivery (a counting sort)."""
        return self if self.grouped else self.take(stable_order(self.codes, len(self.keys)))

    def take(self, rows: Ints | Bools | slice) -> Rows:
        """Some of the rows; the keys stay."""
        values = {name: column[rows] for name, column in self.values.items()}
        return Rows(self.keys, self.codes[rows], self.stamps[rows], values)

    def of_series(self, first: int, last: int) -> Rows:
        """The rows of the series ``first`` to ``last`` (exclusive) of grouped rows, with these keys only."""
        low, high = np.searchsorted(self.codes, [first, last])
        part = self.take(slice(low, high))
        return Rows(self.keys[first:last], part.codes - np.int32(first), part.stamps, part.values)


def stable_order(codes: np.ndarray, n: int) -> Ints:
    """Places of the rows ordered by code, rows of one code in their order; two 16-bit counting passes at most."""
    if n <= 1 << 16:
        return np.argsort(codes.astype(np.uint16), kind="stable")
    order = np.argsort((codes & 0xFFFF).astype(np.uint16), kind="stable")
    return order[np.argsort((codes[order] >> 16).astype(np.uint16), kind="stable")]


def count_marked(values: Floats, mark: int, codes: np.ndarray, n: int) -> Ints:
    """How many cells of each series carry the mark ``UNREADABLE`` or ``INFINITE``, shape (n,)."""
    marked = values.view(np.int64) == mark
    return np.bincount(codes[marked], minlength=n).astype(np.int64)


class Fingerprint:
    """The content of rows as one number, whatever their order, files and format.

    Each row (key, stamp, values) is mixed to 64 bits, twice; the two sums over all rows and their number are the
    fingerprint. Equal fingerprints mean equal rows but for chance (about 2**-64 for two given feeds); it is no
    protection against someone who wants to forge one.
    """

    def __init__(self, values: tuple[str, ...]) -> None:
        self._columns = _text_numbers(np.array(values, dtype=object))
        self._sums = [0, 0]
        self._rows = 0

    def add(self, rows: Rows) -> None:
        """Take in more rows."""
        names = _text_numbers(rows.keys)
        columns = [column.view(np.uint64) for column in rows.values.values()]
        stamps = rows.stamps.view(np.uint64)
        self._rows += len(rows)
        spare = np.empty(CHUNK, dtype=np.uint64)
        for start in range(0, len(rows), CHUNK):
            part = slice(start, start + CHUNK)
            mixed = stamps[part] * _LANE
            other = spare[: len(mixed)]
            mixed += names[rows.codes[part]]
            for number, column in zip(self._columns, columns, strict=True):
                np.right_shift(mixed, np.uint64(32), out=other)
                mixed ^= other
                mixed ^= column[part]
                mixed *= _MIX_1
                mixed += number
            np.right_shift(mixed, np.uint64(29), out=other)
            mixed ^= other
            mixed *= _MIX_2
            np.right_shift(mixed, np.uint64(32), out=other)
            mixed ^= other
            self._sums[0] += int(mixed.sum())
            mixed *= _MIX_1
            np.right_shift(mixed, np.uint64(31), out=other)
            mixed ^= other
            self._sums[1] += int(mixed.sum())

    def join(self, other: Fingerprint) -> None:
        """Take in rows that were mixed elsewhere."""
        self._sums = [mine + theirs for mine, theirs in zip(self._sums, other._sums, strict=True)]
        self._rows += other._rows

    def text(self) -> str:
        """The fingerprint as hexadecimal digits."""
        first, second = (total % (1 << 64) for total in self._sums)
        return f"{first:016x}{second:016x}{self._rows:x}"


def fingerprint(rows: Rows) -> str:
    """The fingerprint of the rows' content (see ``Fingerprint``)."""
    whole = Fingerprint(tuple(rows.values))
    whole.add(rows)
    return whole.text()


def _text_numbers(texts: np.ndarray) -> np.ndarray:
    """A 64-bit number for each text: its bytes and their places mixed and summed."""
    if len(texts) == 0:
        return np.zeros(0, dtype=np.uint64)
    _, offsets, data = arrow.texts(texts).buffers()
    ends = np.frombuffer(offsets, dtype=np.int64)
    lengths = np.diff(ends)
    letters = np.frombuffer(data, dtype=np.uint8).astype(np.uint64)
    starts = np.cumsum(lengths) - lengths
    places = (np.arange(len(letters)) - np.repeat(starts, lengths)).astype(np.uint64)
    mixed = _mix((letters + np.uint64(1)) * _LANE + places * _MIX_2)
    sums = np.concatenate([np.zeros(1, dtype=np.uint64), np.cumsum(mixed, dtype=np.uint64)])
    return _mix(sums[starts + lengths] - sums[starts] + lengths.astype(np.uint64) * _LANE)


def _mix(x: np.ndarray) -> np.ndarray:
    x = (x ^ (x >> np.uint64(30))) * _MIX_1
    x = (x ^ (x >> np.uint64(27))) * _MIX_2
    mixed: np.ndarray = x ^ (x >> np.uint64(31))
    return mixed
