"""How many rows weigh as one independent row where marks come in clusters; depends on numpy only.

A mark is 1 (the row has the property), 0 (it has not) or NaN (nothing can be said about the row).
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from sercheck.serial.arrays import Bools, Floats, Ints

BLOCK = 1 << 19
"""Values transformed at once (4 MB: about a second-level cache), so that memory stays flat."""

FEWEST_CYCLES = 8
"""Known cycles from which their sums tell how cycles hang together: two lags below a quarter of them."""


def tally(marks: Floats) -> tuple[Ints, Ints]:
    """Count the marked rows and the rows that can be marked, each of shape (S,)."""
    return np.nansum(marks, axis=1).astype(np.int64), np.count_nonzero(~np.isnan(marks), axis=1).astype(np.int64)


class Clusters(NamedTuple):
    """Size of the clusters of each series, shape (S,).

    Attributes:
        size: rows that weigh as one independent row, τ ≥ 1.
        behind: independent cycles that tell τ where whole cycles tell it, which are few; else inf.
    """

    size: Floats
    behind: Floats


def cluster_size(marks: Floats, *, short: bool = False, season: int | None = None, start: int = 0) -> Floats:
    """``clusters(...).size``."""
    return clusters(marks, short=short, season=season, start=start).size


def clusters(marks: Floats, *, short: bool = False, season: int | None = None, start: int = 0) -> Clusters:
    """Rows that weigh as one independent row, τ ≥ 1, by Geyer's (1992) initial monotone sequence.

    τ = max(1, −1 + 2 Σ Γ_m) with Γ_m = r_{2m} + r_{2m+1}, summed while positive and made non-increasing, lags below
    T/4. r_k is the autocorrelation of the marks with complete pairs only: [c_k / (pairs + k)] / [c_0 / observed].
    A constant row has τ = 1.

    The sequence may end before the marks of the same hour of yesterday are reached. With ``season`` the larger of this
    and the size that whole cycles show is taken: τ_c = V/(pq) times Geyer's factor for the cycles, V the variance over
    cycles of z = Σ(mark − mean at its place in the cycle)/√m, m the known marks of the cycle; a fixed pattern is no
    clustering. A cycle takes part when half of it is known, and ``FEWEST_CYCLES`` of them are needed.

    Args:
        marks: history and batch in one stretch, shape (S, T); NaN takes no part and is never closed up.
        short: the stretch is hardly longer than what is judged. The sample mean takes about τ/T off every
            autocorrelation (Kendall 1954), which is nothing in a long history but much of τ here: it is given back
            once, r → r + (1 − r) τ/T. (Cycles are always few: there it is always given back.)
        season: steps of the shortest cycle of the feed, if it has one.
        start: column from which on cycles have a mean of their own, so that a changed batch is not a long cluster.

    Returns:
        τ, and what is behind it.
    """
    S, T = marks.shape
    size, behind = np.ones(S), np.full(S, np.inf)
    if T < 2 or not _lags(T):
        return Clusters(size, behind)
    varied = np.flatnonzero(_varied(marks))
    block = max(1, BLOCK // T)
    for first in range(0, len(varied), block):
        rows = varied[first : first + block]
        size[rows] = _geyer(marks[rows], short=short)
        if season is not None and 1 < season <= T // FEWEST_CYCLES:
            of_cycles = _of_cycles(marks[rows], season, start)
            behind[rows] = np.where(of_cycles.size > size[rows], of_cycles.behind, np.inf)
            size[rows] = np.maximum(size[rows], of_cycles.size)
    return Clusters(size, behind)


def _lags(T: int) -> int:
    return ((T - 1) // 4 + 1) // 2 * 2


def _geyer(x: Floats, *, short: bool) -> Floats:
    r = _autocorrelation(x, _lags(x.shape[1]))
    size = _initial_monotone(r)
    return _initial_monotone(r + (1.0 - r) * (size / x.shape[1])[:, None]) if short else size


def _of_cycles(marks: Floats, season: int, start: int) -> Clusters:
    p = np.nanmean(marks, axis=1)
    folded = marks[:, marks.shape[1] % season :].reshape(len(marks), -1, season)
    seen = ~np.isnan(folded)
    x = np.where(seen, folded, 0.0)
    x = np.where(seen, x - x.sum(axis=1, keepdims=True) / np.maximum(seen.sum(axis=1, keepdims=True), 1), 0.0)
    m = seen.sum(axis=2)
    z = np.where(2 * m >= season, x.sum(axis=2) / np.sqrt(np.maximum(m, 1)), np.nan)
    cycles = np.count_nonzero(~np.isnan(z), axis=1)
    own = -((marks.shape[1] % season - start) // season) if start else 0
    z = np.hstack([_less_mean(z[:, :own]), _less_mean(z[:, own:])])
    size, behind = np.ones(len(marks)), np.full(len(marks), np.inf)
    rows = np.flatnonzero(cycles >= FEWEST_CYCLES)
    z, cycles, pq = z[rows], cycles[rows], (p * (1.0 - p))[rows]
    variance = np.nanvar(z, axis=1)
    told = variance > 1e-9 * pq  # a mere fixed pattern leaves rounding errors
    factor = _geyer(z[told], short=True)
    means = 2 if 0 < own < z.shape[1] else 1  # each takes about factor/cycles off the variance
    unbiased = variance[told] / np.maximum(1.0 - means * factor / cycles[told], 0.5)
    size[rows[told]], behind[rows[told]] = unbiased * factor / pq[told], cycles[told] / factor
    return Clusters(size, behind)


def _less_mean(z: Floats) -> Floats:
    known = np.maximum(np.count_nonzero(~np.isnan(z), axis=1), 1)
    less: Floats = z - (np.nansum(z, axis=1) / known)[:, None]
    return less


def _varied(marks: Floats) -> Bools:
    hits, seen = tally(marks)
    return (hits > 0) & (hits < seen)


def _autocorrelation(marks: Floats, lags: int) -> Floats:
    T = marks.shape[1]
    seen = ~np.isnan(marks)
    observed = seen.sum(axis=1, keepdims=True)
    centred = np.where(seen, marks, 0.0)
    centred = np.where(seen, centred - centred.sum(axis=1, keepdims=True) / observed, 0.0)
    length = _good_length(T + lags)
    products = _lagged(centred, lags, length)
    k = np.arange(lags)
    pairs = T - k if seen.all() else np.rint(_lagged(seen.astype(np.float64), lags, length))
    r: Floats = (products / (pairs + k)) / (products[:, :1] / observed)
    return r


def _lagged(x: Floats, lags: int, length: int) -> Floats:
    spectrum = np.fft.rfft(x, length, axis=1)
    products: Floats = np.fft.irfft(np.abs(spectrum) ** 2, length, axis=1)[:, :lags]
    return products


def _good_length(least: int) -> int:
    """The smallest 2^a times 1, 3, 5, 9 or 15 that is at least ``least`` (fast to transform)."""
    return min(m << max(0, (-(-least // m) - 1).bit_length()) for m in (1, 3, 5, 9, 15))


def _initial_monotone(r: Floats) -> Floats:
    pairs = r[:, 0::2] + r[:, 1::2]
    positive = np.logical_and.accumulate(pairs > 0, axis=1)
    falling = np.minimum.accumulate(pairs, axis=1)
    size: Floats = np.maximum(1.0, -1.0 + 2.0 * np.where(positive, falling, 0.0).sum(axis=1))
    return size
