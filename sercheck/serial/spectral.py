"""Is there a season at all: periodogram peaks against their neighbours; depends on numpy and ``scipy.special``."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from scipy import special

from sercheck.serial.arrays import Floats, Ints, as_series
from sercheck.serial.season import detrended

FEWEST_CYCLES = 4
"""Cycles below which a harmonic has no neighbours to compare with that the trend has not touched."""
MOST_HARMONICS = 3
"""Harmonics looked at: daily and weekly shapes have most of their power there, and more dilute the rest."""


class SpectralF(NamedTuple):
    """The local spectral F test of a season.

    Attributes:
        statistic: -2 Σ ln p_h over the harmonics, shape (S,); NaN where it cannot be computed.
        df: its degrees of freedom as χ² when there is no season, twice the number of harmonics.
        p_value: probability of so large a statistic without a season, shape (S,).
        f: F_h of each harmonic, shape (S, H).
        neighbours: ordinates in the denominator of each F (2m).
        cycles: whole cycles used.
        share: share of the variance of the used stretch that lies on the harmonics looked at, shape (S,).
        n: observed values in the used stretch, shape (S,).
    """

    statistic: Floats
    df: int
    p_value: Floats
    f: Floats
    neighbours: int
    cycles: int
    share: Floats
    n: Ints


def spectral_f(x: object, length: int) -> SpectralF:
    """Test for a season of ``length`` steps against any smooth spectrum.

    The last c whole cycles are detrended; I is their periodogram. F_h = I(ch) over the mean of its 2m neighbours,
    m = (c - 1)//2, follows F(2, 4m) for harmonics h = 1 .. H = min(3, (length - 1)//2) when the spectrum is flat across
    the neighbours; their p-values are combined by Fisher (1932): -2 Σ ln p_h is χ² with 2H degrees of freedom. What is
    left over before the whole cycles is not used.

    Args:
        x: one series or (S, T); NaN is missing and counts as lying on the trend, which is right for scattered gaps and
            only lowers the peaks for long ones.
        length: steps in one cycle.

    Returns:
        All NaN when there are fewer than ``FEWEST_CYCLES`` cycles or ``length`` is under 3; NaN for a series that lies
        on its trend.
    """
    x = as_series(x)
    series, steps = x.shape
    cycles = steps // length if length > 0 else 0
    harmonics = min(MOST_HARMONICS, (length - 1) // 2)
    if cycles < FEWEST_CYCLES or harmonics < 1:
        nothing = np.full(series, np.nan)
        none = np.full((series, max(harmonics, 0)), np.nan)
        return SpectralF(nothing, 2 * max(harmonics, 0), nothing, none, 0, cycles, nothing, np.zeros(series, np.int64))
    used = x[:, steps - cycles * length :]
    n = np.sum(~np.isnan(used), axis=1)
    rest = detrended(used)
    rest = np.where(np.isnan(rest), 0.0, rest)
    size = np.abs(np.where(np.isnan(used), 0.0, used)).max(axis=1)
    flat = np.abs(rest).max(axis=1) <= 1e-12 * size  # a line, to rounding
    top = np.abs(rest).max(axis=1, keepdims=True)
    power = np.abs(np.fft.rfft(rest / np.where(top > 0, top, 1.0), axis=1)) ** 2
    m = (cycles - 1) // 2
    peaks = cycles * np.arange(1, harmonics + 1)
    beside = peaks[:, None] + np.r_[-m:0, 1 : m + 1]
    top, floor = power[:, peaks], power[:, beside].mean(axis=2)
    total = power[:, 1:].sum(axis=1) * 2 - (power[:, -1] if used.shape[1] % 2 == 0 else 0.0)
    with np.errstate(divide="ignore", invalid="ignore"):
        # neighbours that hold rounding noise only (a noise-free cycle): the peak is as sure as doubles can tell
        f = top / np.maximum(floor, 1e-28 * total[:, None])
        share = 2 * top.sum(axis=1) / total
    f[flat] = np.nan
    # upper tail of F(2, 4m) in closed form: (1 + f / (2m))^(-2m)
    log_p = -2 * m * np.log1p(f / (2 * m))
    statistic = -2 * log_p.sum(axis=1)
    p = special.chdtrc(2 * harmonics, statistic)
    return SpectralF(statistic, 2 * harmonics, p, f, 2 * m, cycles, np.where(flat, np.nan, share), n)


def spectral_f_power(cycles: int, length: int, share: float, risk: float) -> float:
    """Chance that ``spectral_f`` certifies a sinusoid of that share of a series' variance in white noise.

    Approximate: the first harmonic by itself, a noncentral F(2, 4m) with noncentrality n·share/(1 - share), at the
    critical value that the combined test leaves it when the others have their median p of ½.
    """
    harmonics = min(MOST_HARMONICS, (length - 1) // 2)
    if cycles < FEWEST_CYCLES or harmonics < 1:
        return 0.0
    m = (cycles - 1) // 2
    critical = float(special.chdtri(2 * harmonics, risk)) - 2 * np.log(2.0) * (harmonics - 1)
    f = 2 * m * np.expm1(max(critical, 0.0) / (4 * m))
    return float(1 - special.ncfdtr(2, 4 * m, cycles * length * share / (1 - share), f))
