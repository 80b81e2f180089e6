"""``sercheck settle``: parse, call, print."""

from __future__ import annotations

import json

import click

from sercheck.cli.say import folded, plain, say


@click.command("settle")
@click.argument("batch_id", metavar="BATCH-ID")
@click.option("--as", "release_as", type=click.Choice(["released", "discarded"]), help="What becomes of the batch.")
@click.option("--relearn-from", metavar="DATE", help="History before this day no longer teaches the feed.")
@click.option("--by", required=True, metavar="NAME", help="Who says so.")
@click.option("--because", required=True, metavar="TEXT", help="Why.")
@click.option("--store", envvar="SERCHECK_STORE", default=".sercheck", show_default=True, metavar="DIR|URL")
@click.option("--format", "form", type=click.Choice(["text", "json"]), default="text", show_default=True)
def command(
    batch_id: str,
    release_as: str | None,
    relearn_from: str | None,
    by: str,
    because: str,
    store: str,
    form: str,
) -> None:
    """Overrule what was decided about a batch: release or discard it, or declare a new regime of its feed.

    A held batch can be released. A batch that was released by mistake can be discarded: it teaches no longer.
    Nothing is erased: who said what, when and why is added to the ledger. What was said last stands.
    """
    from sercheck.settle import settle

    done = settle(
        batch_id, by=by, because=because, release_as=release_as, relearn_from=relearn_from, store=store
    )  # fmt: skip
    if form == "json":
        facts = {"batch_id": done.batch_id, "feed": done.feed, "settlements": [vars(each) for each in done.said]}
        click.echo(json.dumps({**facts, "notes": list(done.notes)}, ensure_ascii=False))
        return
    say(f"{click.style('SETTLED', bold=True)}  {plain(done.feed)}, batch {done.batch_id}")
    for each in done.said:
        say(folded(plain(each.sentence(), 1000), "  ", "    "))
    if not done.said:
        say("  said before; the archive agrees now")
    for note in done.notes:
        say(folded(f"note: {plain(note, 400)}", rest="      "))
