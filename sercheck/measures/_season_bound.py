"""The autocorrelation at a season against the author's numbers; depends on ``serial``, ``grid``, ``measure``."""

from __future__ import annotations

import numpy as np

from sercheck.baseline import FEWEST_CYCLES
from sercheck.grid import Panel
from sercheck.measure import Measurement, Question
from sercheck.measures._lags import held_to_bounds
from sercheck.measures._season import Named
from sercheck.serial.arrays import Bools, Floats
from sercheck.serial.autoregression import burg, root_beyond
from sercheck.serial.centre import centred
from sercheck.serial.far_lag import ROOT
from sercheck.serial.lag_law import lagged_alone
from sercheck.serial.matched_filter import HIGHEST_ORDER
from sercheck.serial.season import detrended, without_trend_and_season

NOTHING = 1e-20
"""Share of the variance under which what season and line leave is rounding."""


def bounded(panel: Panel, question: Question, season: Named, multiple: int) -> Measurement:
    """Judge the autocorrelation at the season, a straight line taken out, against the author's numbers."""
    lag = season.cycle.length
    data = centred(panel.window)
    window = np.where(data.seen, data.values, np.nan)
    return held_to_bounds(
        panel,
        question,
        lagged_alone(detrended(window), np.array([lag], dtype=np.int64), panel.own_cycle),
        flat="the window is a straight line, but for the rounding of its numbers",
        wanders=_wanders(window, season, panel.start, lag // multiple),
        advice="the series wanders without a level to return to: difference first (after: difference)",
        method="atanh r at the season after taking out a line, variance and bias of an autoregression with the bound "
        "imposed (Bartlett 1946; Kendall 1954; Taylor 1984)",
        assumes="a linear process about a straight line",
        season=season.name,
    )


def _wanders(window: Floats, season: Named, start: int, length: int) -> Bools:
    """A root near 1 once the window's own line and phase means are out: a strong season must not look like one."""
    if window.shape[1] < FEWEST_CYCLES * length:
        return np.zeros(len(window), dtype=bool)
    rest = without_trend_and_season(window, season.cycle.phase[start:] % length, length)
    exact: Bools = np.nansum(rest**2, axis=1) <= NOTHING * np.nansum(window**2, axis=1)
    return root_beyond(burg(rest, max_order=HIGHEST_ORDER), ROOT) & ~exact
