"""YAML text to plain data and the place of every key and value; depends only on yaml and the errors.

Only what a rule file needs is read: mappings, lists, text, numbers, true, false and null (the core schema of YAML 1.2:
``no`` and ``1:30`` are text, ``1e-3`` is a number). Tags, anchors and aliases are refused, so that no object is built
and nothing grows while it is read; size and depth are bounded.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass, field

import yaml

from sercheck.errors import RuleFileError

LARGEST = 1_000_000
"""Characters of a rule file: some ten thousand rules, far beyond what a person maintains."""

DEEPEST = 12
"""Levels of nesting: a rule file needs six (file, rules, rule, after, transform, value)."""

Path = tuple[str | int, ...]

_LOADER = yaml.CSafeLoader if yaml.__with_libyaml__ else yaml.SafeLoader
_INTEGER = re.compile(r"[-+]?[0-9]{1,18}")
_NUMBER = re.compile(r"[-+]?(\.[0-9]+|[0-9]+(\.[0-9]*)?)([eE][-+]?[0-9]+)?")
_WORDS = {"true": True, "True": True, "TRUE": True, "false": False, "False": False, "FALSE": False}
_NOTHING = frozenset({"", "~", "null", "Null", "NULL"})


@dataclass
class Document:
    """A file's data with places.

    Attributes:
        source: name of the file, for messages.
        data: the plain data.
        values: line and column (from 1) of each value, by its path.
        keys: line and column of each key, by the path of its value.
        mistakes: what is wrong with single values (duplicate keys, numbers that are none).
    """

    source: str
    data: object = None
    values: dict[Path, tuple[int, int]] = field(default_factory=dict)
    keys: dict[Path, tuple[int, int]] = field(default_factory=dict)
    mistakes: list[RuleFileError] = field(default_factory=list)

    def place(self, path: Path, *, key: bool = False) -> str:
        """``file:line:column`` of a value (or of its key), or of the nearest thing around it."""
        while path:
            found = (self.keys.get(path) if key else None) or self.values.get(path)
            if found:
                break
            path = path[:-1]
        else:
            found = self.values.get((), (1, 1))
        return f"{self.source}:{found[0]}:{found[1]}"


def read(text: str, source: str) -> Document:
    """Read a YAML text.

    Raises:
        RuleFileError: when the text is no YAML, or uses what rule files do not have.
    """
    if len(text) > LARGEST:
        came = f"a rule file of {len(text):,} characters"
        raise RuleFileError(f"{source}:1:1", came, f"at most {LARGEST:,}", "Split the feed's rules.")
    try:
        return _Builder(source).build(text)
    except (yaml.reader.ReaderError, UnicodeEncodeError) as trouble:  # the latter: half a surrogate pair
        before = text[: trouble.position if isinstance(trouble, yaml.reader.ReaderError) else trouble.start]
        line, column = before.count("\n") + 1, len(before) - (before.rfind("\n") + 1) + 1
        came = f"a character that YAML does not allow: {trouble.reason}"
        raise RuleFileError(f"{source}:{line}:{column}", came, "plain text in UTF-8") from trouble
    except yaml.MarkedYAMLError as trouble:
        mark = trouble.problem_mark or trouble.context_mark
        line, column = (mark.line + 1, mark.column + 1) if mark else (1, 1)
        what = " ".join(part for part in (trouble.problem, trouble.context) if part)
        raise RuleFileError(
            f"{source}:{line}:{column}", f"not YAML: {what}", todo="Check indentation, quotes and brackets near here."
        ) from trouble


class _Builder:
    """Builds data from parse events with a stack of its own: depth costs no recursion."""

    def __init__(self, source: str) -> None:
        self.document = Document(source)
        self.stack: list[tuple[Path, dict[str, object] | list[object]]] = []
        self.key: list[str | None] = []

    def build(self, text: str) -> Document:
        documents = 0
        for event in yaml.parse(text, Loader=_LOADER):
            mark = (event.start_mark.line + 1, event.start_mark.column + 1) if event.start_mark else (1, 1)
            if isinstance(event, yaml.DocumentStartEvent):
                documents += 1
                if documents > 1:
                    self._refuse(mark, "a second document", "one document in a file", "Remove the line '---'.")
            elif isinstance(event, yaml.AliasEvent):
                self._refuse(mark, f"the alias *{event.anchor}", "the value itself", "Write it out.")
            elif isinstance(event, (yaml.MappingEndEvent, yaml.SequenceEndEvent)):
                self.stack.pop()
                self.key.pop()
            elif isinstance(event, (yaml.ScalarEvent, yaml.MappingStartEvent, yaml.SequenceStartEvent)):
                self._node(event, mark)
        return self.document

    def _node(
        self, event: yaml.ScalarEvent | yaml.MappingStartEvent | yaml.SequenceStartEvent, mark: tuple[int, int]
    ) -> None:
        if event.anchor is not None:
            self._refuse(mark, f"the anchor &{event.anchor}", "no anchors and aliases", "Write the value out.")
        if event.tag is not None:
            self._refuse(mark, f"the tag {event.tag}", "no tags", "Remove it; quotes make text of anything.")
        if len(self.stack) >= DEEPEST:
            self._refuse(mark, f"nesting deeper than {DEEPEST} levels", "a rule file as documented", "Remove brackets.")
        waiting = bool(self.stack) and isinstance(self.stack[-1][1], dict) and self.key[-1] is None
        if waiting:
            if not isinstance(event, yaml.ScalarEvent):
                self._refuse(mark, "a list or mapping as a key", "a word as a key", "Put it in quotes if it is text.")
            else:
                self._take_key(event.value, mark)
            return
        if isinstance(event, yaml.ScalarEvent):
            self._put(self._scalar(event, mark), mark)
        else:
            container: dict[str, object] | list[object] = {} if isinstance(event, yaml.MappingStartEvent) else []
            path = self._put(container, mark)
            self.stack.append((path, container))
            self.key.append(None)

    def _take_key(self, name: str, mark: tuple[int, int]) -> None:
        path, container = self.stack[-1]
        here = (*path, name)
        if name in container:
            first = self.document.keys[here]
            wanted = f"each key once (first in line {first[0]})"
            mistake = RuleFileError(self._at(mark), f"the key '{name}' a second time", wanted, "Remove one of them.")
            self.document.mistakes.append(mistake)
        self.document.keys.setdefault(here, mark)
        self.key[-1] = name

    def _put(self, value: object, mark: tuple[int, int]) -> Path:
        if not self.stack:
            self.document.data = value
            self.document.values[()] = mark
            return ()
        path, container = self.stack[-1]
        if isinstance(container, list):
            here: Path = (*path, len(container))
            container.append(value)
        else:
            name = self.key[-1] or ""
            self.key[-1] = None
            here = (*path, name)
            container[name] = value
        self.document.values[here] = mark
        return here

    def _scalar(self, event: yaml.ScalarEvent, mark: tuple[int, int]) -> object:
        text: str = event.value
        if not event.implicit[0]:
            return text
        if text in _NOTHING:
            return None
        if text in _WORDS:
            return _WORDS[text]
        if _INTEGER.fullmatch(text):
            return int(text)
        number = float(text) if _NUMBER.fullmatch(text) else float("nan")
        if math.isfinite(number):
            return number
        if _NUMBER.fullmatch(text) or text.lower().lstrip("+-") in (".inf", ".nan"):
            self.document.mistakes.append(
                RuleFileError(self._at(mark), f"the number {text[:40]}", "a finite number", "Quotes make text of it.")
            )
            return 0
        return text

    def _at(self, mark: tuple[int, int]) -> str:
        return f"{self.document.source}:{mark[0]}:{mark[1]}"

    def _refuse(self, mark: tuple[int, int], came: str, wanted: str, todo: str) -> None:
        raise RuleFileError(self._at(mark), came, wanted, todo)
