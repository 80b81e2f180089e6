"""The three plots of a brief: a stretch over history's band, a correlogram, a measure over the last batches.

Depends on ``sketches`` and ``page.svg``. Shapes, widths and dashes tell what colours tell.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Literal
from zoneinfo import ZoneInfo

import numpy as np

from sercheck.brief.view import Failed, Mark
from sercheck.brief.words import many, number
from sercheck.page.svg import INKS, Drawing, drawing, inline
from sercheck.plain import plain
from sercheck.sketches import Numbers, Sketch

if TYPE_CHECKING:
    from matplotlib.axes import Axes

DAY = 86_400.0
DOTS = 60
"""Points of the judged stretch up to which each is a dot."""
STATES = {
    "released": ("o", "released"), "held": ("D", "held"), "settled": ("s", "held, then let in by a person"),
    "discarded": ("X", "discarded"),
}  # fmt: skip
"""Shape and words of each state of a batch."""


def plot(rule: Failed, name: str, zone: ZoneInfo) -> tuple[Drawing, str]:
    """The plot of a failed rule and its caption."""
    assert rule.sketch is not None
    if rule.sketch.kind == "stretch":
        return _stretch(rule.sketch, name, zone)
    return (_correlogram if rule.sketch.kind == "correlogram" else _course)(rule, rule.sketch, name)


def _stretch(sketch: Sketch, name: str, zone: ZoneInfo) -> tuple[Drawing, str]:
    x, y = _floats(sketch.x), _floats(sketch.y)
    mine = x >= sketch.begins
    with drawing() as (figure, axes):
        at = x / DAY if sketch.in_time else x
        low, middle, high = (_floats(line) for line in (sketch.low, sketch.middle, sketch.high))
        if sketch.band:
            steps: Literal["mid"] | None = "mid" if len(x) <= 2 * DOTS else None
            axes.fill_between(at, low, high, color=INKS["band"], linewidth=0, step=steps)
            axes.plot(at, middle, color=INKS["muted"], linewidth=1, dashes=(4, 2))
        axes.plot(at[~mine], y[~mine], color=INKS["ink"], linewidth=0.9)
        dots = "o" if np.count_nonzero(mine) <= DOTS else ""
        axes.plot(at[mine], y[mine], color=INKS["batch"], linewidth=2, marker=dots, markersize=3.5)
        gone = mine & np.isnan(y)
        if gone.any():
            foot = axes.get_xaxis_transform()
            axes.fill_between(at, 0, 0.03, where=gone, step="mid", color=INKS["fail"], linewidth=0, transform=foot)
        if not mine.all():
            axes.axvline(at[mine][0], color=INKS["muted"], linewidth=0.8, dashes=(1, 2))
        _time_axis(axes, zone) if sketch.in_time else axes.set_xlabel("rows, the oldest first")
        axes.set_ylabel(plain(sketch.of, 40))
        outside = int(np.count_nonzero(((y < low) | (y > high)) & mine)) if sketch.band else 0
        shown = int(np.count_nonzero(mine & ~np.isnan(y)))
        ends = f"{number(_least(y[mine]))} to {number(_most(y[mine]))}"
        alt = f"{plain(sketch.of, 80)} of the judged stretch: {many(shown, 'point')} from {ends}"
        alt += f", {outside} of them outside history's band" if sketch.band else ""
        alt += f", {many(int(np.count_nonzero(gone)), 'point')} missing" if gone.any() else ""
        drawn = inline(figure, name, alt + ".")
    told = ["Thick: the judged stretch."]
    told += ["Thin: what came before."] if not mine.all() else []
    told += [f"Band: {sketch.band}; dashed: its middle."] if sketch.band else ["No band: too little history."]
    told += ["Bar at the foot: missing."] if gone.any() else []
    return drawn, " ".join(told)


def _correlogram(rule: Failed, sketch: Sketch, name: str) -> tuple[Drawing, str]:
    x, y = _floats(sketch.x), _floats(sketch.y)
    low, middle, high = (_floats(line) for line in (sketch.low, sketch.middle, sketch.high))
    failed = np.isin(x, rule.lags)
    with drawing() as (figure, axes):
        axes.fill_between(x, low, high, color=INKS["band"], linewidth=0, step="mid")
        axes.plot(x, middle, color=INKS["muted"], linewidth=1, dashes=(4, 2))
        axes.axhline(0, color=INKS["muted"], linewidth=0.6)
        axes.vlines(x, 0, y, color=INKS["batch"], linewidth=1.6 if len(x) <= DOTS else 0.8)
        axes.plot(x[~failed], y[~failed], "o", color=INKS["batch"], markersize=3 if len(x) <= DOTS else 1.5)
        axes.plot(x[failed], y[failed], "D", color=INKS["fail"], markersize=7)
        for lag, r in zip(x[failed].tolist(), y[failed].tolist(), strict=True):
            if np.isfinite(r):
                axes.annotate(
                    f"lag {lag:.0f}", (lag, r), (7, 0), textcoords="offset points", va="center", fontweight="bold"
                )
        axes.set_xlabel("lag")
        axes.set_ylabel("correlation")
        beyond = int(np.count_nonzero((y < low) | (y > high)))
        drawn = inline(
            figure, name,
            f"Correlogram, lags 1 to {len(x)}: {plain(sketch.of, 120)}; {many(beyond, 'lag')} outside the sampling band"
            + (f", lag {', '.join(map(str, rule.lags[:10]))} fails" if failed.any() else "") + ".",
        )  # fmt: skip
    mark = " Diamond: the lag that fails." if failed.any() else ""
    of = plain(sketch.of, 160)
    return drawn, f"{of[:1].upper()}{of[1:]}. Stems: the judged stretch. Band: {sketch.band}; dashed: the usual.{mark}"


def _course(rule: Failed, sketch: Sketch, name: str) -> tuple[Drawing, str]:
    x, y = _floats(sketch.x), _floats(sketch.y)
    limit = rule.limit if sketch.limit is None else sketch.limit
    with drawing() as (figure, axes):
        axes.plot(x, y, color=INKS["ink"], linewidth=0.9, marker="o", markersize=3)
        axes.plot(x[-1:], y[-1:], "D", color=INKS["fail"], markersize=8)
        if limit is not None:
            axes.axhline(limit, color=INKS["fail"], linewidth=1.2, dashes=(6, 3))
            axes.annotate("limit", (x[0], limit), (0, 3), textcoords="offset points", va="bottom")
        axes.set_xlabel("batches before this one")
        axes.set_xticks([tick for tick in (-30, -20, -10, -5, 0) if tick >= x[0]])
        axes.set_xticklabels([str(-tick) if tick else "this" for tick in (-30, -20, -10, -5, 0) if tick >= x[0]])
        drawn = inline(
            figure, name,
            f"{plain(sketch.of, 120)} over {many(len(x), 'batch', 'batches')}: {number(_last(y))} now, "
            f"{number(_least(y[:-1]))} to {number(_most(y[:-1]))} before, limit {number(limit)}.",
        )  # fmt: skip
    of = plain(sketch.of, 160)
    return drawn, f"{of[:1].upper()}{of[1:]}. Dots: the batches before. Diamond: this batch. Dashed: its limit."


def run_chart(marks: tuple[Mark, ...], name: str) -> tuple[Drawing, str]:
    """The last batches in a row: released ones on the line, held ones above it."""
    x = np.arange(1 - len(marks), 1)
    up = np.array([mark.state != "released" for mark in marks])
    with drawing(height=64) as (figure, axes):
        axes.plot(x, up.astype(float), color=INKS["rule"], linewidth=0.8, drawstyle="steps-mid")
        for state, (shape, _) in STATES.items():
            mine = np.array([mark.state == state for mark in marks])
            ink = INKS["fail"] if state in ("held", "discarded") else INKS["batch"]
            axes.plot(x[mine], up[mine].astype(float), shape, color=ink, markersize=5 if state == "released" else 7)
        judged = np.array([mark.judged for mark in marks])
        axes.plot(x[judged], up[judged].astype(float), "o", markersize=13, fillstyle="none", color=INKS["ink"])
        axes.set_ylim(-0.7, 1.7)
        axes.set_xlim(min(int(x[0]), -14) - 0.7, 0.7)
        axes.set_yticks([0, 1], ["released", "held"])
        ends = [int(x[0]), 0] if len(marks) >= 10 else [0]  # fewer leave no room for two dates
        axes.set_xticks(ends, [marks[end - 1].when for end in ends])
        axes.get_xticklabels()[-1].set_horizontalalignment("right")
        if len(ends) > 1:
            axes.get_xticklabels()[0].set_horizontalalignment("left")
        for side in ("left", "bottom"):
            axes.spines[side].set_visible(False)
        axes.tick_params(length=0)
        there = {state: sum(mark.state == state for mark in marks) for state in STATES}
        told = ", ".join(f"{count} {STATES[state][1]}" for state, count in there.items() if count)
        drawn = inline(figure, name, f"The last {many(len(marks), 'batch', 'batches')}: {told}.")
    shapes = {"released": "dot", "held": "diamond", "settled": "square", "discarded": "cross"}
    key = "; ".join(f"{shapes[state]}: {STATES[state][1]}" for state, count in there.items() if count)
    ring = "; ring: this batch" if judged.any() else ""
    return drawn, f"{key[:1].upper()}{key[1:]}{ring}."


def _time_axis(axes: Axes, zone: ZoneInfo) -> None:
    from matplotlib.dates import AutoDateLocator, ConciseDateFormatter

    locator = AutoDateLocator(tz=zone, minticks=2, maxticks=5)  # type: ignore[no-untyped-call]  # matplotlib's dates have no types
    axes.xaxis.set_major_locator(locator)
    formats = ["%Y", "%b %Y", "%-d %b", "%H:%M", "%H:%M", "%H:%M:%S"]
    axes.xaxis.set_major_formatter(
        ConciseDateFormatter(  # type: ignore[no-untyped-call]  # nor have their formatters
            locator, tz=zone, show_offset=False, formats=formats,
            zero_formats=["%Y", "%b %Y", "%-d %b", "%-d %b", "%H:%M", "%H:%M"],
        )
    )  # fmt: skip


def _floats(values: Numbers) -> np.ndarray:
    return np.array([np.nan if value is None else value for value in values], dtype=np.float64)


def _least(y: np.ndarray) -> float | None:
    return float(np.nanmin(y)) if np.isfinite(y).any() else None


def _most(y: np.ndarray) -> float | None:
    return float(np.nanmax(y)) if np.isfinite(y).any() else None


def _last(y: np.ndarray) -> float | None:
    return float(y[-1]) if len(y) and np.isfinite(y[-1]) else None
