"""``sercheck ledger verify`` and ``prune``: parse, call, print."""

from __future__ import annotations

import json
import sys

import click

from sercheck.cli import moments
from sercheck.cli.ledger_options import STORE

_FORM = click.option("--format", "form", type=click.Choice(["text", "json"]), default="text", show_default=True)


@click.command("verify")
@_FORM
@STORE
def verify(form: str, store: str | None) -> None:
    """Check that the store holds together; tell what is wrong and what to do.

    Every batch has its records, every released batch its rows in the archive, every file the bytes that were
    written. Nothing is changed. Ends with 0 when all is well, 1 when something is wrong.
    """
    from sercheck.store.ledger import open_ledger
    from sercheck.store.where import archive_place
    from sercheck.verify import verify as check

    with open_ledger(store) as ledger:
        found = check(ledger, archive_place(store))
        place = ledger.place
    if form == "json":
        faults = [vars(fault) for fault in found.faults]
        click.echo(json.dumps({**vars(found), "faults": faults}, ensure_ascii=False))
    else:
        for fault in found.faults:
            click.echo(fault.sentence())
        wrong = f"{len(found.faults)} faults" if found.faults else "nothing is wrong"
        old = f"; {found.unchecked} files without a hash (kept by an older version) are unchecked but for their rows"
        old = old if found.unchecked else ""
        click.echo(
            f"{wrong} in {place}: {found.batches} batches, {found.records} records, {found.files} files with "
            f"{found.rows} rows{old}"
        )
    sys.exit(1 if found.faults else 0)


@click.command("prune")
@click.option("--before", required=True, metavar="DATE", callback=moments.since,
              help="Remove batches whose newest row is older: a date, a time, or 400D back from now.")  # fmt: skip
@_FORM
@STORE
def prune(before: str, form: str, store: str | None) -> None:
    """Remove old batches from the ledger with their records, in one transaction.

    What an open episode, an untold desk or a baseline needs stays, and so do the last seven batches of every feed. The
    rows in the archive stay: they teach.
    """
    from sercheck.store.ledger import open_ledger
    from sercheck.store.prune import prune as remove

    with open_ledger(store) as ledger:
        done = remove(ledger, before)
        place = ledger.place
    if form == "json":
        click.echo(json.dumps(vars(done)))
    else:
        kept = f"; {done.kept} older batches stay because they are needed" if done.kept else ""
        click.echo(
            f"removed {done.batches} batches with {done.records} records, {done.episodes} episodes and "
            f"{done.baselines} baselines from {place}{kept}"
        )
