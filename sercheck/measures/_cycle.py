"""The cycle by which marks of a feed may hang together; depends on ``grid`` only."""

from __future__ import annotations

import numpy as np

from sercheck.grid import Panel

DAY = 86_400_000_000_000
"""Nanoseconds."""


def shortest_cycle(panel: Panel) -> int | None:
    """Steps of the shortest declared season; where none is declared, of a day, as most feeds faster than that have one.

    None for a feed of days or slower, of steps that do not fill a day, or without a cadence.
    """
    if panel.axis.lengths:
        return min(panel.axis.lengths.values())
    steps = np.diff(panel.axis.stamps)
    if not len(steps) or not 0 < steps[0] < DAY or DAY % int(steps[0]) or (steps != steps[0]).any():
        return None
    return DAY // int(steps[0])


def clusters_assumed(panel: Panel, what: str, known: str) -> str:
    """What a share of rows takes for granted: ``what`` clusters no longer than ``known`` show."""
    season = shortest_cycle(panel)
    return f"{what} are no longer than {known} show, and hang together by no cycle" + (
        "" if season is None else f" but one of {season} steps"
    )
