"""Reads a rule file from disk or from text; depends on the rest of this folder."""

from __future__ import annotations

import dataclasses
import hashlib
import json
import os
from datetime import date
from pathlib import Path

from pydantic import BaseModel

from sercheck.errors import RuleFileError
from sercheck.rulebook.compiled import Rulebook
from sercheck.rulebook.compiler import Compiler, resolved
from sercheck.rulebook.places import LARGEST, read

NOT_CONTENT = ("path", "text", "fingerprint", "line")
"""What says where the rules stand, not what they are."""


def load_rules(source: str | os.PathLike[str]) -> Rulebook:
    """Read and check a rule file.

    Args:
        source: path of the file; or the YAML text itself, known by a line break in it (files that it names are then
            looked for from the working folder).

    Raises:
        RuleFileError: with all mistakes of the file at once (``mistakes``), each with file, line and column.
    """
    if isinstance(source, str) and "\n" in source:
        return _compiled(source, "rules", Path())
    path = Path(source)
    return _compiled(_text(path), str(path), path.parent)


def _text(path: Path) -> str:
    try:
        with path.open("rb") as file:
            raw = file.read(4 * LARGEST + 1)
        return raw.decode("utf-8-sig")
    except UnicodeDecodeError as trouble:
        before = trouble.object[: trouble.start]
        line, column = before.count(b"\n") + 1, trouble.start - (before.rfind(b"\n") + 1) + 1
        raise RuleFileError(f"{path}:{line}:{column}", "bytes that are no UTF-8", "text in UTF-8") from trouble
    except (OSError, ValueError) as trouble:
        reason = getattr(trouble, "strerror", None) or str(trouble)
        came = f"the rule file cannot be read: {reason}"
        raise RuleFileError(str(path), came, "the path of a rule file") from trouble


def _compiled(text: str, source: str, folder: Path) -> Rulebook:
    compiler = Compiler(read(text, source), folder)
    book = compiler.compile()
    if book is None:
        raise RuleFileError.of(sorted(compiler.mistakes.found, key=_by_line))
    return dataclasses.replace(book, text=text, fingerprint=fingerprint(book), history=resolved(book.history, folder))


def _by_line(mistake: RuleFileError) -> tuple[int, int]:
    *_, line, column = mistake.place.rsplit(":", 2)
    return int(line), int(column)


def fingerprint(book: Rulebook) -> str:
    """sha256 of the canonical JSON of the compiled content: layout, comments and order of keys do not change it."""
    content = json.dumps(_plain(book), sort_keys=True, separators=(",", ":"), ensure_ascii=True, allow_nan=False)
    return hashlib.sha256(content.encode()).hexdigest()


def _plain(value: object) -> object:
    """Compiled data as JSON holds it."""
    if isinstance(value, BaseModel):
        return value.model_dump(mode="json", by_alias=True)
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        names = [item.name for item in dataclasses.fields(value) if item.name not in NOT_CONTENT]
        return {name: _plain(getattr(value, name)) for name in names}
    if isinstance(value, dict):
        return {str(key): _plain(item) for key, item in value.items()}
    if isinstance(value, (list, tuple)):
        return [_plain(item) for item in value]
    return value.isoformat() if isinstance(value, date) else value
