"""``sercheck schema``: JSON Schema of rule files and of records, on stdout."""

from __future__ import annotations

import json

import click


@click.command("schema")
@click.argument("what", type=click.Choice(["rules", "record"]))
def command(what: str) -> None:
    """Print the JSON Schema of rule files (for editors) or of a record (for consumers)."""
    if what == "rules":
        from sercheck.rulebook.schema import rules_schema as schema
    else:
        from sercheck.rulebook.record_schema import record_schema as schema
    click.echo(json.dumps(schema(), indent=2, ensure_ascii=False))
