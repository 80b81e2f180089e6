"""``sercheck learn``: parse, call, print."""

from __future__ import annotations

import json

import click

from sercheck.cli.say import say


@click.command("learn")
@click.argument("rules", type=click.Path())
@click.argument("history", type=click.Path(), nargs=-1, required=True)
@click.option("--store", envvar="SERCHECK_STORE", default=".sercheck", show_default=True, metavar="DIR|URL")
@click.option("--no-keep", is_flag=True, help="Write nothing to store or archive.")
@click.option("--engine", type=click.Choice(["local", "dask"]), default="local", show_default=True)
@click.option("--scheduler", metavar="ADDRESS", help="A running Dask scheduler (default: processes on this machine).")
@click.option("--format", "form", type=click.Choice(["text", "json"]), default="text", show_default=True)
def command(
    rules: str,
    history: tuple[str, ...],
    store: str,
    no_keep: bool,
    engine: str,
    scheduler: str | None,
    form: str,
) -> None:
    """Learn the baseline of the rule file RULES from HISTORY and fill the archive with its rows.

    HISTORY is files, globs or db:NAME?table=TABLE.

    Tells what is odd in the history and which rules will be undecided for want of more of it.
    With --format json the facts of each series too: moments, seasonal profile, autoregression, the variance and n_eff
    of a window's mean, autocorrelations with their standard error and degrees of freedom (null: the normal law).
    """
    from sercheck.cli.lessons_text import facts, page
    from sercheck.taught import teach

    taught = teach(rules, list(history), store, keep=not no_keep, engine=engine, scheduler=scheduler)
    if form == "json":
        click.echo(json.dumps(facts(taught), allow_nan=False, ensure_ascii=False))
    else:
        say(page(taught))
