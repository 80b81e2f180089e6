"""What ``study`` found, on one screen of 80 columns; depends on ``say`` and the sentences of ``portrait``."""

from __future__ import annotations

import textwrap

import click
import numpy as np

from sercheck.plain import plain
from sercheck.portrait import words
from sercheck.portrait.series import Portrait
from sercheck.portrait.whole import Study
from sercheck.serial.arrays import Floats, Ints

WIDTH = 80
"""Columns of the screen (a terminal as it opens)."""
ROWS = 11
"""Lines of the correlogram."""
MOST_GROUPS, MOST_KINDS = 3, 5
"""Groups of series and kinds of findings told; more are counted."""


def answer(study: Study) -> str:
    """The whole study as text."""
    lines = [_folded(f"{click.style('STUDIED', bold=True)}  {plain(study.feed, 60)}: {words.head(study)}", "", "  ")]
    lines.append(_folded(f"found: {plain('; '.join(study.told), 300)}", "  ", "    ") if study.told else "")
    together = words.groups(study.portraits)
    many = len(study.portraits)
    for place, group in enumerate(together[:MOST_GROUPS]):
        lines += _group(study, group, many)[: None if place == 0 else 1]
    if len(together) > MOST_GROUPS:
        rest = sum(len(group.members) for group in together[MOST_GROUPS:])
        lines.append(f"  and {rest} more in {len(together) - MOST_GROUPS} groups (--format json tells all)")
    if together:
        lines += _correlogram(together[0].first, study)
    lines += _findings(study)
    return "\n".join(line for line in lines if line)


def _folded(text: str, first: str, rest: str) -> str:
    return textwrap.fill(text, WIDTH, initial_indent=first, subsequent_indent=rest, break_on_hyphens=False)


def _group(study: Study, group: words.Group, many: int) -> list[str]:
    """The shape of a group; of the first one also differencing and mean."""
    one = group.first
    who = plain(words.name_of(one, study), 40)
    if len(group.members) > 1:
        column = f" of {plain(one.column, 30)}" if len(study.layout.values) > 1 else ""
        who = f"{len(group.members)} of {many} series{column}"
    lines = [_folded(f"{who}: {words.shape(group, study.layout.every)}", "", "  ")]
    for text in (words.differencing_text(one), words.mean_text(one)):
        own = f"{plain(words.name_of(one, study), 40)}: " if len(group.members) > 1 and text else ""
        lines.append(_folded(f"{own}{text}", "  ", "  ") if text else "")
    return lines


def _findings(study: Study) -> list[str]:
    found = words.by_kind(study)
    lines = []
    many = len(study.portraits)
    for what, pairs in found[:MOST_KINDS]:
        one, finding = pairs[0]
        who = f"{plain(words.name_of(one, study), 30)}: " if many > 1 else ""
        more = f" (in {len({id(pair[0]) for pair in pairs})} of {many} series, this is the largest)" if many > 1 else ""
        text = f"{click.style(what, bold=True)}{more}: {who}{plain(finding.about, 200)}, {plain(finding.where, 80)}"
        lines.append(_folded(text, "", "  "))
    if len(found) > MOST_KINDS:
        lines.append(f"and {len(found) - MOST_KINDS} more kinds of findings")
    return lines or ["Nothing odd was found in the clock or the values."]


def _correlogram(one: Portrait, study: Study) -> list[str]:
    """The correlogram as a drawing of blocks, and its telling lags as text."""
    if not len(one.lags) or not np.isfinite(one.r).any():
        return []
    name = plain(words.name_of(one, study), 40)
    last = int(one.lags[-1])
    return [
        f"autocorrelation of {name}, lags 1 to {last}; dots: the 95 % sampling band",
        *drawn(one.lags, one.r, one.band, [season.steps for season in one.seasons]),
        _folded(words.correlogram_text(one), "  ", "  "),
    ]


def drawn(lags: Ints, r: Floats, band: Floats, seasons: list[int]) -> list[str]:
    """Lines of a correlogram: one column a lag, or for every few of them.

    Where a column stands for several lags it is full as far as all of them reach and grey as far as any does. The
    band's edges are dots.
    """
    room = WIDTH - 7
    last = int(lags[-1])
    columns = min(room, last)
    place = np.minimum((lags - 1) * columns // last, columns - 1)
    low, high = np.full(columns, np.nan), np.full(columns, np.nan)
    edge = np.full(columns, np.nan)
    np.fmin.at(low, place, r)
    np.fmax.at(high, place, r)
    np.fmax.at(edge, place, band)
    wide = columns if columns == room else columns * max(1, room // columns)
    spread = np.repeat(np.arange(columns), wide // columns)
    low, high, edge = low[spread], high[spread], edge[spread]
    bottom = -1.0 if np.nanmin(r) < -0.5 else -0.5 if np.nanmin(r) < -0.2 else -0.25
    step = (1.0 - bottom) / (ROWS - 1)
    levels = 1.0 - step * np.arange(ROWS)
    levels -= levels[np.abs(levels).argmin()]  # one of the lines lies at 0
    return [*(_line(level, step, low, high, edge) for level in levels), _scale(last, wide, seasons)]


def _line(level: float, step: float, low: Floats, high: Floats, edge: Floats) -> str:
    if abs(level) < step / 4:
        cells = np.full(len(low), "─")
    else:
        all_of, any_of = (low, high) if level > 0 else (-high, -low)
        size = abs(level) - step / 2
        cells = np.full(len(low), " ")
        cells[np.abs(edge - abs(level)) <= step / 2] = "·"
        with np.errstate(invalid="ignore"):
            cells[any_of > size] = "▒"
            cells[all_of > size] = "█"
    return f"{level:6.2f} {''.join(cells)}"


def _scale(last: int, wide: int, seasons: list[int]) -> str:
    """The lags under the drawing: the longest season and its multiples, else round numbers."""
    longest = max((s for s in seasons if s <= last), default=0)
    step = longest or max(1, int(10 ** np.floor(np.log10(max(last, 1)))) // (1 if last < 20 else 2) or 1)
    cells = [" "] * (wide + 8)
    for lag in [1, *range(step, last + 1, step)]:
        text = str(lag)
        at = (lag - 1) * wide // last
        at = min(at, wide - len(text))
        if at >= 0 and all(cell == " " for cell in cells[max(at - 1, 0) : at + len(text) + 1]):
            cells[at : at + len(text)] = text
    return f"{'lag':>6s} {''.join(cells)}".rstrip()
