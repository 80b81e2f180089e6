"""The autocorrelation at a season against the author's numbers; depends on ``serial``, ``grid``, ``measure``."""

from __future__ import annotations

import numpy as np

from sercheck.baseline import FEWEST_CYCLES
from sercheck.grid import Panel
from sercheck.measure import Measurement, Question, Reasons, Side
from sercheck.measures._season import Named, window_counts
from sercheck.reference import Pivot, same
from sercheck.serial.arrays import Bools, Ints
from sercheck.serial.autoregression import burg, root_beyond
from sercheck.serial.centre import centred
from sercheck.serial.lag_law import ROOT, Lagged, bound_law, forward, lagged
from sercheck.serial.matched_filter import HIGHEST_ORDER
from sercheck.serial.season import detrended, without_trend_and_season

MODEST = 0.6
"""Size of a bound from which r scatters so unevenly that more values are needed (simulated)."""
FEWEST, CYCLES = 48, 4
"""Values, and cycles of the lag, for a bound up to ``MODEST`` (simulated)."""
FEWEST_STEEP, CYCLES_STEEP = 168, 7
"""The same for a bound above it (simulated)."""
NOTHING = 1e-20
"""Share of the variance under which what season and line leave is rounding."""


def bounded(panel: Panel, question: Question, season: Named, multiple: int) -> Measurement:
    """Judge the autocorrelation at the season against the author's numbers."""
    lag = season.cycle.length
    stays = question.stays
    n, n_missing = window_counts(panel.window)
    data = centred(panel.window)
    rest = detrended(np.where(data.seen, data.values, np.nan))
    seen = lagged(rest, np.array([lag], dtype=np.int64))
    reasons = Reasons(n.shape)
    bounds = [b for b in (stays.low, stays.high) if b is not None]
    steep = any(abs(b) > MODEST for b in bounds)
    fewest = max(FEWEST_STEEP, CYCLES_STEEP * lag) if steep else max(FEWEST, CYCLES * lag)
    reasons.add(
        n < fewest,
        f"fewer than {fewest} values in the window: a bound "
        f"{'above' if steep else 'up to'} {MODEST} on the autocorrelation at lag {lag} needs {fewest}",
    )
    reasons.add(np.isnan(seen.r), "the window is constant, or too gappy to have an autocorrelation at this lag")
    reasons.add(
        _wanders(panel, season, lag // multiple)[:, None],
        "the series wanders without a level to return to: difference first (after: difference)",
    )
    sides = len(bounds)
    upper = _side(reasons, seen, "upper", stays.high, n, question.risk / sides)
    lower = _side(reasons, seen, "lower", stays.low, n, question.risk / sides)
    nearest = upper or lower
    spread = np.full(n.shape, np.nan) if nearest is None else nearest.standard_error
    with np.errstate(divide="ignore"):
        n_eff = 1 / spread**2
    return Measurement(
        observed=seen.r,
        n=n,
        n_missing=n_missing,
        n_eff=n_eff,
        upper=upper,
        lower=lower,
        undecided=reasons.index,
        reasons=tuple(reasons.texts),
        method="atanh r at the season after taking out a line, variance and bias of an autoregression with the bound "
        "imposed (Bartlett 1946; Kendall 1954; Taylor 1984)",
        assumes="a linear process about a straight line",
        lags=(lag,),
        season=season.name,
    )


def _side(reasons: Reasons, seen: Lagged, side: Side, bound: float | None, n: Ints, risk: float) -> Pivot | None:
    """The law for one side of the bound, and whether its limit can be reached at all."""
    if bound is None:
        return None
    if not -1 < bound < 1:
        reasons.add(where=True, text=f"an autocorrelation lies between -1 and 1: a bound of {bound:g} says nothing")
        return None
    law = bound_law(seen, bound)
    with np.errstate(divide="ignore"):
        naive = 1 / np.sqrt(n)
    pivot = Pivot(
        statistic=forward(seen.r),
        centre=law.centre,
        scale=law.scale,
        df=law.df,
        bound=np.full(n.shape, bound),
        standard_error=np.where(np.isnan(seen.r), np.nan, law.error),
        to_unit=np.tanh,
        naive_scale=naive,
        naive_centre=np.full(n.shape, bound),
        naive_to_unit=same,
    )
    limit = pivot.limit(side, np.full(n.shape, risk))
    lag = int(seen.lags[0])
    with np.errstate(divide="ignore", invalid="ignore"):
        reach = 1 - lag / np.where(seen.rows > 0, seen.rows, np.nan)
        reasons.add(
            limit > reach if side == "upper" else limit < -reach,
            f"the limit lies beyond what the autocorrelation at lag {lag} can reach in this window: "
            "a longer one is needed",
        )
    return pivot


def _wanders(panel: Panel, season: Named, length: int) -> Bools:
    """A root near 1 once the window's own line and phase means are out: a strong season must not look like one."""
    data = centred(panel.window)
    x = np.where(data.seen, data.values, np.nan)
    if x.shape[1] < FEWEST_CYCLES * length:
        return np.zeros(len(x), dtype=bool)
    rest = without_trend_and_season(x, season.cycle.phase[panel.start :] % length, length)
    exact: Bools = np.nansum(rest**2, axis=1) <= NOTHING * np.nansum(x**2, axis=1)
    return root_beyond(burg(rest, max_order=HIGHEST_ORDER), ROOT) & ~exact
