"""Rule files: YAML to compiled rules, with every mistake of a file told at once."""

from __future__ import annotations

from sercheck.rulebook.compiled import Rule, Rulebook
from sercheck.rulebook.load import load_rules

__all__ = ["Rule", "Rulebook", "load_rules"]
