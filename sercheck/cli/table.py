"""Plain tables for people: aligned, at most as wide as the screen; depends on ``say``."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from unicodedata import combining, east_asian_width

from sercheck.cli.say import WIDTH, plain

GAP = "  "
NOTHING = "–"
"""Stands for null."""


@dataclass(frozen=True)
class Head:
    """A column of a table: its name, whether it is set to the right, and how narrow it may become (None: as it is)."""

    name: str
    right: bool = False
    least: int | None = None


def table(heads: Sequence[Head], rows: Sequence[Sequence[object]]) -> str:
    """Lines under a head; texts too long for the screen end in ``…``, numbers are never cut."""
    cells = [[head.name for head in heads], *([_cell(value) for value in row] for row in rows)]
    widths = _widths(heads, cells)
    lines = [
        GAP.join(_set(cell, width, head.right) for cell, width, head in zip(row, widths, heads, strict=True)).rstrip()
        for row in cells
    ]
    return "\n".join(lines)


def number(value: float | None, digits: int = 4) -> str:
    """A statistic with few significant digits, enough to read; the record has them all."""
    return NOTHING if value is None else f"{value:.{digits}g}"


def _cell(value: object) -> str:
    if value is None:
        return NOTHING
    return plain(value) if isinstance(value, str) else f"{value}"


def _widths(heads: Sequence[Head], cells: Sequence[Sequence[str]]) -> list[int]:
    """Natural widths, the widest column that may shrink taken in until the line fits."""
    widths = [max(map(_width, column)) for column in zip(*cells, strict=True)]
    over = sum(widths) + len(GAP) * (len(widths) - 1) - WIDTH
    for _ in range(max(over, 0)):
        able = [i for i, head in enumerate(heads) if head.least is not None and widths[i] > head.least]
        if not able:
            break
        widths[max(able, key=widths.__getitem__)] -= 1
    return widths


def _set(text: str, width: int, right: bool) -> str:
    room = width - _width(text)
    if room < 0:
        text = _cut(text, width - 1) + "…"
        room = width - _width(text)
    return " " * room + text if right else text + " " * room


def _cut(text: str, width: int) -> str:
    while _width(text) > width:
        text = text[:-1]
    return text


def _width(text: str) -> int:
    """Places on a terminal: wide letters take two, accents that stand on another letter none."""
    if text.isascii():
        return len(text)
    return sum(0 if combining(c) else 2 if east_asian_width(c) in "WF" else 1 for c in text)
