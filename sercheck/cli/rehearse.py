"""``sercheck rehearse``: parse, call, print."""

from __future__ import annotations

import json
import sys

import click

from sercheck.cli.say import say


@click.command("rehearse")
@click.argument("rules", type=click.Path())
@click.argument("history", type=click.Path(), nargs=-1, required=True)
@click.option("--from", "begins", metavar="DATE", help="Judge batches from this local date on.")
@click.option("--faults", multiple=True, metavar="NAME", help="Faults to try, several or with commas (default: all).")
@click.option("--sizes", metavar="N,N", help="Sizes to try them at (default: those of the catalogue).")
@click.option("--tries", type=click.IntRange(min=0), default=4, show_default=True, help="Batches each fault begins in.")
@click.option(
    "--batches", type=click.IntRange(min=1), default=7, show_default=True, help="Batches a fault is let go on for."
)
@click.option("--seed", type=click.IntRange(min=0), default=1, show_default=True)
@click.option("--workers", type=click.IntRange(min=1), help="Processes (default: all cores).")
@click.option("--max-false-holds", type=click.FloatRange(min=0), metavar="N", help="Most false holds, in all batches.")
@click.option("--min-caught", type=click.FloatRange(0, 1), metavar="SHARE", help="Least share of faults caught.")
@click.option("--page", metavar="FILE.html", help="Write tables and curves as a page.")
@click.option("--records", metavar="FILE.parquet", help="Write all records.")
@click.option("--format", "form", type=click.Choice(["text", "json"]), default="text", show_default=True)
def command(
    rules: str,
    history: tuple[str, ...],
    begins: str | None,
    faults: tuple[str, ...],
    sizes: str | None,
    tries: int,
    batches: int,
    seed: int,
    workers: int | None,
    max_false_holds: float | None,
    min_caught: float | None,
    page: str | None,
    records: str | None,
    form: str,
) -> None:
    """Replay HISTORY (files or globs) batch by batch: how often the rule file RULES holds a healthy batch, and which
    faults it catches.

    Ends with 0 when done, 1 when --max-false-holds or --min-caught is missed, 2 in trouble or when interrupted; after
    Ctrl-C what is finished is told.
    """
    from sercheck.cli.progress import Progress
    from sercheck.cli.rehearse_text import answer, missed
    from sercheck.outputs import check_place
    from sercheck.rehearsal.run import cores, rehearse

    if page:
        check_place(page)
    with Progress() as progress:
        told = rehearse(
            rules, list(history), begins=begins, faults=_names(faults), sizes=_numbers(sizes), tries=tries,
            batches=batches, seed=seed, workers=workers or cores(), records=records, tell=progress,
        )  # fmt: skip
    if page:
        from sercheck.outputs import whole_file
        from sercheck.rehearsal.html import rehearsal_page

        with whole_file(page) as file:
            file.write(rehearsal_page(told).encode())
    short = missed(told, max_false_holds, min_caught)
    if form == "json":
        click.echo(json.dumps({**told.summary(), "targets_missed": short}, allow_nan=False, ensure_ascii=False))
    else:
        say(answer(told, short))
    sys.exit(2 if not told.replayed.finished else 1 if short else 0)


def _names(given: tuple[str, ...]) -> list[str] | None:
    return [name.strip() for part in given for name in part.split(",") if name.strip()] or None


def _numbers(given: str | None) -> list[float] | None:
    if given is None:
        return None
    try:
        return [float(part) for part in given.split(",")]
    except ValueError as trouble:
        raise click.BadParameter(f"'{given}' is no list of numbers such as 0.1,0.3", param_hint="--sizes") from trouble
