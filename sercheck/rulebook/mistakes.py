"""Turns what validation says into mistakes with a place, what came, what is allowed and the nearest known word.

Depends on pydantic, the errors and the places of a document.
"""

from __future__ import annotations

import json
import re
from collections.abc import Iterable, Mapping
from difflib import get_close_matches
from typing import Any, NoReturn

from pydantic import BaseModel, ValidationError
from pydantic_core import ErrorDetails, PydanticCustomError

from sercheck.errors import RuleFileError
from sercheck.rulebook.places import Document, Path

SHOWN = 60
"""Characters of a value that a message repeats."""

_WANTED = {
    "string_type": "text",
    "int_type": "a whole number",
    "int_from_float": "a whole number",
    "float_type": "a number",
    "bool_type": "true or false",
    "list_type": "a list",
    "tuple_type": "a list",
    "dict_type": "a mapping of keys to values",
    "model_type": "a mapping of keys to values",
    "model_attributes_type": "a mapping of keys to values",
}


class Refusals:
    """What a validator refuses: each with what was wanted, what to do, and where under the validated value."""

    def __init__(self) -> None:
        self.said: list[tuple[str, str, Path, bool]] = []

    def add(self, wanted: str, todo: str = "", at: Path = (), *, key: bool = False) -> None:
        """Note one; ``key``: it is the key at that place which is wrong."""
        self.said.append((wanted, todo, at, key))

    def end(self) -> None:
        """Refuse the value if there was any."""
        if self.said:
            raise PydanticCustomError("said", "{wanted}", {"wanted": self.said[0][0], "said": self.said})


def refuse(wanted: str, todo: str = "", at: Path = ()) -> NoReturn:
    """Refuse a value for one reason."""
    raise PydanticCustomError("said", "{wanted}", {"wanted": wanted, "said": [(wanted, todo, at, False)]})


def shown(value: object) -> str:
    """A value as a message repeats it."""
    if value is None:
        return "nothing"
    text = f"'{value}'" if isinstance(value, str) else json.dumps(value, default=str, ensure_ascii=False)
    return text if len(text) <= SHOWN else text[: SHOWN - 3] + "..."


def nearest(word: object, known: Mapping[str, Iterable[str]]) -> str:
    """The nearest known word with its kind (``known`` maps a kind to its words), or nothing."""
    if not isinstance(word, str):
        return ""
    kinds = {item: kind for kind, words in reversed(list(known.items())) for item in words}
    folded = re.sub(r"[-\s]+", "_", word.strip().lower())
    close = [folded] if folded in kinds else get_close_matches(folded, kinds, n=1, cutoff=0.6)
    if not close:
        return ""
    return f"Did you mean '{close[0]}', {kinds[close[0]]}?"


def listed(words: Iterable[str]) -> str:
    """Words as a list for a message."""
    return ", ".join(words) or "none"


class Mistakes:
    """Collects the mistakes of one document."""

    def __init__(self, document: Document) -> None:
        self.document = document
        self.found: list[RuleFileError] = list(document.mistakes)

    def add(self, path: Path, came: str, wanted: str = "", todo: str = "", *, key: bool = False) -> None:
        """Note a mistake at the value (or the key) of ``path``."""
        self.found.append(RuleFileError(self.document.place(path, key=key), came, wanted, todo))

    def unknown_key(self, path: Path, allowed: Iterable[str], known: Mapping[str, Iterable[str]]) -> None:
        """Note a key that is not known where it stands."""
        self.add(path, f"unknown key '{path[-1]}'", f"one of {listed(allowed)}", nearest(path[-1], known), key=True)

    def unknown(self, path: Path, what: str, word: object, known: Iterable[str], todo: str = "") -> None:
        """Note a word that names nothing."""
        words = list(known)
        self.add(path, f"{shown(word)}, which is no {what}", f"one of {listed(words)}",
                 nearest(word, {f"a {what}": words}) or todo)  # fmt: skip

    def missing(self, path: Path, name: str, wanted: str) -> None:
        """Note a required key that is not there."""
        self.add(path, f"no '{name}'", wanted)

    def of_validation(
        self,
        error: ValidationError,
        base: Path,
        model: type[BaseModel],
        known: Mapping[str, Iterable[str]],
        more: Iterable[str] = (),
    ) -> set[str]:
        """Note all that a model's validation found wrong.

        Args:
            error: what pydantic raised.
            base: path of the validated mapping in the document.
            model: the model.
            more: further keys that the mapping may have.
            known: words by kind, for the nearest one to an unknown key.

        Returns:
            The keys of the mapping whose values were refused.
        """
        bad: set[str] = set()
        branches: dict[Path, list[tuple[ErrorDetails, Path]]] = {}
        for detail in self._of_the_nearest(base, error.errors(include_url=False)):
            path, whole = self._located(base, detail["loc"])
            if detail["loc"]:
                bad.add(str(detail["loc"][0]))
            if detail["type"] == "missing":
                inside = path if whole else base
                self.missing(inside, str(detail["loc"][-1]), f"the key '{detail['loc'][-1]}' in this mapping")
            elif detail["type"] == "extra_forbidden" and len(path) == len(base) + 1:
                self.unknown_key(path, [*keys_of(model), *more], known)
            elif detail["type"] == "extra_forbidden" and whole:
                own = keys_of(_nested(model, detail["loc"][:-1]))
                self.unknown_key(path, own, {f"a key of '{path[-2]}'": own})
            elif detail["type"] == "value_error" and isinstance(self.value(path), dict):
                self.of_keys(detail, path, keys_of(model))
            elif whole:
                self._one(detail, path)
            else:
                branches.setdefault(path, []).append((detail, path))
        for path, details in branches.items():
            self._several([detail for detail, _ in details], path)
        return bad

    def of_keys(self, detail: ErrorDetails, path: Path, keys: Iterable[str] = (), but: Iterable[str] = ()) -> None:
        """Note what a mapping's keys say against each other; each line of the message is one wish, its keys quoted.

        Args:
            detail: what the model's own check said.
            path: the mapping.
            keys: the keys it could have.
            but: keys that are wrong by themselves: what depends on them is not told.
        """
        value = self.value(path)
        for wanted in _wanted(detail)[0].splitlines():
            named = [word for word in re.findall(r"'([^']*)'", wanted) if word in value or word in keys]
            there = [word for word in named if word in value]
            if set(named) & set(but):
                continue
            if len(there) == 1:
                self.add((*path, there[0]), shown(value[there[0]]), wanted)
            elif named:
                came = [f"{word}: {shown(value[word])}" for word in there] or [f"no '{word}'" for word in named]
                self.add(path, " and ".join(came), wanted)
            else:
                self.add(path, shown(value), wanted)

    def _of_the_nearest(self, base: Path, details: list[ErrorDetails]) -> list[ErrorDetails]:
        """The details without those of alternatives that a mapping has nothing of, where it has the keys of another."""
        ways = [self._way(base, detail) for detail in details]
        far = {way for way, detail in zip(ways, details, strict=True) if way and detail["type"] != "value_error"}
        near = {way[0] for way in ways if way and way not in far}
        return [detail for way, detail in zip(ways, details, strict=True) if not (way in far and way[0] in near)]

    def _way(self, base: Path, detail: ErrorDetails) -> tuple[Path, str] | None:
        """The place and the name of the alternative that a detail is of, where a mapping stands there."""
        path = base
        for place, step in enumerate(detail["loc"]):
            if (*path, step) not in self.document.values:
                lacks = detail["type"] == "missing" and place == len(detail["loc"]) - 1
                return None if lacks or not isinstance(self.value(path), dict) else (path, str(step))
            path = (*path, step)
        return None

    def _located(self, base: Path, loc: tuple[int | str, ...]) -> tuple[Path, bool]:
        """The path of an error in the document, and whether all of its location is there."""
        path, whole = base, True
        for place, step in enumerate(loc):
            if (*path, step) in self.document.values:
                path = (*path, step)
            elif place < len(loc) - 1 or not self._is_key(path, step):
                whole = False
        return path, whole

    def _is_key(self, path: Path, step: int | str) -> bool:
        """A name that could be a key of the mapping there (a missing one), not the tag of an alternative."""
        value = self.value(path)
        return isinstance(value, dict) and isinstance(step, str) and step.isidentifier()

    def value(self, path: Path) -> Any:
        """The value at a path of the document."""
        value: Any = self.document.data
        for step in path:
            value = value[step]
        return value

    def _one(self, detail: ErrorDetails, path: Path) -> None:
        context: dict[str, Any] = detail.get("ctx") or {}
        for wanted, todo, at, key in context.get("said", ()):
            came = f"unknown key '{at[-1]}'" if key else shown(self.value((*path, *at)))
            self.add((*path, *at), came, wanted, todo, key=key)
        if detail["type"] == "said":
            return
        wanted, todo = _wanted(detail)
        value = self.value(path)
        if detail["type"] == "literal_error":
            todo = nearest(value, {"a word that is allowed here": re.findall(r"'([^']*)'", wanted)})
        self.add(path, shown(value), wanted, todo)

    def _several(self, details: list[ErrorDetails], path: Path) -> None:
        """A value that fits none of its alternatives."""
        wanted = list(dict.fromkeys(_wanted(detail)[0] for detail in details if detail["type"] != "extra_forbidden"))
        words = [word for text in wanted for word in re.findall(r"'([^']*)'", text)]
        value = self.value(path)
        todo = nearest(value, {"a word that is allowed here": words})
        self.add(path, shown(value), ", or ".join(wanted), todo)


def keys_of(model: type[BaseModel]) -> list[str]:
    """The keys of a model as they are written."""
    return [field.alias or name for name, field in model.model_fields.items()]


def _nested(model: type[BaseModel], loc: tuple[int | str, ...]) -> type[BaseModel]:
    """The model inside a model that a location leads to; the outer one where there is none."""
    for step in loc:
        field = model.model_fields.get(str(step))
        if field is not None and isinstance(field.annotation, type) and issubclass(field.annotation, BaseModel):
            model = field.annotation
    return model


def _wanted(detail: ErrorDetails) -> tuple[str, str]:
    context: dict[str, Any] = detail.get("ctx") or {}
    kind = detail["type"]
    if kind == "said":
        return str(context["wanted"]), ""
    if kind == "missing":
        return f"a mapping with the key '{detail['loc'][-1]}'", ""
    if kind == "literal_error":
        return f"one of {context['expected']}".replace("one of '", "'", "or" not in str(context["expected"])), ""
    if kind in ("value_error", "assertion_error"):
        return detail["msg"].split(", ", 1)[1], ""
    return _WANTED.get(kind) or detail["msg"].replace("Input should", "a value that should", 1), ""
