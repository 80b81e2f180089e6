"""Files by path, glob and suffix, and one sentence for whatever goes wrong with them; depends on ``layout``."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import Any

from sercheck.errors import BatchError
from sercheck.intake.layout import Layout

CSV_BLOCK = 1 << 24
"""Bytes of CSV or JSON read at a time (ours: 16 MB; a single row must fit)."""

_KINDS = {
    ".csv": "csv", ".txt": "csv", ".tsv": "tsv", ".tab": "tsv", ".parquet": "parquet", ".pq": "parquet",
    ".jsonl": "json", ".ndjson": "json", ".json": "json",
}  # fmt: skip
_WANTED_KINDS = ".csv, .tsv, .jsonl, .ndjson (each also .gz), .parquet or .pq"


def expand(paths: str | Path | Sequence[str | Path]) -> list[Path]:
    """The files that paths and globs name, those of a glob in order of name.

    Raises:
        BatchError: nothing is there, a glob matches nothing, or a path is a directory.
    """
    given = [paths] if isinstance(paths, str | Path) else list(paths)
    if not given:
        raise BatchError("input", "no file is named", "one file, several, or a glob")
    files: list[Path] = []
    for path in given:
        if not isinstance(path, str | Path):
            raise BatchError("input", f"a {type(path).__name__}", "a path, several, a glob, or one DataFrame")
        with told(Path(path)):
            files.extend(_expand_one(str(path)))
    return files


def _expand_one(text: str) -> list[Path]:
    path = Path(text)
    if path.is_dir():
        raise BatchError(text, "is a directory", "a file or a glob", f"Write {text.rstrip('/')}/*.csv or the like.")
    if path.exists():
        return [path]
    if any(sign in text for sign in "*?["):
        root = Path(path.anchor)
        found = sorted(name for name in root.glob(str(path.relative_to(root))) if not name.is_dir())
        if found:
            return found
        raise BatchError(text, "the glob matches no file", "at least one file")
    near = ""
    with suppress(OSError):  # a folder that is missing or closed has no names to offer
        near = _nearest(path.name, [other.name for other in path.parent.iterdir()])
    raise BatchError(text, "there is no such file", todo=f"Did you mean {path.with_name(near)}?" if near else "")


def kind_of(path: Path) -> tuple[str, bool]:
    """What a file holds by its suffix (csv, tsv, parquet, json), and whether it is gzipped.

    Raises:
        BatchError: an unknown suffix.
    """
    suffixes = [suffix.lower() for suffix in path.suffixes]
    zipped = bool(suffixes) and suffixes[-1] == ".gz"
    suffix = suffixes[-2 if zipped else -1] if len(suffixes) > int(zipped) else ""
    kind = _KINDS.get(suffix)
    if kind is None or (zipped and kind == "parquet"):
        raise BatchError(str(path), f"the suffix {suffix or '(none)'} tells no known format", _WANTED_KINDS)
    return kind, zipped


@contextmanager
def told(path: Path | str) -> Iterator[None]:
    """Turn what the system and the readers raise into one sentence about the file."""
    import pyarrow as pa

    try:
        yield
    except PermissionError as error:
        raise BatchError(str(path), "no permission to read it", todo="Ask for the right to read it.") from error
    except FileNotFoundError as error:
        raise BatchError(str(path), "there is no such file") from error
    except UnicodeDecodeError as error:
        raise BatchError(str(path), "the file is not UTF-8", "text in UTF-8") from error
    except (pa.ArrowException, OSError, EOFError) as error:
        raise BatchError(str(path), *_sentence(str(error))) from error


def _sentence(text: str) -> tuple[str, str]:
    """What came and what was wanted, for a message of the reader."""
    text = " ".join(text.split())
    known = (
        ("UTF8", "the file is not UTF-8", "text in UTF-8"),
        ("header check", "the suffix is .gz and the content is not gzip", "a gzipped file"),
        ("zlib", "the gzipped content is broken", "a whole gzip file"),
        ("runcated compressed", "the gzipped content breaks off", "a whole gzip file"),
        ("straddl", f"a single row is longer than {CSV_BLOCK:,} bytes", "short rows (a quote may be left open)"),
        ("magic bytes", "the content is not Parquet, or breaks off", "a whole Parquet file"),
        ("footer", "the content is not Parquet, or breaks off", "a whole Parquet file"),
        ("Empty CSV", "the file has columns and no rows", "at least one row"),
        ("parse error: Expected", f"rows of different length ({text[:160]})", "as many cells in every row as columns"),
    )
    for sign, came, wanted in known:
        if sign in text:
            return came, wanted
    return f"cannot be read ({text[:200]})", "a readable file"


def check_columns(found: Iterable[str], layout: Layout, place: str, hint: str = "") -> None:
    """Refuse a feed that lacks a needed column or has one twice.

    Raises:
        BatchError: names the columns that are there and the nearest word.
    """
    names = list(found)
    for need in layout.needed:
        if need not in names:
            near = _nearest(need, names)
            shown = ", ".join(names[:20]) + (", …" if len(names) > 20 else "")
            raise BatchError(
                place, f"there is no column {need!r}", f"it among the columns, which are {shown}",
                hint or (f"Did you mean {near!r}?" if near else ""),
            )  # fmt: skip
        if names.count(need) > 1:
            raise BatchError(place, f"the column {need!r} is there {names.count(need)} times", "it once")


def _nearest(word: str, words: Iterable[str]) -> str:
    from difflib import get_close_matches

    lower = {other.lower(): other for other in words}
    near = get_close_matches(word.lower(), list(lower), n=1)
    return lower[near[0]] if near else ""


def opened(path: Path, zipped: bool) -> Any:
    """The file's bytes as an Arrow stream, unzipped."""
    import pyarrow as pa

    return pa.input_stream(str(path), compression="gzip" if zipped else None)
