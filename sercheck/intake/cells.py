"""Cells of a column to numbers and to the names of series; depends on ``rows`` (pyarrow where used)."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from sercheck.errors import BatchError
from sercheck.intake import arrow
from sercheck.intake.rows import INFINITE, UNREADABLE
from sercheck.serial.arrays import Floats

if TYPE_CHECKING:
    import pyarrow as pa

MISSING_WORDS = ("", "NA", "N/A", "n/a", "<NA>", "null", "NULL", "Null", "NaN", "nan", "None")
"""Texts that stand for no value, as R, pandas, databases and spreadsheets write them."""
_NUMBER = r"^[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?$"
_INFINITE = r"^[+-]?([iI]nf|INF|[iI]nfinity|INFINITY)$"
_WHOLE = r"^([+-]?\d+)\.0+$"


def to_values(column: pa.Array, place: str) -> Floats:
    """Numbers of a value column as float64.

    Missing cells are NaN; text that is no number and infinite cells are NaN with the marks of ``rows``. Text that is
    a number counts as one, true and false as 1 and 0; a decimal comma or a thousands mark is no number.

    Raises:
        BatchError: the column's type holds no numbers.
    """
    import pyarrow as pa
    import pyarrow.compute as pc

    kind = column.type
    if pa.types.is_dictionary(kind):
        numbers: Floats = np.append(to_values(column.dictionary, place), np.nan)[arrow.codes(column, -1)]
        return numbers
    if pa.types.is_null(kind):
        return np.full(len(column), np.nan)
    if pa.types.is_string(kind) or pa.types.is_large_string(kind) or pa.types.is_string_view(kind):
        return _from_text(column.cast(pa.string()))
    if pa.types.is_boolean(kind):
        column = pc.cast(column, pa.uint8())
    elif pa.types.is_decimal(kind):
        column = pc.cast(column, pa.string())  # digits as in a text file: a direct cast may miss the last bit
    elif not (pa.types.is_integer(kind) or pa.types.is_floating(kind)):
        raise BatchError(place, f"the value column is of type {kind}", "numbers")
    if column.type != pa.float64():
        column = pc.cast(column, pa.float64(), safe=False)
    numbers, empty = arrow.numbers(column), arrow.nulls(column)
    return _marked(numbers if empty is None else np.where(empty, np.nan, numbers))


def _marked(numbers: Floats) -> Floats:
    """Give every NaN and every zero one bit pattern, and mark what is infinite; the input stays as it is."""
    # A sum is finite only where all its parts are, and costs a single pass.
    with np.errstate(over="ignore", invalid="ignore"):
        plain = bool(np.isfinite(numbers.sum()))
    numbers = numbers + 0.0  # a copy that is ours, and -0 becomes 0
    if not plain:
        numbers[np.isnan(numbers)] = np.nan
        numbers.view(np.int64)[np.isinf(numbers)] = INFINITE
    return numbers


def _from_text(column: pa.Array) -> Floats:
    import pyarrow as pa
    import pyarrow.compute as pc

    texts = pc.fill_null(pc.utf8_trim_whitespace(column), "")
    missing = pc.is_in(texts, pa.array(MISSING_WORDS))
    lower = pc.utf8_lower(texts)
    texts = pc.if_else(pc.equal(lower, "true"), "1", pc.if_else(pc.equal(lower, "false"), "0", texts))
    number = pc.match_substring_regex(texts, _NUMBER)
    infinite = pc.match_substring_regex(texts, _INFINITE)
    numbers = pc.cast(pc.if_else(number, texts, None), pa.float64())
    values = _marked(numbers.to_numpy(zero_copy_only=False))
    flags = values.view(np.int64)
    flags[infinite.to_numpy(zero_copy_only=False)] = INFINITE
    unreadable = pc.invert(pc.or_(pc.or_(missing, number), infinite))
    flags[unreadable.to_numpy(zero_copy_only=False)] = UNREADABLE
    return values


def to_names(column: pa.Array, place: str) -> tuple[np.ndarray, np.ndarray]:
    """Names and codes of one key column: text as it is, whole numbers without decimals, a missing key as ``""``.

    A text such as ``17.0`` becomes ``17``, so that a key column of numbers has the same names whatever the format.

    Returns:
        Names (str objects, each once, in order of appearance) and int32 codes.

    Raises:
        BatchError: the column's type cannot name anything.
    """
    import pyarrow as pa
    import pyarrow.compute as pc

    if not pa.types.is_dictionary(column.type):
        column = _encoded(column, place)
    words = column.dictionary
    if not pa.types.is_string(words.type):
        words = _as_text(words, place)
    if arrow.bools(pc.match_substring_regex(words, _WHOLE)).any():
        words = pc.replace_substring_regex(words, _WHOLE, r"\1")
    if words.null_count:
        words = pc.fill_null(words, "")
    names = np.array([*words.to_pylist(), ""], dtype=object)  # the last one is for rows without a key
    return _each_once(names, arrow.codes(column, len(words)).astype(np.int32, copy=False))


def _encoded(column: pa.Array, place: str) -> pa.DictionaryArray:
    import pyarrow as pa

    try:
        return column.dictionary_encode()
    except (pa.ArrowInvalid, pa.ArrowNotImplementedError, pa.ArrowTypeError) as error:
        raise BatchError(place, f"the key column is of type {column.type}", "text, numbers or dates") from error


def _as_text(words: pa.Array, place: str) -> pa.Array:
    import pyarrow as pa
    import pyarrow.compute as pc

    if pa.types.is_floating(words.type):
        # repr gives the shortest digits that read back the same; Arrow would write large whole ones as 1e+16.
        texts = [_number_text(number) for number in words.cast(pa.float64()).to_pylist()]
        return pa.array(texts, pa.string())
    try:
        return pc.cast(words, pa.string())
    except (pa.ArrowInvalid, pa.ArrowNotImplementedError) as error:
        raise BatchError(place, f"the key column is of type {words.type}", "text, numbers or dates") from error


def _number_text(number: float | None) -> str | None:
    if number is None or math.isnan(number):
        return None
    return f"{number:.0f}" if number.is_integer() else repr(number)


def _each_once(names: np.ndarray, codes: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Leave out names that no row uses and merge equal ones."""
    used = np.bincount(codes, minlength=len(names)) > 0
    if used.all() and len(set(names.tolist())) == len(names):
        return names, codes
    kept = np.flatnonzero(used)
    once, place = np.unique(names[kept], return_inverse=True)
    move = np.zeros(len(names), dtype=np.int32)
    move[kept] = place
    return once, move[codes]


def join_names(parts: list[tuple[np.ndarray, np.ndarray]]) -> tuple[np.ndarray, np.ndarray]:
    """Compound keys: the parts joined by ``/``, a ``/`` or a backslash inside a part escaped by a backslash.

    Args:
        parts: names and codes of each key column.

    Returns:
        Names and int32 codes as ``to_names``.
    """
    if len(parts) == 1:
        return parts[0]
    import pyarrow.compute as pc

    combined = parts[0][1].astype(np.int64)
    for names, codes in parts[1:]:
        # Renumber after every part, so that the product of the numbers of names cannot overflow.
        combined = np.unique(combined * len(names) + codes, return_inverse=True)[1]
    _, first, codes = np.unique(combined, return_index=True, return_inverse=True)
    texts = [arrow.texts(names[own[first]]) for names, own in parts]
    escaped = [pc.replace_substring_regex(text, r"([/\\])", r"\\\1") for text in texts]
    joined = pc.binary_join_element_wise(*escaped, arrow.texts(["/"])[0])
    return np.array(joined.to_pylist(), dtype=object), codes.astype(np.int32)


def sorted_names(names: np.ndarray, codes: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """The same series with the names in order."""
    if (names[1:] >= names[:-1]).all():
        return names, codes
    order = np.argsort(names, kind="stable")
    place = np.empty(len(names), dtype=np.int32)
    place[order] = np.arange(len(names), dtype=np.int32)
    return names[order], place[codes]
