"""``sercheck draft``: parse, call, print."""

from __future__ import annotations

import shlex
from pathlib import Path

import click

from sercheck.cli.progress import Progress
from sercheck.cli.say import folded, plain, say


@click.command("draft")
@click.argument("history", type=click.Path(), nargs=-1, required=True)
@click.option("-o", "--output", metavar="RULES.yaml", help="Write the rule file here (default: stdout).")
@click.option("--replace", is_flag=True, help="Overwrite an older file of that name.")
@click.option("--time", metavar="COLUMN", help="The time column.")
@click.option("--series", multiple=True, metavar="COLUMN", help="A key column; several make a compound key.")
@click.option("--values", multiple=True, metavar="COLUMN", help="A value column; may be given several times.")
@click.option("--every", metavar="OFFSET", help="The cadence: 1h, 15min, D, B, MS … or irregular.")
@click.option("--timezone", metavar="ZONE", help="The zone of stamps without an offset.")
@click.option("--batch-every", metavar="OFFSET", help="How often a batch comes (default: a day, or a week of days).")
@click.option("--false-holds", metavar="BUDGET", help="The alarm budget (default: 1 per 90D).")
@click.option("--no-rehearsal", is_flag=True, help="Count no false holds: quick, and a promise of nothing.")
@click.option("--batches", type=click.IntRange(min=1), help="Most batches rehearsed (default: 365 or fewer).")
@click.option("--workers", type=click.IntRange(min=1), help="Processes (default: all cores).")
def command(
    history: tuple[str, ...],
    output: str | None,
    replace: bool,
    time: str | None,
    series: tuple[str, ...],
    values: tuple[str, ...],
    every: str | None,
    timezone: str | None,
    batch_every: str | None,
    false_holds: str | None,
    no_rehearsal: bool,
    batches: int | None,
    workers: int | None,
) -> None:
    """Write a first rule file for the feed whose past is HISTORY (files or globs).

    Columns, cadence and seasons are found unless they are given. The rules that suit the feed are rehearsed on it;
    those that hold too often only note, and what was left out is named in the file with the reason.
    """
    from sercheck.drafting.run import draft
    from sercheck.outputs import write_text
    from sercheck.rehearsal.run import cores

    if output is not None:
        _must_be_free(output, replace)
    with Progress() as progress:
        told = draft(
            list(history), time=time, series=series or None, values=values or None, every=every, timezone=timezone,
            batch_every=batch_every, false_holds=false_holds, rehearsal=not no_rehearsal, batches=batches,
            workers=workers or cores(), command=_asked(), tell=progress,
        )  # fmt: skip
    if output is None:
        click.echo(told.text, nl=False)
    else:
        _must_be_free(output, replace)
        write_text(output, told.text)
    out = f", {len(told.left_out)} left out" if told.left_out else ""
    lines = [f"drafted {told.rules} rules{out}{f': {plain(output)}' if output else ''}"]
    lines += [folded(plain(note, 1000), "  ", "  ") for note in told.notes]
    lines += [folded(plain(f"{name}: {reason}", 400), "  left out  ", "    ") for name, reason in told.left_out]
    say("\n".join(lines))


def _must_be_free(output: str, replace: bool) -> None:
    from sercheck.errors import OutputError
    from sercheck.outputs import check_place

    check_place(output)
    if Path(output).exists() and not replace:
        raise OutputError(output, "is there already", "a new name", "Overwrite it with --replace.")


def _asked() -> str:
    """The command as it was typed."""
    import sys

    return shlex.join(["sercheck", *sys.argv[1:]])
