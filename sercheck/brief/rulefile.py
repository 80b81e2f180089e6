"""What a rule file says to people, read from the text that the ledger keeps; depends on nothing of ours.

The text was compiled before: only what people read is taken from it, and what has the wrong form is left out.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any


@dataclass(frozen=True)
class Said:
    """What a rule says of itself."""

    about: str = ""
    runbook: str = ""
    tell: tuple[str, ...] = ()


@dataclass(frozen=True)
class RuleFile:
    """What a file says of its feed and its rules, which keep their order."""

    about: str = ""
    timezone: str = "UTC"
    rules: dict[str, Said] = field(default_factory=dict)


def read_rule_file(text: str) -> RuleFile:
    """Read the YAML of a rule file."""
    import yaml

    try:
        read = yaml.safe_load(text)
    except yaml.YAMLError:  # kept by a sercheck that read it otherwise
        return RuleFile()
    if not isinstance(read, dict):
        return RuleFile()
    tell = _texts(read.get("tell"))
    listed = read.get("rules")
    rules = [rule for rule in listed if isinstance(rule, dict)] if isinstance(listed, list) else []
    said = {
        str(rule.get("name")): Said(_text(rule, "about"), _text(rule, "runbook"), _texts(rule.get("tell")) or tell)
        for rule in rules
    }
    return RuleFile(_text(read, "about"), str(read.get("timezone") or "UTC"), said)


def _text(told: dict[Any, Any], name: str) -> str:
    return str(told.get(name) or "")


def _texts(told: object) -> tuple[str, ...]:
    if isinstance(told, str):
        return (told,)
    return tuple(map(str, told)) if isinstance(told, list) else ()
