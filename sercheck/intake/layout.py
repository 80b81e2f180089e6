"""What intake must know about a feed: its columns, cadence and clocks; depends on nothing of ours."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import date


@dataclass(frozen=True)
class Layout:
    """The part of a rule file that says how rows become a grid.

    Attributes:
        time: column of the stamps.
        series: columns that together name a series; empty when the feed is one series.
        values: value columns.
        every: cadence as a pandas offset, or ``irregular``.
        timezone: zone in which stamps without an offset are read, and whose calendar days and months count.
        season_clock: zone whose clock the seasons follow, where it differs.
        closed_days: local dates on which the feed rests.
        seasons: name to length (time as text, or steps).
        batch_every: length of time one batch stands for, or None.
        group_lengths: lengths that ``after: {every: ...}`` asks for.
    """

    time: str
    series: tuple[str, ...]
    values: tuple[str, ...]
    every: str
    timezone: str = "UTC"
    season_clock: str | None = None
    closed_days: tuple[date, ...] = ()
    seasons: Mapping[str, str | int] = field(default_factory=dict)
    batch_every: str | int | None = None
    group_lengths: tuple[str | int, ...] = ()

    @property
    def needed(self) -> tuple[str, ...]:
        """The columns that are read, each once."""
        return tuple(dict.fromkeys((self.time, *self.series, *self.values)))
