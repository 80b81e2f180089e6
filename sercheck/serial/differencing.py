"""How much differencing a series wants, whether it has a trend, and what its mean is worth.

Depends on numpy and ``serial`` only.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from sercheck.serial.arrays import Bools, Floats, Ints, as_series
from sercheck.serial.autocovariances import autocorrelation, differences
from sercheck.serial.effective_sizes import effective_size
from sercheck.serial.long_run import autoregressive_long_run, trend_cosine_long_run
from sercheck.serial.risk import t_tail
from sercheck.serial.season import decomposed, detrended, phase_means
from sercheck.serial.unit_root import augmented_dickey_fuller, kpss

STRONG = 0.64
"""Strength of a season from which it is differenced (Wang, Smith and Hyndman 2006; the number is R's ``nsdiffs``', from
memory)."""
ROOT_LEVEL, LEVEL = 0.01, 0.05
"""Levels of the tests whose null hypotheses are a unit root and a level (common practice: in doubt one difference, as
where KPSS decides alone)."""
NEWEST = 1 << 13
"""Newest steps on which unit roots are tested: the tests cost the square of their lags (ours)."""
COARSE = 1024
"""Means of so many stretches at most stand for a series where a trend is tested (ours)."""
FEWEST = 20
"""Values below which neither trend nor unit root is looked for (ours)."""
OVER = -0.45
"""Lag-1 autocorrelation from which differencing went too far: the difference of white noise has -.5."""
TREND_RISK = 0.01
"""Risk of a trend that is none, for each series (ours)."""


class Differencing(NamedTuple):
    """The advice, every array of shape (S,).

    Attributes:
        season: steps of the seasonal difference that is advised, 0 for none.
        first: a first difference is advised.
        wanders: the level, seasons taken out, does not come back to anything: both tests agree on a unit root.
        strength: strength of the strongest season, 1 - var(rest)/var(rest + season); NaN without one.
        adf_p: p-value of the unit root about a line (augmented Dickey-Fuller), what the seasons left.
        kpss_p: p-value of stationarity about a level (KPSS), the same.
        r1: lag-1 autocorrelation after what is advised.
        r1_more: lag-1 autocorrelation after one first difference more.
    """

    season: Ints
    first: Bools
    wanders: Bools
    strength: Floats
    adf_p: Floats
    kpss_p: Floats
    r1: Floats
    r1_more: Floats


class Worth(NamedTuple):
    """Trend and mean of each series, the seasons taken out, every array of shape (S,).

    Attributes:
        slope: least-squares change per step.
        slope_p: its p-value, the larger of two that allow for serial correlation; NaN when it cannot be had.
        n: observed values.
        deviation: standard deviation about the mean, seasons taken out.
        n_eff: independent values that the mean is worth; NaN for a constant series.
    """

    slope: Floats
    slope_p: Floats
    n: Ints
    deviation: Floats
    n_eff: Floats


def without_seasons(x: object, steps: Ints) -> Floats:
    """The series less the phase means of their own seasons, longest first.

    Phase means are taken of what a straight line leaves, so that a trend stays.

    Args:
        x: one series or (S, T); NaN is missing.
        steps: lengths of each series' seasons, 0 for none, shape (S, Q).
    """
    rest = as_series(x).copy()
    for s in sorted(np.unique(steps[steps > 1]).tolist(), reverse=True):
        rows = np.flatnonzero((steps == s).any(axis=1))
        phase = np.arange(rest.shape[1]) % s
        rest[rows] -= np.nan_to_num(phase_means(detrended(rest[rows]), phase, s)[0])[:, phase]
    return rest


def differencing(x: object, steps: Ints, share: Floats) -> Differencing:
    """Advise differences: a seasonal one where the strongest season is strong, a first one where a unit root is left.

    A first difference is advised only when two tests with opposite null hypotheses agree: the augmented Dickey-Fuller
    test about a line does not reject a unit root at .01, and KPSS rejects a level at .05. A stable profile can as well
    be taken out by its means (``without_season``); a difference also follows a profile that changes.

    Args:
        x: one series or (S, T); NaN is missing.
        steps: lengths of each series' seasons, 0 for none, shape (S, Q).
        share: share of the variance of each, shape (S, Q).
    """
    x = as_series(x)
    if x.shape[1] < FEWEST:
        none, nothing = np.zeros(len(x), dtype=bool), np.full(len(x), np.nan)
        r = autocorrelation(x, [1])[:, 0] if x.shape[1] > 1 else nothing
        return Differencing(np.zeros(len(x), dtype=np.int64), none, none, nothing, nothing, nothing, r, nothing)
    strongest = _strongest(steps, share)
    strength = np.full(len(x), np.nan)
    left = without_seasons(x, steps)
    wanders = _unit_root(left)[2]
    for s in np.unique(strongest[strongest > 1]).tolist():
        rows = np.flatnonzero(strongest == s)
        strength[rows] = _strength(x[rows], s)
        strong = rows[strength[rows] >= STRONG]
        if len(strong):
            left[strong] = differences(x[strong], s)
    season = np.where(strength >= STRONG, strongest, 0)
    adf_p, kpss_p, first = _unit_root(left)
    once = differences(left, 1)
    now, then = autocorrelation(left, [1])[:, 0], autocorrelation(once, [1])[:, 0]
    more = autocorrelation(differences(once, 1), [1])[:, 0]
    return Differencing(
        season, first, wanders, strength, adf_p, kpss_p, np.where(first, then, now), np.where(first, more, then)
    )


def _strongest(steps: Ints, share: Floats) -> Ints:
    if not steps.shape[1]:
        return np.zeros(len(steps), dtype=np.int64)
    return np.asarray(steps[np.arange(len(steps)), np.argmax(np.nan_to_num(share, nan=-1.0), axis=1)])


def _strength(x: Floats, s: int) -> Floats:
    """1 - var(rest)/var(rest + season) about a moving average over one cycle (Wang, Smith and Hyndman 2006)."""
    trend, figure = decomposed(x, s)
    season = figure[:, np.arange(x.shape[1]) % s]
    both = x - trend
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(np.maximum(0.0, 1 - _variance(both - season) / _variance(both)))


def _variance(x: Floats) -> Floats:
    seen = ~np.isnan(x)
    count = np.maximum(seen.sum(axis=1), 1)
    mean = np.where(seen, x, 0.0).sum(axis=1) / count
    return np.asarray((np.where(seen, x - mean[:, None], 0.0) ** 2).sum(axis=1) / count)


def _unit_root(x: Floats) -> tuple[Floats, Floats, Bools]:
    """P-values of both tests on the newest steps, and whether they agree on a unit root."""
    newest = x[:, -NEWEST:]
    n = (~np.isnan(newest)).sum(axis=1)
    adf_p = augmented_dickey_fuller(newest, trend=True).p_value
    kpss_p = kpss(newest).p_value
    with np.errstate(invalid="ignore"):
        first = (adf_p > ROOT_LEVEL) & (kpss_p <= LEVEL) & (n >= FEWEST)
    return adf_p, kpss_p, first


def worth(x: object, steps: Ints) -> Worth:
    """Trend and effective sample size of the mean, the seasons taken out first.

    The slope's standard error is the larger of two (Berk 1974 on an autoregression; Sun 2011 on cosines), n_eff that of
    ``effective_size``.

    Args:
        x: one series or (S, T); NaN is missing.
        steps: lengths of each series' seasons, 0 for none, shape (S, Q).
    """
    rest = without_seasons(x, steps)
    n = (~np.isnan(rest)).sum(axis=1)
    nothing = np.full(len(rest), np.nan)
    if rest.shape[1] < 2:
        return Worth(nothing, nothing, n, np.where(n > 0, 0.0, np.nan), nothing)
    slope, p = _slope(rest)
    top = np.max(np.abs(rest), axis=1, where=~np.isnan(rest), initial=0.0)
    unit = rest / np.where(top > 0, top, 1.0)[:, None]  # squares of the largest doubles overflow
    deviation = np.where(n > 0, np.sqrt(_variance(unit)) * top, np.nan)
    return Worth(slope, np.where(n >= FEWEST, p, np.nan), n, deviation, effective_size(rest))


def _slope(x: Floats) -> tuple[Floats, Floats]:
    """Change per step and its p-value, from means of stretches where the series is long."""
    width = -(-x.shape[1] // COARSE)
    coarse = _coarse(x, width) if width > 1 else x
    top = np.max(np.abs(coarse), axis=1, where=~np.isnan(coarse), initial=0.0)[:, None]
    unit = coarse / np.where(top > 0, top, 1.0)
    seen = ~np.isnan(unit)
    count = np.maximum(seen.sum(axis=1, keepdims=True), 1)
    clock = np.where(seen, np.arange(unit.shape[1], dtype=np.float64), 0.0)
    clock = np.where(seen, clock - clock.sum(axis=1, keepdims=True) / count, 0.0)
    moment = np.maximum((clock**2).sum(axis=1), 1e-300)
    slope = (clock * np.where(seen, unit, 0.0)).sum(axis=1) / moment
    rest = detrended(unit)
    if unit.shape[1] < FEWEST:
        return slope * top[:, 0] / width, np.full(len(x), np.nan)
    runs = autoregressive_long_run(rest, trend=True), trend_cosine_long_run(rest)
    with np.errstate(divide="ignore", invalid="ignore"):
        p = [2 * t_tail(np.abs(slope) / np.sqrt(run.variance / moment), run.df) for run in runs]
    return slope * top[:, 0] / width, np.maximum(p[0], p[1])


def _coarse(x: Floats, width: int) -> Floats:
    """Means of successive stretches, counted from the end."""
    steps = x.shape[1] // width * width
    cube = x[:, x.shape[1] - steps :].reshape(len(x), -1, width)
    seen = ~np.isnan(cube)
    count = seen.sum(axis=2)
    total = np.where(seen, cube, 0.0).sum(axis=2)
    return np.where(count > 0, total / np.maximum(count, 1), np.nan)
