"""A study as one self-contained page; depends on the plots, the sentences and the page's templates."""

from __future__ import annotations

from sercheck.page import render
from sercheck.portrait import words
from sercheck.portrait.plots import plots_of
from sercheck.portrait.whole import Study

MOST_PLOTTED = 3
"""Series with plots, the first with scatters; they take some 60 kB each."""
MOST_ROWS = 200
"""Rows of the table of series; more are counted."""
MOST_FINDINGS = 12
"""Findings of a kind that are listed; more are counted."""


def page(study: Study) -> str:
    """The page: what the terminal says, with plots of the first series of each group and of the oddest ones."""
    together = words.groups(study.portraits)
    kept = [group.first for group in together if len(group.first.values)]
    kept += [one for one in study.portraits if len(one.values) and one not in kept]
    plotted = []
    for place, one in enumerate(kept[:MOST_PLOTTED]):
        plotted.append((one, plots_of(one, study, f"p{place}", all_of_them=place == 0)))
    return render(
        "study.html", study=study, head=words.head(study), groups=together, words=words, plotted=plotted,
        rows=study.portraits[:MOST_ROWS], more=max(len(study.portraits) - MOST_ROWS, 0), kinds=words.by_kind(study),
        most=MOST_FINDINGS, every=study.layout.every,
    )  # fmt: skip
