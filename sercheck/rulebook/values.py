"""What a value of a rule file may be: its type, reading and JSON Schema; depends on pydantic and the lengths."""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from datetime import date
from typing import Annotated, Any

from pydantic import PlainValidator, WithJsonSchema

from sercheck.rulebook import lengths
from sercheck.rulebook.mistakes import Refusals, listed, nearest, refuse
from sercheck.rulebook.places import Path

WORD = r"^[A-Za-z0-9_][A-Za-z0-9_.-]*$"
LARGEST_RISK = 0.5
"""A rule that a healthy batch breaks more often than not says nothing."""

NAME: dict[str, Any] = {"type": "string", "minLength": 1}
TIME: dict[str, Any] = {"type": "string", "pattern": lengths.LENGTH_PATTERN}
STEPS: dict[str, Any] = {"type": "integer", "minimum": 1}


def one_or_list(item: Mapping[str, Any]) -> dict[str, Any]:
    """Schema of one item or a list of them."""
    return {"anyOf": [item, {"type": "array", "items": item, "minItems": 1}]}


def _read(parse: Callable[[str], object], value: object) -> Any:
    """Parse a text, saying what was wanted when it cannot be."""
    if not isinstance(value, str):
        value = "" if value is None or isinstance(value, (list, dict, bool)) else str(value)
    try:
        return parse(value)
    except ValueError as trouble:
        wanted, todo = trouble.args
        refuse(wanted, todo)


def _text(value: object) -> str:
    if not isinstance(value, str) or not value.strip():
        refuse("text", "Put numbers and true, false in quotes." if isinstance(value, (bool, int, float)) else "")
    return value


def _word(value: object) -> str:
    if not isinstance(value, str) or not re.fullmatch(WORD, value):
        refuse("a name of letters, digits, '_', '.' and '-'", "It becomes the name of files and tables.")
    return value


def _place(value: object, place: int) -> tuple[int, ...]:
    """Where an item stands under a value that is one item or a list."""
    return (place,) if isinstance(value, list) else ()


def _texts(value: object, judge: Callable[[str], tuple[str, str] | None] = lambda _: None) -> tuple[str, ...]:
    """One name or a list; ``judge`` tells what is wrong with a name."""
    items = value if isinstance(value, list) else [value]
    refusals = Refusals()
    if not items:
        refusals.add("a name or a list of names")
    for place, item in enumerate(items):
        if not isinstance(item, str) or not item.strip():
            refusals.add("a name", "Put numbers in quotes.", _place(value, place))
        elif item in items[:place]:
            refusals.add("each name once", "", _place(value, place))
        elif (wrong := judge(item)) is not None:
            refusals.add(*wrong, _place(value, place))
    refusals.end()
    return tuple(items)


def _desks(value: object) -> tuple[str, ...]:
    wrong = (
        "the name of a desk (letters, digits, '_', '.' and '-')",
        "Its address belongs into the environment variable SERCHECK_DESK_<NAME>.",
    )
    return _texts(value, lambda name: None if re.fullmatch(WORD, name) else wrong)


def chosen(words: tuple[str, ...]) -> PlainValidator:
    """One of the words or a list of them, each once."""

    def judge(name: str) -> tuple[str, str] | None:
        hint = nearest(name, {"a word that is allowed here": words})
        return None if name in words else (f"one of {listed(words)}", hint)

    return PlainValidator(lambda value: _texts(value, judge))


def _time(value: object) -> str:
    _read(lengths.seconds, value)
    return str(value)


def _length(value: object) -> str | int:
    if isinstance(value, int) and not isinstance(value, bool):
        if value < 1:
            refuse("at least 1 step")
        return value
    if not isinstance(value, str):
        refuse(f"{lengths.WANTED}, or a whole number of steps")
    return _time(value)


def _window(value: object) -> str | int:
    if value == "batch":
        return "batch"
    if isinstance(value, str) and not re.fullmatch(lengths.LENGTH_PATTERN, value):
        hint = nearest(value, {"the batch itself": ["batch"]}) or _hint(value)
        refuse(f"batch, {lengths.WANTED}, or a whole number of steps", hint)
    return _length(value)


def _hint(text: str) -> str:
    try:
        lengths.seconds(text)
    except ValueError as trouble:
        return str(trouble.args[1])
    return ""


def _cadence(value: object) -> str:
    return str(_read(lengths.cadence, value))


def _period(value: object) -> str:
    if value == "irregular":
        refuse("a length in time such as 1D, or an offset such as B or MS")
    return _cadence(value)


def _number(value: object) -> float:
    if isinstance(value, bool) or not isinstance(value, (int, float)):
        refuse("a number")
    return float(value)


def _zone(value: object) -> str:
    return str(_read(lengths.zone, value))


def _false_holds(value: object) -> tuple[float, str]:
    count, per = _read(lengths.allowed_alarms, value)
    return float(count), str(per)


def _positive(value: object) -> float:
    if _number(value) <= 0:
        refuse("a number above 0")
    return _number(value)


def _risk(value: object) -> float:
    if isinstance(value, bool) or not isinstance(value, (int, float)) or not 0 < value <= LARGEST_RISK:
        refuse(f"a probability above 0 and at most {LARGEST_RISK}", "Common risks are 0.01 and 0.001.")
    return float(value)


def _mapping(value: object, example: str) -> dict[str, Any]:
    if not isinstance(value, dict):
        refuse(f"a mapping such as {example}")
    return value


def _seasons(value: object) -> dict[str, str | int]:
    refusals = Refusals()
    for name, length in _mapping(value, "{day: 1D}").items():
        if not re.fullmatch(r"[A-Za-z_]\w*", name):
            refusals.add("a season named by a word", "", (name,))
        if isinstance(length, str):
            _try(lengths.seconds, length, (name,), refusals)
        elif isinstance(length, bool) or not isinstance(length, int) or length < 2:
            refusals.add(f"{lengths.WANTED}, or at least 2 steps", "", (name,))
    refusals.end()
    return _mapping(value, "")


def _try(parse: Callable[[str], object], value: object, at: Path, refusals: Refusals) -> None:
    try:
        parse(str(value))
    except ValueError as trouble:
        refusals.add(trouble.args[0], trouble.args[1], at)


def _limits(value: object) -> dict[str, float]:
    readers: dict[str, Callable[[str], float]] = {"memory": lengths.memory, "time": lengths.fixed_seconds}
    refusals = Refusals()
    for name, given in _mapping(value, "{memory: 2GB, time: 10min}").items():
        if name in readers:
            _try(readers[name], given, (name,), refusals)
        else:
            refusals.add("only memory and time", nearest(name, {"a limit": readers}), (name,), key=True)
    refusals.end()
    return {name: readers[name](str(given)) for name, given in _mapping(value, "").items()}


def _baseline(value: object) -> dict[str, str]:
    refusals = Refusals()
    for name, given in _mapping(value, "{from: 90D, refresh: 7D}").items():
        dated = name == "from" and isinstance(given, str) and re.match(r"^[0-9]{4}-", given)
        if name in ("from", "refresh"):
            _try(lengths.day if dated else lengths.seconds, given, (name,), refusals)
        else:
            hint = nearest(name, {"a key of baseline": ["from", "refresh"]})
            refusals.add("only from and refresh", hint, (name,), key=True)
    refusals.end()
    return {name: str(given) for name, given in _mapping(value, "").items()}


def _history(value: object) -> tuple[str, ...]:
    if isinstance(value, dict):
        return (_source(value),)
    return _texts(value)


def _source(value: dict[str, object]) -> str:
    from urllib.parse import quote

    for name in value:
        if name not in ("source", "table", "query"):
            refuse("source and one of table, query",
                   nearest(name, {"a key of history": ["source", "table", "query"]}), (name,))  # fmt: skip
    asked = [name for name in ("table", "query") if name in value]
    if "source" not in value or len(asked) != 1:
        refuse("{source: NAME, table: ...} or {source: NAME, query: ...}",
               "The database's address belongs into the environment variable SERCHECK_SOURCE_<NAME>.")  # fmt: skip
    if not isinstance(value["source"], str) or not re.fullmatch(r"[A-Za-z]\w*", value["source"]):
        refuse("the name of a source (letters, digits, '_')",
               "Its address belongs into the environment variable SERCHECK_SOURCE_<NAME>.", ("source",))  # fmt: skip
    if not isinstance(value[asked[0]], str) or not value[asked[0]]:
        refuse("text", "", (asked[0],))
    return f"db:{value['source']}?{asked[0]}={quote(str(value[asked[0]]), safe='')}"


def _closed(value: object) -> str | list[Any]:
    if isinstance(value, str) and value.strip():
        return value
    if not isinstance(value, list):
        refuse("a list of dates such as [2026-12-24, 2026-12-25], or the name of a file of dates")
    refusals = Refusals()
    for place, item in enumerate(value):
        _try(lengths.day, item, (place,), refusals)
    refusals.end()
    return [lengths.day(str(item)) for item in value]


Text = Annotated[str, PlainValidator(_text), WithJsonSchema(NAME)]
Word = Annotated[str, PlainValidator(_word), WithJsonSchema({"type": "string", "pattern": WORD})]
Texts = Annotated[tuple[str, ...], PlainValidator(_texts), WithJsonSchema(one_or_list(NAME))]
Desks = Annotated[
    tuple[str, ...], PlainValidator(_desks), WithJsonSchema(one_or_list({"type": "string", "pattern": WORD}))
]
Window = Annotated[str | int, PlainValidator(_window), WithJsonSchema({"anyOf": [{"const": "batch"}, TIME, STEPS]})]
Zone = Annotated[str, PlainValidator(_zone), WithJsonSchema(NAME)]
Cadence = Annotated[
    str, PlainValidator(_cadence), WithJsonSchema({"type": "string", "pattern": lengths.CADENCE_PATTERN})
]
Period = Annotated[
    str,
    PlainValidator(_period),
    WithJsonSchema({"type": "string", "pattern": lengths.CADENCE_PATTERN, "not": {"const": "irregular"}}),
]
Positive = Annotated[float, PlainValidator(_positive), WithJsonSchema({"type": "number", "exclusiveMinimum": 0})]
Risk = Annotated[
    float, PlainValidator(_risk), WithJsonSchema({"type": "number", "exclusiveMinimum": 0, "maximum": LARGEST_RISK})
]
FalseHolds = Annotated[
    tuple[float, str],
    PlainValidator(_false_holds),
    WithJsonSchema({"type": "string", "pattern": rf"^[0-9]+(\.[0-9]+)? per {lengths.LENGTH_PATTERN[1:]}"}),
]
Seasons = Annotated[
    dict[str, str | int],
    PlainValidator(_seasons),
    WithJsonSchema({"type": "object", "additionalProperties": {"anyOf": [TIME, {"type": "integer", "minimum": 2}]}}),
]
ClosedDays = Annotated[
    str | list[date],
    PlainValidator(_closed),
    WithJsonSchema(
        {"anyOf": [NAME, {"type": "array", "items": {"type": "string", "pattern": "^[0-9]{4}-[0-9]{2}-[0-9]{2}$"}}]}
    ),
]
History = Annotated[
    tuple[str, ...],
    PlainValidator(_history),
    WithJsonSchema(
        {
            "anyOf": [
                *one_or_list(NAME)["anyOf"],
                {
                    "type": "object",
                    "properties": {"source": NAME, "table": NAME, "query": NAME},
                    "required": ["source"],
                    "oneOf": [{"required": ["table"]}, {"required": ["query"]}],
                    "additionalProperties": False,
                },
            ]
        }
    ),
]
Baseline = Annotated[
    dict[str, str],
    PlainValidator(_baseline),
    WithJsonSchema({"type": "object", "properties": {"from": NAME, "refresh": TIME}, "additionalProperties": False}),
]
Limits = Annotated[
    dict[str, float],
    PlainValidator(_limits),
    WithJsonSchema(
        {
            "type": "object",
            "properties": {
                "memory": {"type": "string", "pattern": rf"^[0-9]+(\.[0-9]+)? ?({'|'.join(lengths.SIZES)})$"},
                "time": TIME,
            },
            "additionalProperties": False,
        }
    ),
]
