"""``sercheck ledger``: look up batches, records and episodes; parse, call, print."""

from __future__ import annotations

import csv
import json
import sys
from typing import TYPE_CHECKING, Any

import click

from sercheck.cli.ledger_episodes import command as episodes
from sercheck.cli.ledger_episodes import episode_page
from sercheck.cli.ledger_episodes import write as write_episodes
from sercheck.cli.ledger_options import BATCHES, FORMAT, STORE, say_more, say_none, so_asked, taking
from sercheck.cli.ledger_text import TEXT_LIMIT, batch_page, batch_table, record_page, record_table
from sercheck.cli.ledger_tidy import prune, verify

if TYPE_CHECKING:
    from sercheck.record import Records
    from sercheck.store.ledger import Ledger
    from sercheck.store.rows import Filters, JudgedBatch

@click.group("ledger")
def command() -> None:
    """Look up what was judged."""


command.add_command(episodes)
command.add_command(verify)
command.add_command(prune)


@command.command("batches")
@taking(BATCHES)
def batches(form: str, store: str | None, **asked: Any) -> None:
    """List batches and what became of them, the newest first."""
    from sercheck.store.ledger import open_ledger

    filters, shown = _filters(form, asked)
    with open_ledger(store) as ledger:
        found = ledger.batches(filters)
        place = ledger.place
    if form == "csv":
        _print_csv(found)
    elif form == "json":
        for each in found:
            click.echo(json.dumps(_batch_facts(each), ensure_ascii=False, allow_nan=False))
    elif found:
        click.echo(batch_table(found[:shown]))
        say_more(len(found), shown, "batches")
    if not found:
        say_none(form, f"No batches in {place}{so_asked(asked)}.")


@command.command("records")
@click.option("--batch", "batch_id", metavar="ID", help="Only this batch: its id or the beginning of it.")
@taking(BATCHES)
def records(form: str, store: str | None, **asked: Any) -> None:
    """List records, those of the newest batch first."""
    from sercheck.store.ledger import open_ledger

    with open_ledger(store) as ledger:
        if asked["batch_id"]:
            asked["batch_id"] = ledger.batch(asked["batch_id"]).batch.batch_id
        filters, shown = _filters(form, asked)
        found = ledger.records(filters)
        place = ledger.place
    if form != "text":
        _write(found, form)
    elif len(found):
        click.echo(record_table(found.take(slice(0, shown))))
        say_more(len(found), shown, "records")
    if not len(found):
        say_none(form, f"No records in {place}{so_asked(asked)}.")


@command.command("show")
@click.argument("name", metavar="ID")
@FORMAT
@STORE
def show(name: str, form: str, store: str | None) -> None:
    """Show one batch, record or episode by its ID or the beginning of it."""
    from sercheck.errors import UsageError
    from sercheck.store.ledger import UnknownIdError, open_ledger

    with open_ledger(store) as ledger:
        for kind in (_show_batch, _show_record, _show_episode):
            try:
                kind(ledger, name, form)
            except UnknownIdError:
                continue
            return
        todo = "`sercheck ledger batches`, `records` and `episodes` list them."
        wanted = "the id of a batch, record or episode, or its beginning"
        raise UsageError(f"id {name!r}", f"not in {ledger.place}", wanted, todo)


def _told(ledger: Ledger, batch: JudgedBatch, form: str) -> Records:
    """The records that the form shows: all of them to a program, a screen of those that did not pass to people."""
    from sercheck.record import Records
    from sercheck.store.rows import Filters

    batch_id = batch.batch.batch_id
    if form != "text":
        return ledger.records(batch_id)
    most = TEXT_LIMIT
    failed = ledger.records(Filters(batch_id=batch_id, outcome="fail", limit=most))
    undecided = ledger.records(Filters(batch_id=batch_id, outcome="undecided", limit=max(most - len(failed), 1)))
    return Records.concat([failed, undecided])


def _show_record(ledger: Ledger, name: str, form: str) -> None:
    record = ledger.record(name)
    if form == "text":
        click.echo(record_page(next(record.rows())))
    else:
        _write(record, form)


def _show_episode(ledger: Ledger, name: str, form: str) -> None:
    from sercheck.store.episodes import batches_of, episode

    found = episode(ledger, name)
    if form == "text":
        click.echo(episode_page(found, batches_of(ledger, found.episode_id)))
    else:
        write_episodes([found], form)


def _show_batch(ledger: Ledger, name: str, form: str) -> None:
    from sercheck.store.episodes import episodes_of
    from sercheck.store.outbox import messages_of

    batch = ledger.batch(name)
    batch_id = batch.batch.batch_id
    found = _told(ledger, batch, form)
    if form == "csv":
        _write(found, form)
        return
    runs, messages = episodes_of(ledger, batch_id), messages_of(ledger, batch_id)
    if form == "json":
        facts = _batch_facts(batch) | {
            "episodes": [vars(run) for run in runs],
            "messages": [message.facts() for message in messages],
            "records": list(found.rows()),
        }
        click.echo(json.dumps(facts, ensure_ascii=False, allow_nan=False))
    else:
        click.echo(batch_page(batch, found, runs, messages))


def _filters(form: str, asked: dict[str, Any]) -> tuple[Filters, int]:
    """What to ask for and how many to show; for text one more is asked for, to know whether there are more."""
    from sercheck.store.rows import Filters

    if form != "text":
        return Filters(**asked), 0
    shown = asked["limit"] or TEXT_LIMIT
    return Filters(**{**asked, "limit": shown + 1}), shown


def _batch_facts(each: JudgedBatch) -> dict[str, Any]:
    batch, last = each.batch, each.last
    return {
        "batch_id": batch.batch_id,
        "feed": batch.feed,
        "batch_fingerprint": batch.fingerprint,
        "first_stamp": batch.first_stamp,
        "last_stamp": batch.last_stamp,
        "rows": batch.rows,
        "series": batch.series,
        "received": list(batch.received),
        "decision": last.decision,
        "judged_at": last.judged_at,
        "counts": dict(last.counts),
        "rules_fingerprint": last.rules_fingerprint,
        "baseline_id": last.baseline_id,
        "sercheck_version": last.sercheck_version,
        "judgements": len(each.judgements),
        "settlements": [vars(settlement) for settlement in each.settlements],
    }


def _print_csv(found: tuple[JudgedBatch, ...]) -> None:
    """One line a batch; counts become three columns, files and settlements JSON lists."""
    lines = []
    for each in found:
        facts = _batch_facts(each)
        facts |= {name: json.dumps(facts[name], ensure_ascii=False) for name in ("received", "settlements")}
        facts |= facts.pop("counts")
        lines.append(facts)
    names = [
        "batch_id", "feed", "batch_fingerprint", "first_stamp", "last_stamp", "rows", "series", "received", "decision",
        "judged_at", "pass", "fail", "undecided", "rules_fingerprint", "baseline_id", "sercheck_version", "judgements",
        "settlements",
    ]  # fmt: skip
    writer = csv.DictWriter(sys.stdout, names, lineterminator="\n")
    writer.writeheader()
    writer.writerows(lines)


def _write(found: Records, form: str) -> None:
    found.write("-", "csv" if form == "csv" else "json")
