"""What is known of a measure, for people and programs; depends on the measures and the budget."""

from __future__ import annotations

import json
from typing import Any

from sercheck.measures import get, text_of
from sercheck.rulebook.bounds import allowed
from sercheck.rulebook.budget import of_measure


def summary(name: str) -> dict[str, Any]:
    """Name and first line of a measure."""
    measure = get(name)
    return {
        "name": name,
        "about": (text_of(measure).splitlines() or [""])[0],
        "stays": allowed(type(measure)),
        "reads": "values" if measure.of_values else "clock",
    }


def describe(name: str) -> dict[str, Any]:
    """All about one measure: its documentation, bounds, share of the budget and fields."""
    measure = get(name)
    return {
        **summary(name),
        "text": text_of(measure),
        "bounds_in": measure.bounds_in,
        "budget": of_measure(type(measure)),
        "fields": _fields(measure.Fields.model_json_schema(by_alias=True)),
    }


def _fields(schema: dict[str, Any]) -> list[dict[str, str]]:
    required = schema.get("required", ())
    return [
        {
            "name": name,
            "type": _type(told, schema.get("$defs", {})),
            "default": "required" if name in required else f"default {json.dumps(told.get('default'))}",
            "about": told.get("description", ""),
        }
        for name, told in schema.get("properties", {}).items()
    ]


def _type(told: dict[str, Any], models: dict[str, Any]) -> str:
    """A type of JSON Schema as a person says it."""
    if "$ref" in told:
        model = models[told["$ref"].rsplit("/", 1)[1]]
        return "{" + ", ".join(f"{key}: {_type(item, models)}" for key, item in model["properties"].items()) + "}"
    if "enum" in told or "const" in told:
        return " | ".join(str(word) for word in told.get("enum", [told.get("const")]))
    for word in ("anyOf", "oneOf"):
        if word in told:
            return " | ".join(_type(item, models) for item in told[word] if item != {"type": "null"})
    if "prefixItems" in told:
        return "[" + ", ".join(_type(item, models) for item in told["prefixItems"]) + "]"
    if told.get("type") == "array":
        return f"[{_type(told.get('items', {}), models)}, ...]"
    return {"string": "text", "integer": "whole number", "boolean": "true | false"}.get(
        told.get("type", ""), str(told.get("type", "anything"))
    )
