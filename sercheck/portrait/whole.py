"""A whole history looked at, from files or a frame to portraits of its series; depends on the guess and ``intake``."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from sercheck.grid import Grid
from sercheck.guess import guess
from sercheck.guess_clock import calendar_seasons
from sercheck.intake.layout import Layout
from sercheck.intake.stream import MemorySource, feed_grids, open_feed
from sercheck.intake.zone import NOT_A_STAMP
from sercheck.portrait.findings import stamp_text
from sercheck.portrait.series import Portrait, portraits
from sercheck.serial.arrays import Floats, Ints

if TYPE_CHECKING:
    import pandas as pd

    Given = str | Path | Sequence[str | Path] | pd.DataFrame

KEPT = 6
"""Portraits that keep their series for plots, those with the most findings (ours)."""


BLOCK_CELLS = 1 << 20
"""Cells looked at together (ours: a second or two of work, so that progress is told and little memory is held)."""


@dataclass(frozen=True)
class Study:
    """What a history looks like.

    Attributes:
        feed: name of the history: the file's, or ``DataFrame``.
        layout: how it was read.
        told: what was found rather than given.
        natural: the seasons that the calendar names for the cadence, in steps.
        first: stamp of the first step, UTC.
        last: stamp of the last step.
        steps: steps from the first to the last.
        rows: rows delivered.
        series: number of series.
        stamps: nanoseconds UTC of the steps.
        portraits: one for each series and value column, the one with the most findings first.
    """

    feed: str
    layout: Layout
    told: tuple[str, ...]
    natural: Mapping[str, int]
    first: str
    last: str
    steps: int
    rows: int
    series: int
    stamps: Ints
    portraits: tuple[Portrait, ...]

    def to_dict(self) -> dict[str, Any]:
        """The study as plain data; a number that cannot be had is None."""
        return {
            "feed": self.feed,
            "columns": {
                "time": self.layout.time,
                "series": list(self.layout.series),
                "values": list(self.layout.values),
            },
            "every": self.layout.every,
            "timezone": self.layout.timezone,
            "first": self.first,
            "last": self.last,
            "steps": self.steps,
            "rows": self.rows,
            "series": [_plain(one, self.layout.every) for one in self.portraits],
        }


def _plain(one: Portrait, every: str) -> dict[str, Any]:
    return {
        "series": one.series,
        "column": one.column,
        "every": every,
        "n": one.n,
        "n_missing": one.n_missing,
        "seasons": [
            {
                "steps": season.steps,
                "name": season.name or None,
                "p_value": season.p_value,
                "share_of_variance": _rounded(season.share),
                "r": _rounded(season.r),
                "harmonics": list(season.harmonics),
            }
            for season in one.seasons
        ],
        "difference": list(one.difference),
        "r1": _rounded(one.r1),
        "r1_after_one_more": _rounded(one.r1_more),
        "wanders": one.wanders,
        "trend": one.slope,
        "mean": one.mean,
        "deviation": one.deviation,
        "n_eff_mean": _rounded(one.n_eff_mean),
        "naive_error_times": _rounded(one.error_ratio),
        "autocorrelation": [
            {"lag": int(lag), "r": _rounded(r), "low": _rounded(-band), "high": _rounded(band)}
            for lag, r, band in zip(one.lags.tolist(), one.r.tolist(), one.band.tolist(), strict=True)
        ],
        "findings": [{"what": found.what, "where": found.where, "about": found.about} for found in one.findings],
    }


def _rounded(value: float | None) -> float | None:
    return None if value is None or not np.isfinite(value) else float(f"{value:.6g}")


def study(
    history: Given,
    *,
    time: str | None = None,
    series: Sequence[str] | None = None,
    values: Sequence[str] | None = None,
    every: str | None = None,
    timezone: str | None = None,
    progress: Callable[[float, str], None] | None = None,
) -> Study:
    """Look at a history: clock, seasons, trend, differencing, what its means are worth, and what is odd about it.

    Nothing needs to be said; what is said is not guessed (see ``guess``).

    Args:
        history: files, a glob, or a DataFrame, of any format that ``gate`` reads.
        time: the time column.
        series: the key columns; an empty list for a feed of one series.
        values: the value columns.
        every: the cadence.
        timezone: the zone of stamps without an offset.
        progress: called after each block with the share of the rows looked at (0 where a stream does not tell how many
            there are) and what is being done.

    Raises:
        SercheckError: the history cannot be read, or has no time or value column.
    """
    history = named_index(history)
    found = guess(history, time=time, series=series, values=values, every=every, timezone=timezone)
    natural = {name: steps for name, (steps, _) in calendar_seasons(found.layout.every).items()}
    source = open_feed(history, found.layout)
    total = len(source.rows()) if isinstance(source, MemorySource) else 0
    told: list[Portrait] = []
    rows = count = 0
    stamps = np.zeros(0, dtype=np.int64)
    bounds = ("", "")
    for block in feed_grids(source, None, found.layout, block_cells=BLOCK_CELLS):
        grid = _unstamped(block) if found.counted else block
        for column in found.layout.values:
            told += portraits(grid, column, natural)
            told = _lightened(told)
        rows += int(grid.tally.rows.sum())
        count += len(grid.keys)
        stamps = grid.axis.stamps
        bounds = (stamp_text(grid.axis, 0), stamp_text(grid.axis, len(stamps) - 1)) if len(stamps) else bounds
        if progress is not None:
            progress(rows / total if total else 0.0, f"looking at series, {count:,} done")
    told.sort(key=_weight)
    return Study(
        feed=_name(history), layout=found.layout, told=found.told, natural=natural, first=bounds[0], last=bounds[1],
        steps=len(stamps), rows=rows, series=count, stamps=stamps, portraits=tuple(told),
    )  # fmt: skip


def _unstamped(grid: Grid) -> Grid:
    """The grid of a feed whose rows are only numbered."""
    return replace(grid, axis=replace(grid.axis, stamps=np.full(len(grid.axis), NOT_A_STAMP)))


def named_index(history: Given) -> Given:
    """A frame whose nameless index holds dates has a column ``time``."""
    if isinstance(history, str | Path | Sequence):
        return history
    import pandas as pd

    if isinstance(history, pd.DataFrame) and isinstance(history.index, pd.DatetimeIndex) and history.index.name is None:
        return history.rename_axis(index="time")
    return history


def _name(history: Given) -> str:
    if isinstance(history, str | Path):
        return Path(history).name
    if isinstance(history, Sequence):
        return f"{Path(history[0]).name} and {len(history) - 1} more" if len(history) > 1 else Path(history[0]).name
    return "DataFrame"


def _weight(one: Portrait) -> tuple[float, float, str, str]:
    """The order in which portraits are told: many kinds of findings first, then many rows of them, then by name."""
    kinds = len({found.what for found in one.findings})
    return -kinds, -sum(found.size for found in one.findings), one.series, one.column


def _lightened(told: list[Portrait]) -> list[Portrait]:
    """Only the first few keep their series."""
    nothing: Floats = np.zeros(0)
    keep = {id(one) for one in sorted((one for one in told if len(one.values)), key=_weight)[:KEPT]}
    return [one if id(one) in keep or not len(one.values) else replace(one, values=nothing) for one in told]
