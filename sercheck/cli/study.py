"""``sercheck study``: parse, call, print."""

from __future__ import annotations

import json

import click

from sercheck.cli.progress import Progress
from sercheck.cli.say import say


@click.command("study")
@click.argument("history", type=click.Path(), nargs=-1, required=True)
@click.option("--time", metavar="COLUMN", help="The time column.")
@click.option("--series", multiple=True, metavar="COLUMN", help="A key column; several make a compound key.")
@click.option("--values", multiple=True, metavar="COLUMN", help="A value column; may be given several times.")
@click.option("--every", metavar="OFFSET", help="The cadence: 1h, 15min, D, B, MS … or irregular.")
@click.option("--timezone", metavar="ZONE", help="The zone of stamps without an offset.")
@click.option("--page", type=click.Path(), metavar="FILE.html", help="Write the same with plots, as one HTML file.")
@click.option("--format", "form", type=click.Choice(["text", "json"]), default="text", show_default=True)
def command(
    history: tuple[str, ...],
    time: str | None,
    series: tuple[str, ...],
    values: tuple[str, ...],
    every: str | None,
    timezone: str | None,
    page: str | None,
    form: str,
) -> None:
    """Show what the serial correlation of HISTORY (files or globs) looks like; no rule file is needed.

    Columns, cadence and zone are found unless they are given. Tells trend, seasons with their evidence, how much
    differencing is wanted, what the mean is worth, and what is odd about the clock and the values.
    """
    from sercheck.portrait.whole import study

    if page is not None:
        from sercheck.outputs import check_place

        check_place(page)
    with Progress() as progress:
        seen = study(
            list(history), time=time, series=series or None, values=values or None, every=every, timezone=timezone,
            progress=progress,
        )  # fmt: skip
    if page is not None:
        from sercheck.outputs import whole_file
        from sercheck.portrait.html import page as written

        with whole_file(page) as file:
            file.write(written(seen).encode())
    if form == "json":
        click.echo(json.dumps(seen.to_dict(), allow_nan=False, ensure_ascii=False))
    else:
        from sercheck.cli.study_text import answer

        say(answer(seen))
