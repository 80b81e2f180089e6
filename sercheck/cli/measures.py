"""``sercheck measures``: the measures, their fields, formulas and sources."""

from __future__ import annotations

import json
from typing import Any

import click

from sercheck.cli.budget_text import facts, page
from sercheck.measures import names
from sercheck.rulebook import load_rules
from sercheck.rulebook.describe import describe, summary
from sercheck.rulebook.model import RuleKeys


@click.command("measures")
@click.argument("name", required=False)
@click.option("--rules", type=click.Path(), metavar="FILE", help="Explain the alarm budget of this rule file.")
@click.option("--format", "form", type=click.Choice(["text", "json"]), default="text", help="How to print it.")
def command(name: str | None, rules: str | None, form: str) -> None:
    """List the measures, tell all about one, or explain the alarm budget of a rule file."""
    if rules is not None:
        if name is not None:
            raise click.UsageError("a measure or --rules, not both")
        book = load_rules(rules)
        click.echo(json.dumps(facts(book), indent=2, ensure_ascii=False) if form == "json" else page(book))
    elif name is None:
        lines = [summary(found) for found in names()]
        click.echo(json.dumps(lines, indent=2, ensure_ascii=False) if form == "json" else _list(lines))
    else:
        told = describe(name)
        click.echo(json.dumps(told, indent=2, ensure_ascii=False) if form == "json" else _page(told))


def _list(lines: list[dict[str, Any]]) -> str:
    wide = max((len(line["name"]) for line in lines), default=0)
    return "\n".join(f"{line['name']:{wide}}  {line['about']}" for line in lines)


def _page(told: dict[str, Any]) -> str:
    rows = [(field["name"], field["type"], field["default"], field["about"]) for field in told["fields"]]
    text = [told["name"], "", told["text"], "", f"stays: {', '.join(told['stays'])}"]
    if told["bounds_in"] == "time":
        text.append("Bounds are lengths in time, such as 6h.")
    text.extend(["", told["budget"], "", "Fields beside those of every rule:" if rows else "No fields of its own."])
    wide = [max(len(row[place]) for row in rows) for place in range(3)] if rows else []
    text.extend(
        "  " + "  ".join([*(f"{cell:{width}}" for cell, width in zip(row, wide, strict=False)), row[3]]).rstrip()
        for row in rows
    )
    text.extend(["", "Keys of every rule:", *_common()])
    return "\n".join(text)


def _common() -> list[str]:
    """The keys that every rule may have, one a line."""
    wide = max(map(len, RuleKeys.model_fields))
    return [
        f"  {name:{wide}}  {'required: ' if field.is_required() else ''}{field.description}"
        for name, field in RuleKeys.model_fields.items()
    ]
