"""A rehearsal as one self-contained page: tables, operating characteristic curves and run lengths; needs ``page``."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from sercheck.page import render
from sercheck.page.svg import INKS, Drawing, drawing, inline
from sercheck.plain import plain

if TYPE_CHECKING:
    from sercheck.rehearsal.verdicts import FaultLine, FaultSum, Rehearsal

MOST_PLOTS = 40
"""Faults with plots of their own, the worst caught: two small ones each, and the page stays below a megabyte."""
SMALL, LOW = 300, 150
"""Size of a plot in points: two stand side by side."""
SPAN = 20
"""Largest size over the smallest from which sizes are drawn on a logarithmic scale."""


def rehearsal_page(told: Rehearsal) -> str:
    """The page."""
    plots = {
        one.fault: (_curve(told, one, f"oc{place}"), _run_lengths(one, f"rl{place}"))
        for place, one in enumerate(told.sums[:MOST_PLOTS])
    }
    low, high = told.interval
    first, last = (told.feed.began(one.batch)[:10] for one in (told.replayed.healthy[0], told.replayed.healthy[-1]))
    return render(
        "rehearsal.html",
        told=told, feed=plain(told.feed.book.feed), first=first, last=last, low=low / told.periods,
        high=high / told.periods, rate=told.false_holds / told.periods, budget=told.feed.book.false_holds,
        row=_healthy(told), plots=plots, began=told.feed.began,
    )  # fmt: skip


def _healthy(told: Rehearsal) -> Drawing:
    """Every healthy batch: held ones stand above the line."""
    held = {one.batch: "false" for one in told.held} | {one.batch: "rows" for one in told.by_data}
    x = np.array([one.batch for one in told.replayed.healthy]) - told.replayed.healthy[0].batch
    kinds = np.array([held.get(one.batch, "") for one in told.replayed.healthy])
    with drawing(640, 80) as (figure, axes):
        axes.plot(x, np.zeros(len(x)), "|", color=INKS["muted"], markersize=6)
        axes.plot(x[kinds == "false"], np.ones((kinds == "false").sum()), "D", color=INKS["fail"], markersize=6)
        axes.plot(x[kinds == "rows"], np.ones((kinds == "rows").sum()), "s", color=INKS["batch"], markersize=5)
        axes.set_ylim(-0.6, 1.6)
        axes.set_yticks([0, 1])
        axes.set_yticklabels(["released", "held"])
        axes.set_xlabel("healthy batches, the oldest first")
        return inline(
            figure, "row", f"{told.batches} healthy batches, of which {len(told.held)} were held for their values and "
            f"{len(told.by_data)} for rows that were missing, doubled or out of order.",
        )  # fmt: skip


def _curve(told: Rehearsal, one: FaultSum, name: str) -> Drawing:
    """Share held in the first batch and in all, against size."""
    with drawing(SMALL, LOW) as (figure, axes):
        said = []
        for every, ink, shape in ((False, "batch", "o"), (True, "fail", "D")):
            lines = told.curve(one.fault, every=every)
            if not lines:
                continue
            who = "all series" if every else "one series"
            x = [line.size for line in lines]
            axes.plot(x, [line.share for line in lines], color=INKS[ink], marker=shape, markersize=4, linewidth=1.4)
            first = [line.first / line.tried for line in lines]
            axes.plot(x, first, color=INKS[ink], marker=shape, markersize=3, linewidth=0.9, dashes=(4, 2))
            axes.vlines(x, *zip(*(line.interval or (0.0, 1.0) for line in lines), strict=True), color=INKS[ink], lw=0.6)
            said.append(f"{who}: " + ", ".join(f"{line.size:g}: {line.share:.0%}" for line in lines))
        sizes = [line.size for line in one.lines if line.size > 0]
        if sizes and max(sizes) / min(sizes) >= SPAN:
            axes.set_xscale("log")
        axes.set_ylim(-0.05, 1.05)
        axes.set_xlabel("size")
        axes.set_ylabel("share held")
        return inline(figure, name, f"Share of '{plain(one.fault, 60)}' held, by size: {'; '.join(said)}.")


def _run_lengths(one: FaultSum, name: str) -> Drawing:
    """Share not yet held after so many batches, over all sizes."""
    with drawing(SMALL, LOW) as (figure, axes):
        said = []
        for every, ink, shape in ((False, "batch", "o"), (True, "fail", "D")):
            left = not_yet_held([line for line in one.lines if line.every == every])
            if left is None:
                continue
            axes.plot(np.arange(len(left)), left, color=INKS[ink], marker=shape, markersize=3.5, drawstyle="steps-post")
            said.append(("all series: " if every else "one series: ") + ", ".join(f"{share:.0%}" for share in left[1:]))
        axes.set_ylim(-0.05, 1.05)
        axes.set_xlabel("batches since it began")
        axes.set_ylabel("not yet held")
        return inline(figure, name, f"Share of '{plain(one.fault, 60)}' not yet held, by batches: {'; '.join(said)}.")


def not_yet_held(lines: list[FaultLine]) -> np.ndarray | None:
    """Share of faults not yet held after 0, 1, 2 ... batches; None where none was tried."""
    tried = sum(line.tried for line in lines)
    if not tried:
        return None
    return np.asarray(1 - np.concatenate(([0], np.cumsum(np.sum([line.delays for line in lines], axis=0)))) / tried)
