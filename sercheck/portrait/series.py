"""What one series of a history is like, and a block of them measured at once; depends on ``serial`` and ``grid``."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from sercheck.grid import Grid
from sercheck.portrait.findings import Finding
from sercheck.portrait.oddities import breaks, oddities
from sercheck.serial.arrays import Floats, Ints
from sercheck.serial.autocovariances import autocorrelation
from sercheck.serial.differencing import OVER, TREND_RISK, Differencing, differencing, worth
from sercheck.serial.periods import find_seasons
from sercheck.serial.sampling_error import moving_average_band

MOST_LAGS = 400
"""Lags told of each series (ours: four numbers each, a screen shows seventy)."""
FIRST_LAGS = 48
"""Lags told one by one, and the least that is looked at, where the series is four times as long."""
CYCLES_SHOWN = 2.2
"""Cycles of the longest season that the lags reach over."""


@dataclass(frozen=True)
class Season:
    """A season: its length in steps, the calendar's name for it, and the evidence."""

    steps: int
    name: str
    p_value: float
    share: float
    r: float
    harmonics: tuple[int, ...] = ()


@dataclass(frozen=True)
class Portrait:
    """One value column of one series.

    Attributes:
        series: key of the series.
        column: the value column.
        n: observed values.
        n_missing: steps between its first row and the history's end that have none, closed days left out.
        seasons: strongest first.
        difference: steps of the differences that are advised.
        r1: lag-1 autocorrelation after those.
        r1_more: lag-1 autocorrelation after one first difference more; towards -.5 it would be one too many.
        wanders: the level does not come back to anything.
        slope: change per step; None unless there is a trend for certain.
        mean: mean of the observed values, None when there is none.
        deviation: standard deviation, seasons taken out.
        n_eff_mean: independent values that the mean is worth, seasons taken out.
        lags: the lags told.
        r: autocorrelation at each of them, NaN where there is none.
        band: half width of the sampling band about 0 (Bartlett 1946: as if there were none from that lag on).
        findings: what is odd.
        values: the series itself, kept of a few for the plots.
    """

    series: str
    column: str
    n: int
    n_missing: int
    seasons: tuple[Season, ...]
    difference: tuple[int, ...]
    r1: float | None
    r1_more: float | None
    wanders: bool
    slope: float | None
    mean: float | None
    deviation: float | None
    n_eff_mean: float | None
    lags: Ints
    r: Floats
    band: Floats
    findings: tuple[Finding, ...]
    values: Floats = field(repr=False, compare=False)

    @property
    def error_ratio(self) -> float | None:
        """How many times the mean's standard error is what independent values would give."""
        return None if not self.n_eff_mean else float(np.sqrt(self.n / self.n_eff_mean))

    @property
    def over(self) -> bool:
        """One first difference more would be too many."""
        return self.r1_more is not None and self.r1_more <= OVER


def portraits(grid: Grid, column: str, natural: dict[str, int]) -> list[Portrait]:
    """The portraits of one value column of a block of history.

    Args:
        grid: a block of history; all of it is looked at.
        column: the value column.
        natural: the seasons that the calendar names for the cadence, in steps.
    """
    x = np.where(grid.axis.closed, np.nan, grid.values[column])
    T = x.shape[1]
    seasons = find_seasons(x, tuple(natural.values()))
    advice = differencing(x, seasons.steps, seasons.share)
    broken = breaks(grid, column, x, seasons.steps)
    if (broken.level >= 0).any():  # a level that jumps once looks as if it wandered; one that wanders seems to jump
        apart = differencing(broken.without(x), seasons.steps, seasons.share)
        broken = broken.only((broken.level >= 0) & ~apart.wanders)
        advice = Differencing(*(np.where(broken.level >= 0, *pair) for pair in zip(apart, advice, strict=True)))
    value = worth(broken.without(x), seasons.steps)
    lags, r, band = correlogram(x, int(seasons.steps.max(initial=0)))
    found = oddities(grid, column, x, seasons.steps, broken, natural)
    due = due_from_first(grid)
    missing = (np.isnan(x) & due).sum(axis=1)
    seen = ~np.isnan(x)
    names = {steps: name for name, steps in natural.items()}
    told: list[Portrait] = []
    for row, key in enumerate(grid.keys.tolist()):
        own = [
            Season(
                int(s), names.get(int(s), ""), float(seasons.p_value[row, place]), float(seasons.share[row, place]),
                float(seasons.r[row, place]), seasons.harmonics[row].get(int(s), ()),
            )
            for place, s in enumerate(seasons.steps[row].tolist())
            if s
        ]  # fmt: skip
        n = int(value.n[row])
        trend = value.slope_p[row] <= TREND_RISK and T > 0
        told.append(
            Portrait(
                series=str(key),
                column=column,
                n=n,
                n_missing=int(missing[row]),
                seasons=tuple(own),
                difference=tuple(
                    int(s) for s in (advice.season[row], 1 if advice.first[row] else 0) if s
                ),
                r1=_number(advice.r1[row]),
                r1_more=_number(advice.r1_more[row]),
                wanders=bool(advice.wanders[row]),
                slope=float(value.slope[row]) if trend else None,
                mean=_mean(x[row][seen[row]]),
                deviation=_number(value.deviation[row]) if n else None,
                n_eff_mean=_number(value.n_eff[row]),
                lags=lags,
                r=r[row],
                band=band[row],
                findings=tuple(found[row]),
                values=x[row],
            )
        )
    return told


def due_from_first(grid: Grid) -> np.ndarray:
    """Steps at which a row of each series was due: from its first row on, closed days left out, shape (S, T)."""
    T = grid.delivered.shape[1]
    first = np.where(grid.delivered.any(axis=1), grid.delivered.argmax(axis=1), T)
    due = np.arange(T) >= first[:, None]
    return np.asarray(due if grid.irregular else due & grid.axis.expected & ~grid.axis.closed)


def correlogram(x: Floats, longest: int) -> tuple[Ints, Floats, Floats]:
    """Lags worth telling, and autocorrelation and band at them for each series.

    The lags reach over two cycles of the longest season (else ``FIRST_LAGS``), at most half of the series. Beyond the
    first ones they are thinned evenly.

    Args:
        x: shape (S, T), NaN is missing.
        longest: steps of the longest season, 0 for none.
    """
    T = x.shape[1]
    reach = max(int(np.ceil(CYCLES_SHOWN * longest)), min(FIRST_LAGS, T // 4 if T >= 20 else T - 1))
    reach = max(min(reach, T - 1 if T < 20 else max(T // 2, 1)), 0)
    every = np.arange(1, reach + 1)
    if not len(every):
        return every, np.zeros((len(x), 0)), np.zeros((len(x), 0))
    r = autocorrelation(x, every)
    n = np.maximum((~np.isnan(x)).sum(axis=1), 1)
    band = moving_average_band(np.nan_to_num(r), 1)[:, :] / np.sqrt(n)[:, None]
    band = np.where(np.isnan(r), np.nan, band)
    lags = thinned(reach, longest)
    return lags, r[:, lags - 1], band[:, lags - 1]


def thinned(reach: int, longest: int) -> Ints:
    """At most about ``MOST_LAGS`` lags up to ``reach``: the first ones all, and always the longest season's."""
    if reach <= MOST_LAGS:
        return np.arange(1, reach + 1)
    rest = np.linspace(FIRST_LAGS + 1, reach, MOST_LAGS - FIRST_LAGS).round().astype(np.int64)
    own = np.arange(longest, reach + 1, longest) if longest else rest[:0]
    return np.unique(np.concatenate([np.arange(1, FIRST_LAGS + 1), rest, own]))


def _number(value: float) -> float | None:
    return float(value) if np.isfinite(value) else None


def _mean(values: Floats) -> float | None:
    if not len(values):
        return None
    top = float(np.abs(values).max())
    return float((values / top).mean() * top) if top > 0 else 0.0
