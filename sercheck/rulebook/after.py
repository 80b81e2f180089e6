"""Reads ``after`` of a rule; depends on the compiled form, the lengths and the collected mistakes."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Literal, cast

from sercheck.rulebook import lengths
from sercheck.rulebook.compiled import Length, Transform
from sercheck.rulebook.mistakes import Mistakes, listed, nearest, shown
from sercheck.rulebook.places import Path
from sercheck.rulebook.values import STEPS, TIME, one_or_list

BARE = ("difference", "log", "detrended", "ranks")
KEYED = ("difference", "without_season", "every")
TAKES = ("sum", "mean", "max", "count")

WANTED = "difference, {difference: k}, log, detrended, {without_season: day}, ranks or {every: 1D, take: sum}"

_LENGTH = {"anyOf": [TIME, STEPS]}
SCHEMA: dict[str, Any] = one_or_list(
    {
        "anyOf": [
            {"type": "string", "enum": list(BARE)},
            {
                "type": "object",
                "properties": {"difference": {"anyOf": [{"type": "string", "minLength": 1}, STEPS]}},
                "required": ["difference"],
                "additionalProperties": False,
            },
            {
                "type": "object",
                "properties": {"without_season": {"type": "string", "minLength": 1}},
                "required": ["without_season"],
                "additionalProperties": False,
            },
            {
                "type": "object",
                "properties": {"every": _LENGTH, "take": {"type": "string", "enum": list(TAKES)}},
                "required": ["every", "take"],
                "additionalProperties": False,
            },
        ]
    }
)
"""JSON Schema of ``after``."""


def read_after(
    value: object, path: Path, seasons: Mapping[str, Length] | None, mistakes: Mistakes
) -> tuple[Transform, ...]:
    """The transforms of ``after``, in order; ``seasons`` is None when the file's own cannot be read."""
    if not isinstance(value, list):
        return tuple(filter(None, [_one(value, path, seasons, mistakes)]))
    if not value:
        mistakes.add(path, "an empty list", WANTED)
    return tuple(filter(None, (_one(item, (*path, place), seasons, mistakes) for place, item in enumerate(value))))


def _one(value: object, path: Path, seasons: Mapping[str, Length] | None, mistakes: Mistakes) -> Transform | None:
    if isinstance(value, str) and value in BARE:
        return Transform(cast("Literal['difference', 'log', 'detrended', 'ranks']", value))
    if isinstance(value, str) and value in KEYED:
        mistakes.add(path, f"'{value}' alone", WANTED, f"Say of what: {{{value}: ...}}.")
    elif not isinstance(value, dict):
        known = {"a transform": (*BARE, *KEYED)}
        came = "a list in a list" if isinstance(value, list) else shown(value)
        mistakes.add(path, came, WANTED, nearest(value, known))
    elif "every" in value:
        return _every(value, path, mistakes)
    elif len(value) == 1 and "difference" in value:
        return _difference(value["difference"], (*path, "difference"), seasons, mistakes)
    elif len(value) == 1 and "without_season" in value:
        name = value["without_season"]
        if _season((*path, "without_season"), name, seasons, mistakes):
            return Transform("without_season", name)
    else:
        odd = [key for key in value if key not in KEYED]
        if odd:
            mistakes.add((*path, odd[0]), f"unknown transform '{odd[0]}'", WANTED,
                         nearest(odd[0], {"a transform": (*BARE, *KEYED)}), key=True)  # fmt: skip
        else:
            mistakes.add(path, f"a mapping of {len(value)} transforms" if value else "an empty mapping", WANTED,
                         "A list keeps several in their order.")  # fmt: skip
    return None


def _every(value: dict[str, Any], path: Path, mistakes: Mistakes) -> Transform | None:
    fine = True
    for key in value:
        if key not in ("every", "take"):
            known = {"a key of this transform": ("every", "take")}
            mistakes.add((*path, key), f"unknown key '{key}'", "every and take", nearest(key, known), key=True)
            fine = False
    length, take = value["every"], value.get("take")
    if isinstance(length, int) and not isinstance(length, bool):
        right = length >= 1
    else:
        try:
            right = isinstance(length, str) and lengths.seconds(length) > 0
        except ValueError:
            right = False
    if not right:
        mistakes.add((*path, "every"), shown(length), f"{lengths.WANTED}, or a whole number of steps")
        fine = False
    if take not in TAKES:
        came = "no 'take'" if "take" not in value else shown(take)
        where = (*path, "take") if "take" in value else path
        mistakes.add(where, came, f"take: one of {listed(TAKES)}", nearest(take, {"a way to take": TAKES}))
        fine = False
    return Transform("every", length, take) if fine else None


def _difference(
    value: object, path: Path, seasons: Mapping[str, Length] | None, mistakes: Mistakes
) -> Transform | None:
    if isinstance(value, int) and not isinstance(value, bool):
        if value >= 1:
            return Transform("difference", value)
    elif isinstance(value, str):
        return Transform("difference", value) if _season(path, value, seasons, mistakes) else None
    mistakes.add(path, shown(value), "a number of steps from 1 on, or the name of a season")
    return None


def _season(path: Path, name: object, seasons: Mapping[str, Length] | None, mistakes: Mistakes) -> bool:
    """Whether a name is that of a season (taken for true when the file's seasons cannot be read)."""
    if isinstance(name, str) and (seasons is None or name in seasons):
        return True
    mistakes.unknown(path, "season of this file", name, seasons or (), "Declare it under 'seasons'.")
    return False
