"""``sercheck ledger episodes``: parse, call, print."""

from __future__ import annotations

import csv
import json
import sys
from collections.abc import Iterable
from dataclasses import fields
from typing import TYPE_CHECKING, Any

import click

from sercheck.cli.ledger_options import EPISODES, say_more, say_none, so_asked, taking
from sercheck.cli.ledger_text import SHORT_BATCH, TEXT_LIMIT, fact, minute
from sercheck.cli.table import Head, number, table

if TYPE_CHECKING:
    from sercheck.store.episodes import Episode


@click.command("episodes")
@taking(EPISODES)
def command(form: str, store: str | None, **asked: Any) -> None:
    """List episodes, those that are open first: since when a rule fails on a feed, on how many batches and series."""
    from sercheck.store.episodes import EpisodeFilters, episodes
    from sercheck.store.ledger import open_ledger

    shown = asked["limit"] or TEXT_LIMIT
    limit = shown + 1 if form == "text" else asked["limit"]
    with open_ledger(store) as ledger:
        found = episodes(ledger, EpisodeFilters(**{**asked, "limit": limit}))
        place = ledger.place
    if form != "text":
        write(found, form)
    elif found:
        click.echo(episode_table(found[:shown]))
        say_more(len(found), shown, "episodes")
    if not found:
        say_none(form, f"No episodes in {place}{so_asked(asked)}.")


def write(found: Iterable[Episode], form: str) -> None:
    """Episodes for a program: JSON lines, or CSV under a header."""
    if form == "json":
        for each in found:
            click.echo(json.dumps(vars(each), ensure_ascii=False, allow_nan=False))
        return
    from sercheck.store.episodes import Episode

    writer = csv.DictWriter(sys.stdout, [each.name for each in fields(Episode)], lineterminator="\n")
    writer.writeheader()
    writer.writerows(vars(each) for each in found)


def episode_table(found: Iterable[Episode]) -> str:
    """One line an episode."""
    heads = (
        Head("state"), Head("feed", least=8), Head("rule", least=16), Head("since (UTC)"), Head("last row (UTC)"),
        Head("batches", right=True), Head("series", right=True), Head("episode"),
    )  # fmt: skip
    lines = [
        [each.state, each.feed, each.rule, minute(each.started), minute(each.last_at), each.batches, each.series,
         each.episode_id[:SHORT_BATCH]]
        for each in found
    ]  # fmt: skip
    return table(heads, lines)


def episode_page(each: Episode, batch_ids: Iterable[str]) -> str:
    """Everything about one episode, with its batches."""
    end = {"pass": "the rule passed", "gone": "the rule is no longer asked"}.get(each.closed_as or "", "")
    held = f"{each.false_holds} settled as released, {each.true_holds} as discarded"
    lines = [
        fact("episode", each.episode_id),
        fact("feed", each.feed),
        fact("rule", each.rule + ("" if each.action == "hold" else " (only noted)")),
        fact("state", each.state),
        fact("since", f"{each.started}, last row {each.last_at}"),
        *([fact("closed", f"{each.closed_at}, {end}, batch {each.closed_by}")] if each.closed_by else []),
        fact("batches", f"{each.batches}, of them {held}"),
        fact("series", f"{each.series}, at most {each.widest} at once"),
        fact("worst", f"record {each.worst}, p {number(each.p_value, 2)}"),
        fact("beyond", f"{number(each.beyond, 3)} allowances from its bound (an exact rule: its own unit)"),
        *(fact("batch", batch_id) for batch_id in batch_ids),
    ]
    return "\n".join(lines)
