"""JSON Schema (2020-12) of a record, made from the record's own columns; depends on ``record`` only."""

from __future__ import annotations

from typing import Any

from sercheck.record import COLUMNS, INTEGERS, NUMBERS, TIMES

ALWAYS = frozenset({
    "record_id", "feed", "batch_id", "batch_fingerprint", "judged_at", "rule", "measure", "outcome",
    "rules_fingerprint", "sercheck_version",
})  # fmt: skip
"""Columns that are never null."""

WORDS = {"outcome": ["pass", "fail", "undecided"], "action": ["hold", "note"]}
SHARES = frozenset({"p_value", "false_alarm", "false_alarm_used"})
"""Probabilities."""


def record_schema() -> dict[str, Any]:
    """The schema of one line of records: every column is there, null where there is nothing to say."""
    return {
        "$schema": "https://json-schema.org/draft/2020-12/schema",
        "title": "Record",
        "description": "The outcome of one rule on one series of one batch.",
        "type": "object",
        "properties": {name: _column(name) for name in COLUMNS},
        "required": list(COLUMNS),
        "additionalProperties": False,
    }


def _column(name: str) -> dict[str, Any]:
    kind = "integer" if name in INTEGERS else "number" if name in NUMBERS else "string"
    told: dict[str, Any] = {"type": kind if name in ALWAYS else [kind, "null"]}
    if name in TIMES:
        told["format"] = "date-time"
    if name in WORDS:
        told["enum"] = [*WORDS[name], *([] if name in ALWAYS else [None])]
    if name in SHARES:
        told.update(minimum=0, maximum=1)
    return told
