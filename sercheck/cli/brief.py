"""``sercheck brief``: parse, call, print."""

from __future__ import annotations

import click

from sercheck.cli.moments import since
from sercheck.cli.say import say


@click.command("brief")
@click.argument("batch_id", metavar="[BATCH-ID]", required=False)
@click.option("--store", metavar="DIR|URL", help="The store's folder, or the ledger's URL.")
@click.option(
    "--format", "form", type=click.Choice(["text", "markdown", "json", "html"]), default="text", show_default=True
)
@click.option("-o", "--page", metavar="FILE.html", help="Write the page.")
@click.option(
    "--since", "begin", metavar="TIME", callback=since, help="All feeds since then: a date, or a length such as 7D."
)
@click.option("--site", metavar="DIR", help="Write a folder of pages: all feeds, a page a feed, a page a batch.")
def command(
    batch_id: str | None, store: str | None, form: str, page: str | None, begin: str | None, site: str | None
) -> None:
    """What the person on call should know of a batch: the one named, else the newest that is held and not settled.

    The page is one file that needs no network; other formats go to stdout.
    """
    if site:
        if batch_id or page or begin or form != "text":
            raise click.UsageError("--site writes the pages of all batches: name no batch, page or time beside it")
        _write_site(site, store)
        return
    from sercheck.brief.surfaces import shown
    from sercheck.briefing import brief_of, review_of
    from sercheck.outputs import check_place, write_text

    if batch_id and begin:
        raise click.UsageError("--since tells of all feeds: name no batch beside it")
    if page:
        check_place(page)
    told = review_of(begin, store) if begin else brief_of(batch_id, store)
    if page:
        write_text(page, shown(told, "html"))
        say(f"{page} is written")
    else:
        click.echo(shown(told, form), nl=form != "html")


def _write_site(folder: str, store: str | None) -> None:
    from sercheck.site import write_site

    done = write_site(folder, store)
    say(f"{folder}: {done.written} pages written, {done.kept} as they were")
