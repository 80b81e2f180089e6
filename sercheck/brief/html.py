"""A brief as one self-contained page; depends on the plots and the page's templates."""

from __future__ import annotations

from collections.abc import Sequence

from sercheck.brief import plots
from sercheck.brief.view import FIGURES, Brief, Failed
from sercheck.brief.words import zone_of
from sercheck.page import render

MOST_DRAWN = 250_000
"""Letters of the plots of one page, after which further rules have none: the page is to stay far below 500 kB."""


def page(brief: Brief, way: Sequence[tuple[str, str]] = ()) -> str:
    """The page.

    Args:
        brief: what it says.
        way: texts and relative links that lead back, on a page of a folder of pages.
    """
    zone = zone_of(brief.zone)
    shown: list[tuple[Failed, object, str]] = []
    drawn = 0
    for place, rule in enumerate(brief.failed):
        drawing, caption = "", ""
        if rule.sketch is not None and drawn < MOST_DRAWN:
            drawing, caption = plots.plot(rule, f"plot{place}", zone)
            drawn += len(drawing)
        shown.append((rule, drawing, caption))
    row, said = plots.run_chart(brief.last, "row") if len(brief.last) > 1 else ("", "")
    guides = [rule for rule in brief.failed if rule.runbook]
    return render(
        "brief.html", brief=brief, shown=shown, row=row, row_caption=said, heads=FIGURES, way=way,
        guides=guides[:6],
    )  # fmt: skip
