"""The autocorrelation at a season against the author's numbers; depends on ``serial``, ``grid``, ``measure``."""

from __future__ import annotations

import numpy as np

from sercheck.baseline import FEWEST_CYCLES
from sercheck.grid import Panel
from sercheck.measure import Measurement, Question, Reasons, Reference, Side
from sercheck.measures._lags import (
    ask_reach,
    ask_rows,
    ask_variety,
    correlation_reference,
    fewest_for_bound,
    literal_bounds,
    window_counts,
)
from sercheck.measures._season import Named
from sercheck.serial.arrays import Bools, Floats
from sercheck.serial.autoregression import burg, root_beyond
from sercheck.serial.centre import centred
from sercheck.serial.lag_law import ROOT, bound_law, lagged
from sercheck.serial.matched_filter import HIGHEST_ORDER
from sercheck.serial.season import detrended, without_trend_and_season

NOTHING = 1e-20
"""Share of the variance under which what season and line leave is rounding."""


def bounded(panel: Panel, question: Question, season: Named, multiple: int) -> Measurement:
    """Judge the autocorrelation at the season, a straight line taken out, against the author's numbers."""
    lags = (season.cycle.length,)
    n, n_missing = window_counts(panel, lags)
    data = centred(panel.window)
    window = np.where(data.seen, data.values, np.nan)
    seen = lagged(detrended(window), np.array(lags, dtype=np.int64))
    bounds = literal_bounds(question)
    reasons = Reasons(n.shape)
    ask_variety(reasons, panel, seen.r, question.risk)
    ask_rows(reasons, n, seen.rows, lags, fewest_for_bound([bound for _, bound in bounds], 48, 4))
    reasons.add(np.isnan(seen.r), "the window is a straight line, but for the rounding of its numbers")
    reasons.add(
        _wanders(window, season, panel.start, lags[0] // multiple)[:, None],
        "the series wanders without a level to return to: difference first (after: difference)",
    )
    references: dict[Side, Reference] = {}
    error = np.full(n.shape, np.nan)
    with np.errstate(divide="ignore"):
        naive, reach = 1 / np.sqrt(n), 1 - lags[0] / np.where(seen.rows > 0, seen.rows, np.nan)
    for side, bound in bounds:
        if abs(bound) >= 1:
            reasons.add(where=True, text=f"an autocorrelation lies between -1 and 1: a bound of {bound:g} says nothing")
            continue
        law = bound_law(seen, bound)
        references[side] = correlation_reference(seen.r, law, np.full(n.shape, bound), naive)
        ask_reach(reasons, references[side], side, reach, question.risk / len(bounds))
        error = np.fmax(error, law.error)
    return Measurement(
        observed=seen.r,
        n=n,
        n_missing=n_missing,
        n_eff=np.where(np.isnan(seen.r), np.nan, 1 / error**2),
        upper=references.get("upper"),
        lower=references.get("lower"),
        undecided=reasons.index,
        reasons=tuple(reasons.texts),
        method="atanh r at the season after taking out a line, variance and bias of an autoregression with the bound "
        "imposed (Bartlett 1946; Kendall 1954; Taylor 1984)",
        assumes="a linear process about a straight line",
        lags=lags,
        season=season.name,
    )


def _wanders(window: Floats, season: Named, start: int, length: int) -> Bools:
    """A root near 1 once the window's own line and phase means are out: a strong season must not look like one."""
    if window.shape[1] < FEWEST_CYCLES * length:
        return np.zeros(len(window), dtype=bool)
    rest = without_trend_and_season(window, season.cycle.phase[start:] % length, length)
    exact: Bools = np.nansum(rest**2, axis=1) <= NOTHING * np.nansum(window**2, axis=1)
    return root_beyond(burg(rest, max_order=HIGHEST_ORDER), ROOT) & ~exact
