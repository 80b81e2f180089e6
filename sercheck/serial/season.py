"""Seasonal profiles of many series at once; depends on numpy and ``serial`` only."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from sercheck.serial.arrays import Bools, Floats, Ints, as_series
from sercheck.serial.centre import centred

FAR_OFF = 5.0
"""Robust standard deviations beyond which a cycle is broken: of the logarithm of a cycle's mean squared distance from
the median profile. A healthy cycle is left out about once in 10^5 even for strongly correlated noise (simulated)."""
NARROWEST = 0.1
"""Least standard deviation granted to that logarithm, so that nearly equal cycles do not break each other."""


class Profile(NamedTuple):
    """What history's cycles have in common.

    Attributes:
        means: mean at each place of the cycle, shape (S, length); NaN where a place was never observed.
        counts: values behind each mean, shape (S, length).
        kept: values that taught, shape (S, T); False for missing ones and for those of broken cycles.
    """

    means: Floats
    counts: Ints
    kept: Bools


def phase_means(x: Floats, phase: Ints, length: int) -> tuple[Floats, Ints]:
    """Mean of the observed values at each place of the cycle.

    Args:
        x: shape (S, T), NaN is missing.
        phase: place in the cycle of each step, 0 .. length - 1, shape (T,).
        length: steps in one cycle.

    Returns:
        Means (NaN where a phase was never observed) and counts, both of shape (S, length).
    """
    seen = ~np.isnan(x)
    counts = _phase_sums(seen, phase, length).astype(np.int64)
    sums = _phase_sums(x if seen.all() else np.where(seen, x, 0.0), phase, length)
    return np.divide(sums, counts, out=np.full(sums.shape, np.nan), where=counts > 0), counts


def _phase_sums(x: Floats | Bools, phase: Ints, length: int) -> Floats:
    """Sum at each place of the cycle, shape (S, length); by folding where no step is skipped or doubled."""
    sums = np.zeros((x.shape[0], length))
    steps = x.shape[1]
    if not steps:
        return sums
    first = int(phase[0])
    if np.array_equal(phase, (first + np.arange(steps)) % length):
        begin = min((length - first) % length, steps)
        whole = (steps - begin) // length
        end = begin + whole * length
        sums[:, first : first + begin] += x[:, :begin]
        sums += x[:, begin:end].reshape(len(x), whole, length).sum(axis=1)
        sums[:, : steps - end] += x[:, end:]
        return sums
    order = np.argsort(phase, kind="stable")
    starts = np.flatnonzero(np.diff(phase[order], prepend=-1))
    sums[:, phase[order][starts]] = np.add.reduceat(x[:, order], starts, axis=1, dtype=np.float64)
    return sums


def cycle_numbers(phase: Ints) -> Ints:
    """Number of the cycle that each step lies in, from 0; a cycle ends where the phase falls back, shape (T,)."""
    return np.concatenate([[0], np.cumsum(np.diff(phase) < 0)]).astype(np.int64)[: len(phase)]


def robust_phase_means(x: Floats, phase: Ints, length: int, cycle: Ints | None = None) -> Profile:
    """Phase means of the cycles that are not broken (a day stuck at zero, a day's rows shuffled).

    A cycle is broken when the logarithm of its mean squared distance from the median profile lies ``FAR_OFF`` robust
    standard deviations (1.4826 times the median absolute deviation, Hampel 1974) above the median of all cycles.
    The others are averaged, which keeps the efficiency of the mean: the median's variance is π/2 times as large.

    Args:
        x: shape (S, T), NaN is missing.
        phase: place in the cycle of each step, shape (T,).
        length: steps in one cycle.
        cycle: number of the stretch that is kept or left out as a whole, shape (T,) (default: the cycle itself; the
            day, when the profile is a week's).
    """
    own = cycle_numbers(phase)
    stretch = own if cycle is None else cycle
    off = _distance(x, _median_profile(x, phase, length, own)[:, phase], stretch)
    centre = median(off)[:, None]
    spread = np.maximum(1.4826 * median(np.abs(off - centre))[:, None], NARROWEST)
    with np.errstate(invalid="ignore"):
        broken = off > centre + FAR_OFF * spread
    kept = ~np.isnan(x)
    if broken.any():
        kept &= ~broken[:, stretch]
        x = np.where(kept, x, np.nan)
    means, counts = phase_means(x, phase, length)
    return Profile(means, counts, kept)


def _median_profile(x: Floats, phase: Ints, length: int, cycle: Ints) -> Floats:
    cube = np.full((x.shape[0], length, int(cycle[-1]) + 1 if len(cycle) else 0), np.nan)
    cube[:, phase, cycle] = x
    return median(cube)


def _distance(x: Floats, profile: Floats, stretch: Ints) -> Floats:
    """Logarithm of the mean squared distance of each stretch from the profile, NaN for an empty one, shape (S, C)."""
    apart = x - profile
    seen = ~np.isnan(apart)
    peak = np.max(np.abs(apart), axis=1, where=seen, initial=np.finfo(np.float64).tiny)[:, None]
    power = (np.where(seen, apart, 0.0) / peak) ** 2  # no square of a double overflows
    starts = np.flatnonzero(np.diff(stretch, prepend=-1))
    if not len(starts):
        return np.full((x.shape[0], 0), np.nan)
    count = np.add.reduceat(seen, starts, axis=1, dtype=np.float64)
    total = np.maximum(power.sum(axis=1, keepdims=True), np.finfo(np.float64).tiny)
    share = np.add.reduceat(power, starts, axis=1) / total
    with np.errstate(divide="ignore", invalid="ignore"):
        # a millionth of the whole is nothing: exact agreement must not make the logarithm infinite
        return np.asarray(np.log(share * seen.sum(axis=1, keepdims=True) / count + 1e-6))


def median(x: Floats) -> Floats:
    """Median of the observed values along the last axis; NaN where there is none."""
    if not x.shape[-1]:
        return np.full(x.shape[:-1], np.nan)
    ordered = np.sort(x, axis=-1)
    count = np.sum(~np.isnan(x), axis=-1)
    low = np.maximum((count - 1) // 2, 0)[..., None]
    high = np.minimum(count // 2, x.shape[-1] - 1)[..., None]
    below, above = (np.take_along_axis(ordered, place, axis=-1)[..., 0] for place in (low, high))
    # Halved before they are added: two of the largest numbers have no sum.
    return np.where(count > 0, np.where(below == above, below, below / 2 + above / 2), np.nan)


def detrended(x: object) -> Floats:
    """What is left of each series after its least-squares line in time; missing values stay missing.

    Args:
        x: one series or (S, T); NaN is missing.

    Returns:
        Residuals, shape (S, T), with mean 0 over the observed values; all 0 for a series with one value.
    """
    data = centred(x)
    count = np.maximum(data.n, 1)[:, None]
    clock = np.where(data.seen, np.arange(data.seen.shape[1], dtype=np.float64), 0.0)
    clock -= np.where(data.seen, clock.sum(axis=1, keepdims=True) / count, 0.0)
    moment = np.einsum("ij,ij->i", clock, clock)
    slope = np.einsum("ij,ij->i", clock, data.values) / np.where(moment > 0, moment, 1.0)
    rest = (data.values - slope[:, None] * clock) * data.scale[:, None]
    return np.where(data.seen, rest, np.nan)


def without_trend_and_season(x: Floats, phase: Ints, length: int) -> Floats:
    """What a line in time and phase means, fitted together, leave of each series, shape (S, T).

    Phase means are taken out of the series and of the clock, then the one's line on the other (Frisch and Waugh 1933).

    Args:
        x: shape (S, T), NaN is missing and stays missing.
        phase: place in the cycle of each step, shape (T,).
        length: steps in one cycle.
    """
    clock = np.where(np.isnan(x), np.nan, np.arange(x.shape[1], dtype=np.float64))
    left, run = _less_phase_means(x, phase, length), _less_phase_means(clock, phase, length)
    moment = np.nansum(run**2, axis=1, keepdims=True)
    return np.asarray(left - np.nansum(left * run, axis=1, keepdims=True) / np.where(moment > 0, moment, 1.0) * run)


def seasonal_share(x: object, length: int, *, given_trend: bool = False) -> Floats:
    """Share of a series' variance that phase means explain (the R² of a regression on the place in the cycle).

    Args:
        x: one series or (S, T), its first step at phase 0; NaN is missing.
        length: steps in one cycle.
        given_trend: the share of what a straight line in time leaves, both fitted together.

    Returns:
        Shape (S,), NaN for a series that does not vary.
    """
    x = as_series(x)
    phase = np.arange(x.shape[1]) % length
    if given_trend:
        before, after = detrended(x), without_trend_and_season(x, phase, length)
    else:
        before, after = _less_mean(x), _less_phase_means(x, phase, length)
    total = np.nansum(before**2, axis=1)
    return np.where(total > 0, 1 - np.nansum(after**2, axis=1) / np.where(total > 0, total, 1.0), np.nan)


def _less_mean(x: Floats) -> Floats:
    count = np.maximum(np.sum(~np.isnan(x), axis=1, keepdims=True), 1)
    return np.asarray(x - np.nansum(x, axis=1, keepdims=True) / count)


def _less_phase_means(x: Floats, phase: Ints, length: int) -> Floats:
    return np.asarray(x - phase_means(x, phase, length)[0][:, phase])


def decomposed(x: object, length: int) -> tuple[Floats, Floats]:
    """Classical additive decomposition by a centred moving average over one cycle (Persons 1919; Kendall 1976).

    Args:
        x: one series or (S, T), its first step at phase 0; NaN is missing and leaves the average around it missing.
        length: steps in one cycle, at least 2.

    Returns:
        The trend, shape (S, T), NaN at the ends, and the seasonal figure, shape (S, length), with mean 0.
    """
    x = as_series(x)
    weights = np.ones(length) if length % 2 else np.r_[0.5, np.ones(length - 1), 0.5]
    reach = len(weights) // 2
    trend = np.full_like(x, np.nan)
    steps = x.shape[1]
    if steps > 2 * reach:
        inner = np.zeros((x.shape[0], steps - 2 * reach))
        for place, weight in enumerate(weights):
            inner += weight * x[:, place : place + inner.shape[1]]
        trend[:, reach : steps - reach] = inner / length
    figure, _ = phase_means(x - trend, np.arange(steps) % length, length)
    return trend, figure - np.mean(figure, axis=1, keepdims=True)
