"""``sercheck gate``: parse, call, print."""

from __future__ import annotations

import json
import sys
from typing import TYPE_CHECKING

import click

from sercheck.cli.say import plain, say

if TYPE_CHECKING:
    from sercheck.verdict import Verdict


@click.command("gate")
@click.argument("rules", type=click.Path())
@click.argument("batch", type=click.Path(), nargs=-1, required=True)
@click.option("--history", multiple=True, metavar="PATH", help="Rows let in before: files, a glob or a source.")
@click.option(
    "--records", metavar="FILE", help="Write the records: .jsonl, .csv or .parquet; - is JSON lines on stdout."
)
@click.option("--store", envvar="SERCHECK_STORE", default=".sercheck", show_default=True, metavar="DIR|URL")
@click.option("--brief", metavar="FILE.html", help="Write the page for the person on call.")
@click.option("--metrics", metavar="FILE", help="Write numbers for other systems in the OpenMetrics text format.")
@click.option("--released-to", type=click.Path(), metavar="DIR", help="Move the batch files here when released.")
@click.option("--held-to", type=click.Path(), metavar="DIR", help="Move the batch files here when held.")
@click.option("--as-of", metavar="TIME", help="The clock to judge by (default: now).")
@click.option("--no-keep", is_flag=True, help="Write nothing to store or archive.")
@click.option("--engine", type=click.Choice(["local", "dask"]), default="local", show_default=True)
@click.option("--scheduler", metavar="ADDRESS", help="A running Dask scheduler (default: processes on this machine).")
@click.option("--timings", is_flag=True, help="Tell the seconds that each stage takes.")
@click.option("--format", "form", type=click.Choice(["text", "json"]), default="text", show_default=True)
def command(
    rules: str,
    batch: tuple[str, ...],
    history: tuple[str, ...],
    records: str | None,
    store: str,
    brief: str | None,
    metrics: str | None,
    released_to: str | None,
    held_to: str | None,
    as_of: str | None,
    no_keep: bool,
    engine: str,
    scheduler: str | None,
    timings: bool,
    form: str,
) -> None:
    """Judge BATCH (files, globs or db:NAME?table=TABLE) by the rule file RULES.

    Ends with 0 when the batch is released, 1 when it is held, 2 in trouble.
    """
    from sercheck import stopwatch
    from sercheck.cli.screen import answer
    from sercheck.cli.stages import as_data, stages
    from sercheck.intake.databases import is_source
    from sercheck.outputs import check_place, move_batch
    from sercheck.record import check_suffix
    from sercheck.verdict import gate

    if form == "json" and records == "-":
        raise click.UsageError("--format json and --records - both want stdout; give the records a file")
    if records and records != "-":
        check_suffix(records)
        check_place(records)
    for file in filter(None, (brief, metrics)):
        check_place(file)
    for folder in filter(None, (released_to, held_to)):
        check_place(folder, folder=True)
    if (released_to or held_to) and any(map(is_source, batch)):
        raise click.UsageError("the rows of a database have no file that --released-to or --held-to could move")
    with stopwatch.timed(asked=timings):
        verdict = gate(
            rules, list(batch), list(history) or None, as_of=as_of, store=store, keep=not no_keep, engine=engine,
            scheduler=scheduler,
        )  # fmt: skip
        stopwatch.begin("write")
        if records:
            verdict.table.write(records)
        if form == "json":
            told = verdict.summary() | ({"timings": as_data(stopwatch.timings())} if timings else {})
            click.echo(json.dumps(told, allow_nan=False, ensure_ascii=False))
        else:
            say(answer(verdict))
        if brief:
            _write_brief(brief, verdict, None if store == ".sercheck" else store)
        if metrics:
            _write_metrics(metrics, verdict, None if no_keep else store)
        if timings:
            click.echo(stages(stopwatch.timings()), err=True)
    for sentence in verdict.untold:
        click.echo(plain(sentence, 1000), err=True)
    into = released_to if verdict.released else held_to
    if into:
        move_batch(verdict.paths, into)
    sys.exit(0 if verdict.released else 1)


def _write_metrics(file: str, verdict: Verdict, store: str | None) -> None:
    """Write the numbers, counted by the ledger where it has the batch."""
    from contextlib import nullcontext

    from sercheck.metrics import metrics
    from sercheck.outputs import write_text
    from sercheck.store.ledger import open_ledger

    with nullcontext() if store is None else open_ledger(store) as ledger:
        write_text(file, metrics(verdict, ledger))


def _write_brief(file: str, verdict: Verdict, store: str | None) -> None:
    """Write the page once the decision is stored and told; where that fails the decision stands, and a repeat with the
    same batch changes nothing but writes the page.
    """
    from sercheck.brief.surfaces import shown
    from sercheck.briefing import brief_of_verdict
    from sercheck.outputs import write_text

    write_text(file, shown(brief_of_verdict(verdict, store), "html"))
