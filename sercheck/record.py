"""The record: the outcome of one rule on one series of one batch, kept as columns; needs ``formats``, ``outputs``."""

from __future__ import annotations

import re
import sys
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from hashlib import blake2b
from pathlib import Path
from typing import IO, TYPE_CHECKING, Any, Literal

import numpy as np

from sercheck.errors import OutputError
from sercheck.formats import csv_lines, json_lines, write_parquet
from sercheck.outputs import output_trouble, whole_file

if TYPE_CHECKING:
    import pandas as pd

COLUMNS: tuple[str, ...] = (
    "record_id", "feed", "batch_id", "batch_fingerprint", "judged_at",
    "rule", "measure", "column", "series", "lag", "season", "after",
    "window_start", "window_end", "n", "n_missing", "n_eff",
    "observed", "bound", "standard_error", "limit", "naive_limit", "detectable",
    "method", "assumes", "p_value", "false_alarm", "false_alarm_used",
    "outcome", "reason", "action", "likely_cause", "cause_support",
    "rules_fingerprint", "baseline_id", "sercheck_version",
)  # fmt: skip
"""Names and order of the columns, the same in JSON lines, CSV, Parquet and the ledger."""

INTEGERS = frozenset({"lag", "n", "n_missing"})
NUMBERS = frozenset({
    "n_eff", "observed", "bound", "standard_error", "limit", "naive_limit", "detectable",
    "p_value", "false_alarm", "false_alarm_used", "cause_support",
})  # fmt: skip
TIMES = frozenset({"judged_at", "window_start", "window_end"})
"""UTC, RFC 3339 text such as 2026-01-12T00:00:00Z."""

SUFFIXES = (".jsonl", ".csv", ".parquet")
_BLOCK = 8192  # records handed out at a time by ``rows``
_LARGEST_WHOLE = 2.0**53  # beyond it a float64 skips whole numbers
# Half of a UTF-16 pair has no UTF-8 form, and NUL is refused by PostgreSQL and cut at by others.
_UNSTORABLE = re.compile("[\x00\ud800-\udfff]")


@dataclass(frozen=True, eq=False)
class Records:
    r"""Records as columns: all of ``COLUMNS``, the same length, read-only.

    Built from a dict of arrays, lists or single values (one value for all records; single values alone make one
    record). Numbers become float64 arrays with NaN for null (whole numbers too: exact up to 2^53); an infinite number
    becomes null, as no format of ours can say it, and -0.0 becomes 0. Texts become object arrays of str with None for
    null; a character that UTF-8 or a database cannot hold (half a surrogate pair, NUL) is replaced by its escape,
    such as ``\udc80``, so that a hostile name can neither stop a decision nor pass for another name unseen.

    Raises:
        ValueError: a column is missing, unknown, of another length or of the wrong type (an error of the program).
    """

    columns: Mapping[str, Any]

    def __post_init__(self) -> None:
        if set(self.columns) != set(COLUMNS):
            odd = ", ".join(sorted(set(self.columns) ^ set(COLUMNS)))
            raise ValueError(f"columns missing or unknown: {odd}")
        sizes = {len(column) for column in self.columns.values() if _is_many(column)} or {1}
        if len(sizes) > 1:
            raise ValueError(f"columns of different lengths: {sorted(sizes)}")
        size = sizes.pop()
        clean = {name: _column(name, self.columns[name], size) for name in COLUMNS}
        object.__setattr__(self, "columns", clean)

    def __len__(self) -> int:
        return len(self.columns["record_id"])

    def __repr__(self) -> str:
        told = ", ".join(f"{number} {outcome}" for outcome, number in self.counts().items())
        return f"Records({len(self)} rows: {told})"

    def __getitem__(self, name: str) -> np.ndarray:
        column: np.ndarray = self.columns[name]
        return column

    @classmethod
    def empty(cls) -> Records:
        """No records."""
        return cls({name: [] for name in COLUMNS})

    @classmethod
    def concat(cls, parts: Sequence[Records]) -> Records:
        """All records of the parts, in order."""
        if not parts:
            return cls.empty()
        return cls._trusted({name: _joined([part.columns[name] for part in parts]) for name in COLUMNS})

    @classmethod
    def _trusted(cls, columns: dict[str, np.ndarray]) -> Records:
        """Columns that were clean before: the checks are not paid for twice."""
        records = object.__new__(cls)
        for column in columns.values():
            column.flags.writeable = False
        object.__setattr__(records, "columns", columns)
        return records

    def take(self, which: np.ndarray | Sequence[int] | slice) -> Records:
        """The records that a mask, positions or a slice picks."""
        index = which if isinstance(which, slice) else np.asarray(which)
        size = len(self.columns["record_id"][index])
        return self._trusted({
            name: np.broadcast_to(column[:1].copy(), (size,)) if _is_constant(column) and size else column[index]
            for name, column in self.columns.items()
        })

    def changed(self, **columns: object) -> Records:
        """The same records with other values in the named columns."""
        return Records({**self.columns, **columns})

    def counts(self) -> dict[str, int]:
        """How many records have each outcome."""
        outcomes = self.columns["outcome"]
        return {outcome: int(np.count_nonzero(outcomes == outcome)) for outcome in ("pass", "fail", "undecided")}

    def tuples(self) -> Iterator[tuple[Any, ...]]:
        """Each record as a tuple of plain Python values in the order of ``COLUMNS``, None for null."""
        for first in range(0, len(self), _BLOCK):
            block = slice(first, first + _BLOCK)
            yield from zip(*(_plain(column[block], name) for name, column in self.columns.items()), strict=True)

    def rows(self) -> Iterator[dict[str, Any]]:
        """Each record as a dict of plain Python values, None for null."""
        for values in self.tuples():
            yield dict(zip(COLUMNS, values, strict=True))

    def rows_where(self, name: str, value: object) -> Iterator[dict[str, Any]]:
        """The rows whose column ``name`` holds ``value``."""
        return self.take(np.flatnonzero(self.columns[name] == value)).rows()

    def to_frame(self) -> pd.DataFrame:
        """A pandas DataFrame of nullable types: Int64, Float64 and string (times stay RFC 3339 text)."""
        import pandas as pd

        return pd.DataFrame({name: _series(column, name) for name, column in self.columns.items()})

    def write(self, to: str | Path | IO[str], form: Literal["json", "csv"] = "json") -> None:
        """Write all records to a file, whole or not at all, or to ``-`` (stdout) or an open stream.

        A file's suffix says its format: .jsonl, .csv or .parquet. For a stream ``form`` does: JSON lines or CSV.

        Raises:
            OutputError: unknown suffix, missing folder, no permission, full disk, a reader that went away.
        """
        if isinstance(to, str | Path) and str(to) != "-":
            self._to_file(to)
            return
        stream, place = (sys.stdout, "stdout") if isinstance(to, str | Path) else (to, "the stream")
        _to_stream((csv_lines if form == "csv" else json_lines)(self.columns, INTEGERS), stream, place)

    def _to_file(self, path: str | Path) -> None:
        suffix = check_suffix(path)
        with whole_file(path) as file:
            if suffix == ".parquet":
                write_parquet(self.columns, INTEGERS, file)
            else:
                make = csv_lines if suffix == ".csv" else json_lines
                for lines in make(self.columns, INTEGERS):
                    file.write(lines.encode())


def check_suffix(path: str | Path) -> str:
    """The suffix of a file for records, refused before any work is done if it names no format.

    Raises:
        OutputError: the suffix is not one of ``SUFFIXES``.
    """
    suffix = Path(path).suffix.lower()
    if suffix not in SUFFIXES:
        came = f"the suffix {suffix!r} names no format of records" if suffix else "the name has no suffix"
        raise OutputError(str(path), came, ", ".join(SUFFIXES) + " or - for JSON lines on stdout")
    return suffix


def record_ids(
    batch_fingerprint: str,
    rules_fingerprint: str,
    rule: Sequence[Any] | np.ndarray,
    column: Sequence[Any] | np.ndarray,
    series: Sequence[Any] | np.ndarray,
    lag: Sequence[Any] | np.ndarray,
    baseline_id: str | None,
) -> np.ndarray:
    """Stable ids: 32 hex digits of BLAKE2b over everything that tells one record from another; NaN is no lag.

    Every part is preceded by its length, so no two different records are spelled alike.
    """
    common = map(_spelled, (batch_fingerprint, rules_fingerprint, baseline_id))
    start = blake2b("".join(common).encode(), digest_size=16)
    lags = np.asarray(lag, dtype=np.float64)
    numbers = [b"-" if none else b"%d" % number for number, none in zip(lags.tolist(), np.isnan(lags), strict=True)]
    heads: dict[tuple[str | None, str | None], blake2b] = {}
    for pair in set(zip(rule, column, strict=True)):
        heads[pair] = start.copy()
        heads[pair].update(_bytes(pair[0]) + _bytes(pair[1]))
    digests = []
    for pair, name, number in zip(zip(rule, column, strict=True), series, numbers, strict=True):
        digest = heads[pair].copy()
        digest.update(_bytes(name) + number)
        digests.append(digest.hexdigest())
    ids = np.empty(len(lags), dtype=object)
    ids[:] = digests
    return ids


def _bytes(text: str | None) -> bytes:
    return _spelled(text).encode("utf-8", "surrogatepass")


def _spelled(text: str | None) -> str:
    return "-;" if text is None else f"{len(text)}:{text};"


def storable(text: str) -> str:
    """The text with what no file or database can hold (NUL, lone surrogates) shown as its escape."""
    return _UNSTORABLE.sub(lambda found: found[0].encode("unicode_escape").decode(), text)


def utc_text(nanoseconds: np.ndarray | int) -> np.ndarray:
    """Nanoseconds since 1970 UTC as RFC 3339 text, with a fraction where there is one; the smallest int64 is None."""
    stamps = np.atleast_1d(np.asarray(nanoseconds, dtype=np.int64))
    none = stamps == np.iinfo(np.int64).min
    seconds, rest = np.divmod(np.where(none, 0, stamps), 10**9)
    plain = np.datetime_as_string(seconds.astype("datetime64[s]"))
    texts: np.ndarray = plain.astype(object)
    if rest.any():
        texts += [f".{part:09d}".rstrip("0").rstrip(".") for part in rest.tolist()]
    texts += "Z"
    texts[none] = None
    return texts


def _is_many(column: object) -> bool:
    if isinstance(column, np.ndarray):
        return column.ndim > 0
    return isinstance(column, Sequence) and not isinstance(column, str | bytes)


def _is_constant(column: np.ndarray) -> bool:
    return column.strides == (0,)


def _column(name: str, given: Any, size: int) -> np.ndarray:
    numeric = name in INTEGERS or name in NUMBERS
    if not _is_many(given):
        one = _numbers(name, [given]) if numeric else _texts(name, [given])
        return np.broadcast_to(one, (size,)) if size else one[:0]
    if isinstance(given, np.ndarray) and given.ndim == 1 and size and _is_constant(given):
        return np.broadcast_to(_column(name, given[:1].copy(), 1), (size,))
    column = _numbers(name, given) if numeric else _texts(name, given)
    column.flags.writeable = False
    return column


def _numbers(name: str, given: Sequence[Any] | np.ndarray) -> np.ndarray:
    try:
        column = np.array(given, dtype=np.float64) + 0.0  # turns -0.0 into 0.0
    except (TypeError, ValueError) as error:
        raise ValueError(f"column {name} wants numbers: {error}") from error
    column[np.isinf(column)] = np.nan
    if name in INTEGERS and not (np.isnan(column) | ((column % 1 == 0) & (abs(column) <= _LARGEST_WHOLE))).all():
        raise ValueError(f"column {name} wants whole numbers")
    return column


def _texts(name: str, given: Sequence[Any] | np.ndarray) -> np.ndarray:
    column = np.empty(len(given), dtype=object)
    column[:] = given.tolist() if isinstance(given, np.ndarray) else list(given)
    odd = {kind for kind in set(map(type, column.tolist())) if kind not in (str, type(None))}
    if odd:
        column[:] = [_text(name, value) for value in column.tolist()]
    texts = column.tolist()
    if _UNSTORABLE.search("".join(texts if None not in texts else filter(None, texts))):
        mended = {text: storable(text) for text in set(texts) - {None} if _UNSTORABLE.search(text)}
        column[:] = [mended.get(text, text) for text in column.tolist()]
    return column


def _text(name: str, value: object) -> str | None:
    if isinstance(value, str):
        return str(value)
    if value is None or (isinstance(value, float) and np.isnan(value)):
        return None
    raise ValueError(f"column {name} wants text: {value!r}")


def _joined(parts: list[np.ndarray]) -> np.ndarray:
    """One after the other; a value that is the same throughout stays one value."""
    full = [part for part in parts if len(part)]
    if full and all(map(_is_constant, full)):
        values = np.concatenate([part[:1] for part in full])
        alike = values == values[0] if values.dtype == object else np.isclose(values, values[0], 0, 0, equal_nan=True)
        if alike.all():
            return np.broadcast_to(values[:1], (sum(map(len, full)),))
    joined: np.ndarray = np.concatenate(parts)
    return joined


def _plain(column: np.ndarray, name: str) -> list[Any]:
    """Plain values, None for null."""
    if column.dtype == object:
        texts: list[Any] = column.tolist()
        return texts
    null = np.isnan(column)
    values = np.where(null, 0, column).astype(np.int64) if name in INTEGERS else column
    plain: list[Any] = values.tolist()
    for place in np.flatnonzero(null).tolist():
        plain[place] = None
    return plain


def _series(column: np.ndarray, name: str) -> Any:
    import pandas as pd

    if column.dtype == object:
        return pd.array(column, dtype="string")
    null = np.isnan(column)
    if name in INTEGERS:
        return pd.arrays.IntegerArray(np.where(null, 0, column).astype(np.int64), null)
    return pd.arrays.FloatingArray(np.where(null, 0.0, column), null)


def _to_stream(blocks: Iterator[str], stream: IO[str], place: str) -> None:
    """UTF-8 whatever the terminal's own encoding is."""
    binary = getattr(stream, "buffer", None)
    try:
        stream.flush()
        for block in blocks:
            if binary is None:
                stream.write(block)
            else:
                binary.write(block.encode())
        (binary or stream).flush()
    except OSError as error:
        output_trouble(place, error)
