"""JSON Schema (2020-12) of rule files; depends on the models of this folder and the measures.

It says what one key may hold, and which keys a measure has. What one key says about another (a season that is not
declared, a name used twice) only reading the file can tell.
"""

from __future__ import annotations

from typing import Any

from sercheck.measure import Measure
from sercheck.measures import get, names
from sercheck.rulebook import lengths
from sercheck.rulebook.after import SCHEMA as AFTER
from sercheck.rulebook.bounds import WORDS
from sercheck.rulebook.model import FileKeys, RuleKeys

DIALECT = "https://json-schema.org/draft/2020-12/schema"
_CLOCK_HAS_NOT = ("of", "after")
_EXACT_HAS_NOT = ("weight", "false_alarm")


def rules_schema() -> dict[str, Any]:
    """The schema of a rule file, with a condition for each measure that is installed.

    Raises:
        UsageError: when a measure cannot be loaded.
    """
    schema = _tidy(FileKeys.model_json_schema())
    rule = _tidy(RuleKeys.model_json_schema())
    definitions: dict[str, Any] = {**schema.pop("$defs", {}), **rule.pop("$defs", {})}
    rule.pop("additionalProperties")
    rule["properties"]["measure"] = {**rule["properties"]["measure"], "enum": list(names())}
    rule["properties"]["after"] = {**rule["properties"]["after"], **AFTER}
    rule["properties"]["stays"] = {
        **rule["properties"]["stays"],
        "type": "object",
        "properties": dict.fromkeys(WORDS, True),
        "minProperties": 1,
        "maxProperties": 1,
        "additionalProperties": False,
    }
    rule["allOf"] = []
    for name in names():
        condition, more = _condition(name, get(name))
        rule["allOf"].append(condition)
        definitions.update(more)
    rule["not"] = {"required": ["weight", "false_alarm"]}
    rule["unevaluatedProperties"] = False
    definitions["rule"] = rule
    schema["properties"]["rules"] = {**schema["properties"]["rules"], "items": {"$ref": "#/$defs/rule"}}
    schema["not"] = {"required": ["false_holds", "false_alarm"]}
    schema["dependentRequired"] = {"false_holds": ["batch_every"]}
    return {"$schema": DIALECT, **schema, "$defs": definitions}


def _tidy(schema: dict[str, Any]) -> dict[str, Any]:
    """Without the null that stands for an absent key, and without what only repeats the names of keys."""
    for name, told in schema["properties"].items():
        told.pop("title", None)
        choices = [item for item in told.get("anyOf", ()) if item != {"type": "null"}]
        if len(choices) == 1 and len(told["anyOf"]) == 2:
            told.pop("anyOf")
            told.update(choices[0])
        if told.get("default", "") is None:
            told.pop("default")
        schema["properties"][name] = told
    return schema


def _condition(name: str, measure: Measure) -> tuple[dict[str, Any], dict[str, Any]]:
    """What holds for the rules of one measure, and the definitions it refers to (named after the measure)."""
    fields = measure.Fields.model_json_schema(ref_template=f"#/$defs/{name}.{{model}}", by_alias=True)
    more = {f"{name}.{model}": told for model, told in fields.get("$defs", {}).items()}
    absent = (*(() if measure.of_values else _CLOCK_HAS_NOT), *(_EXACT_HAS_NOT if measure.exact else ()))
    then: dict[str, Any] = {
        "properties": {
            **{key: {item: value for item, value in told.items() if item != "title"}
               for key, told in fields.get("properties", {}).items()},
            **dict.fromkeys(absent, False),
            "stays": {"properties": _stays(type(measure)), "additionalProperties": False},
        },
    }  # fmt: skip
    if fields.get("required"):
        then["required"] = fields["required"]
    for word in ("anyOf", "oneOf", "allOf", "not", "dependentRequired"):
        if word in fields:
            then[word] = fields[word]
    return {"if": {"properties": {"measure": {"const": name}}, "required": ["measure"]}, "then": then}, more


def _stays(measure: type[Measure]) -> dict[str, Any]:
    """The bounds that a measure accepts."""
    least, most = measure.span
    number: dict[str, Any] = {"type": "number"}
    if measure.bounds_in == "time":
        number = {"type": "string", "pattern": lengths.FIXED_PATTERN}
    else:
        number.update({key: edge for key, edge in (("minimum", least), ("maximum", most)) if abs(edge) < float("inf")})
    shapes: dict[str, Any] = {
        "below": number,
        "above": number,
        "between": {"type": "array", "items": number, "minItems": 2, "maxItems": 2},
        "like": {"const": "history"},
        "present": {"const": True},
    }
    return {word: shapes[word] for word, kind in WORDS.items() if kind in measure.kinds}
