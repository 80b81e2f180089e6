"""Options that the subcommands of ``sercheck ledger`` share, and what they say of nothing and of more."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeVar

import click

from sercheck.cli import moments
from sercheck.cli.ledger_text import TEXT_LIMIT

F = TypeVar("F", bound=Callable[..., None])

STORE = click.option("--store", metavar="DIR|URL", help="The store's folder, or the ledger's URL.")
FORMAT = click.option(
    "--format", "form", type=click.Choice(["text", "json", "csv"]), default="text", show_default=True,
    help="json: JSON lines, one object a line.",
)  # fmt: skip
FEED = click.option("--feed", metavar="NAME", help="Only this feed; * and ? stand for letters.")
RULE = click.option("--rule", metavar="NAME", help="Only this rule; * and ? stand for letters.")
SERIES = click.option("--series", metavar="KEY", help="Only this series; * and ? stand for letters.")
LIMIT = click.option(
    "--limit", type=click.IntRange(min=1), metavar="N", help=f"At most so many (text: {TEXT_LIMIT}; else all)."
)
BATCHES = (
    FEED,
    click.option("--since", metavar="TIME", callback=moments.since,
                 help="Only batches whose newest row is then or later: a date, a time, or 7D back from now."),
    click.option("--until", metavar="TIME", callback=moments.until,
                 help="Only batches whose newest row is then or earlier."),
    click.option("--outcome", type=click.Choice(["pass", "fail", "undecided"]), help="Only records of this outcome."),
    click.option("--decision", type=click.Choice(["released", "held"]), help="Only batches so decided."),
    RULE, SERIES, LIMIT, FORMAT, STORE,
)  # fmt: skip
"""Filters of batches and records."""
EPISODES = (
    FEED,
    click.option("--since", metavar="TIME", callback=moments.since,
                 help="Only episodes that were not over before: a date, a time, or 7D back from now."),
    click.option("--until", metavar="TIME", callback=moments.until, help="Only episodes that had begun by then."),
    click.option("--state", type=click.Choice(["open", "closed"]), help="Only episodes in this state."),
    RULE, SERIES, LIMIT, FORMAT, STORE,
)  # fmt: skip
"""Filters of episodes."""


def taking(options: tuple[Callable[[F], F], ...]) -> Callable[[F], F]:
    """A decorator that gives a command all these options, listed in this order."""

    def decorate(function: F) -> F:
        for option in reversed(options):
            function = option(function)
        return function

    return decorate


def so_asked(asked: dict[str, Any]) -> str:
    """The filters as they were typed, for a sentence."""
    given = {name.removesuffix("_id"): value for name, value in asked.items() if value is not None and name != "limit"}
    words = [f"--{name} {value}" for name, value in given.items()]
    return f" with {' '.join(words)}" if words else ""


def say_more(found: int, shown: int, what: str) -> None:
    """Tell people that not all was shown."""
    if found > shown:
        click.echo(f"There are more than these {shown} {what}: --limit shows more.", err=True)


def say_none(form: str, sentence: str) -> None:
    """Tell that nothing was found: on the screen, or beside a program's empty answer."""
    click.echo(sentence, err=form != "text")
