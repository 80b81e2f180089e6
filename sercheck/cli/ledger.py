"""``sercheck ledger``: look up batches and records; parse, call, print."""

from __future__ import annotations

import csv
import json
import sys
from collections.abc import Callable
from datetime import UTC, datetime
from typing import TYPE_CHECKING, Any, TypeVar

import click

from sercheck.cli.ledger_text import TEXT_LIMIT, batch_page, batch_table, record_page, record_table

if TYPE_CHECKING:
    from sercheck.record import Records
    from sercheck.store.ledger import Ledger
    from sercheck.store.rows import Filters, JudgedBatch

F = TypeVar("F", bound=Callable[..., None])
FORMATS = click.Choice(["text", "json", "csv"])


@click.group("ledger")
def command() -> None:
    """Look up what was judged."""


def _moment(text: str | None, *, end: bool) -> str | None:
    """A date or time as text that compares with the ledger's; a date means its first or last second."""
    if text is None:
        return None
    try:
        stamp = datetime.fromisoformat(text)
        if end and len(text) <= len("2026-01-12"):
            stamp = stamp.replace(hour=23, minute=59, second=59)
        utc = (stamp if stamp.tzinfo else stamp.replace(tzinfo=UTC)).astimezone(UTC)
    except (ValueError, OverflowError):
        raise click.BadParameter(f"{text!r} is no date or time; wanted 2026-01-12 or 2026-01-12T06:00:00Z") from None
    # Without the Z a start sorts before all fractions of its second; with it an end sorts behind them.
    return f"{utc:%Y-%m-%dT%H:%M:%S}" + ("Z" if end else "")


def _since(_: click.Context, __: click.Parameter, text: str | None) -> str | None:
    return _moment(text, end=False)


def _until(_: click.Context, __: click.Parameter, text: str | None) -> str | None:
    return _moment(text, end=True)


_STORE = click.option("--store", metavar="DIR|URL", help="The store's folder, or the ledger's URL.")
_FORMAT = click.option(
    "--format", "form", type=FORMATS, default="text", show_default=True, help="json: JSON lines, one object a line."
)
_FILTERS = (
    click.option("--feed", metavar="NAME", help="Only this feed; * and ? stand for letters."),
    click.option("--since", metavar="TIME", callback=_since, help="Only batches whose newest row is then or later."),
    click.option("--until", metavar="TIME", callback=_until, help="Only batches whose newest row is then or earlier."),
    click.option("--outcome", type=click.Choice(["pass", "fail", "undecided"]), help="Only records of this outcome."),
    click.option("--decision", type=click.Choice(["released", "held"]), help="Only batches so decided."),
    click.option("--rule", metavar="NAME", help="Only this rule; * and ? stand for letters."),
    click.option("--series", metavar="KEY", help="Only this series; * and ? stand for letters."),
    click.option(
        "--limit", type=click.IntRange(min=1), metavar="N", help=f"At most so many (text: {TEXT_LIMIT}; else all)."
    ),
    _FORMAT,
    _STORE,
)


def _filtered(function: F) -> F:
    for option in reversed(_FILTERS):
        function = option(function)
    return function


@command.command("batches")
@_filtered
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
        _say_more(len(found), shown, "batches")
    if not found:
        _say_none(form, f"No batches in {place}{_so_asked(asked)}.")


@command.command("records")
@click.option("--batch", "batch_id", metavar="ID", help="Only this batch: its id or the beginning of it.")
@_filtered
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
        _say_more(len(found), shown, "records")
    if not len(found):
        _say_none(form, f"No records in {place}{_so_asked(asked)}.")


@command.command("show")
@click.argument("name", metavar="ID")
@_FORMAT
@_STORE
def show(name: str, form: str, store: str | None) -> None:
    """Show one batch or one record by its ID or the beginning of it."""
    from sercheck.errors import UsageError
    from sercheck.store.ledger import UnknownIdError, open_ledger

    with open_ledger(store) as ledger:
        try:
            batch = ledger.batch(name)
        except UnknownIdError:
            try:
                _show_record(ledger.record(name), form)
            except UnknownIdError as neither:
                todo = "`sercheck ledger batches` and `sercheck ledger records` list them."
                wanted = "the id of a batch or record, or its beginning"
                raise UsageError(f"id {name!r}", f"not in {ledger.place}", wanted, todo) from neither
        else:
            _show_batch(batch, _told(ledger, batch, form), form)


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


def _show_record(record: Records, form: str) -> None:
    if form == "text":
        click.echo(record_page(next(record.rows())))
    else:
        _write(record, form)


def _show_batch(batch: JudgedBatch, found: Records, form: str) -> None:
    if form == "csv":
        _write(found, form)
    elif form == "json":
        facts = {**_batch_facts(batch), "records": list(found.rows())}
        click.echo(json.dumps(facts, ensure_ascii=False, allow_nan=False))
    else:
        click.echo(batch_page(batch, found))


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


def _so_asked(asked: dict[str, Any]) -> str:
    given = {name.removesuffix("_id"): value for name, value in asked.items() if value is not None and name != "limit"}
    words = [f"--{name} {value}" for name, value in given.items()]
    return f" with {' '.join(words)}" if words else ""


def _say_more(found: int, shown: int, what: str) -> None:
    if found > shown:
        click.echo(f"There are more than these {shown} {what}: --limit shows more.", err=True)


def _say_none(form: str, sentence: str) -> None:
    click.echo(sentence, err=form != "text")
