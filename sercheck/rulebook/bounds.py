"""Reads ``stays`` of a rule; depends on the measure contract, the lengths and the collected mistakes."""

from __future__ import annotations

from typing import Any, Literal, cast

from sercheck.measure import Measure, Stays
from sercheck.rulebook import lengths
from sercheck.rulebook.mistakes import Mistakes, listed, nearest, shown
from sercheck.rulebook.places import Path

WORDS = {"below": "below", "above": "above", "between": "between", "like": "like_history", "present": "present"}
"""The key of ``stays`` for each kind of bound."""


def allowed(measure: type[Measure]) -> list[str]:
    """The keys of ``stays`` that a measure accepts."""
    return [word for word, kind in WORDS.items() if kind in measure.kinds]


def read_stays(
    value: dict[str, Any], path: Path, name: str, measure: type[Measure], mistakes: Mistakes
) -> Stays | None:
    """The bound of a rule, or None when it is wrong."""
    words = allowed(measure)
    for word in value:
        if word not in WORDS:
            mistakes.unknown_key((*path, word), words, {"a kind of bound": WORDS})
        elif word not in words:
            mistakes.add((*path, word), f"'{word}', which the measure {name} does not know", listed(words), key=True)
    if len(value) != 1:
        came = f"{len(value)} bounds ({', '.join(value)})" if value else "no bound"
        mistakes.add(path, came, f"exactly one of {listed(words)}", "'between' holds two limits." if value else "")
    if len(value) != 1 or not set(value) <= set(words):
        return None
    ((word, given),) = value.items()
    where = (*path, word)
    if word == "like":
        return _fixed(given == "history", Stays("like_history"), where, given, "history", mistakes)
    if word == "present":
        return _fixed(given is True, Stays("present"), where, given, "true", mistakes)
    if word == "between":
        return _between(given, where, measure, mistakes)
    number = _number(given, where, measure, mistakes)
    if number is None:
        return None
    kind = cast("Literal['below', 'above']", word)
    return Stays(kind, high=number) if kind == "below" else Stays(kind, low=number)


def _fixed(right: bool, stays: Stays, path: Path, given: object, wanted: str, mistakes: Mistakes) -> Stays | None:
    if right:
        return stays
    mistakes.add(path, shown(given), wanted, nearest(given, {"the only word that is allowed here": [wanted]}))
    return None


def _between(given: object, path: Path, measure: type[Measure], mistakes: Mistakes) -> Stays | None:
    if not isinstance(given, list) or len(given) != 2:
        mistakes.add(path, shown(given), "two limits such as [1, 2]")
        return None
    low, high = (_number(item, (*path, place), measure, mistakes) for place, item in enumerate(given))
    if low is None or high is None:
        return None
    if low >= high:
        mistakes.add(path, shown(given), "the smaller limit first, then a larger one")
        return None
    return Stays("between", low, high)


def _number(given: object, path: Path, measure: type[Measure], mistakes: Mistakes) -> float | None:
    if measure.bounds_in == "time":
        try:
            return lengths.fixed_seconds(given if isinstance(given, str) else "")
        except ValueError as trouble:
            mistakes.add(path, shown(given), *trouble.args)
            return None
    if isinstance(given, bool) or not isinstance(given, (int, float)):
        mistakes.add(path, shown(given), "a number")
        return None
    least, most = measure.span
    if not least <= given <= most:
        mistakes.add(path, shown(given), f"a bound from {least:g} to {most:g}", "This measure takes no other values.")
        return None
    return float(given)
