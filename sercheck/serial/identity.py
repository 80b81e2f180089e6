"""Does a window go on the history of another series; depends on numpy and ``serial`` only."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from sercheck.serial.arrays import Floats, Ints
from sercheck.serial.autoregression import Autoregression, step_up
from sercheck.serial.batch_statistics import through_filter
from sercheck.serial.foreseen import Foreseen, power

ALIKE = 0.25
"""Mean squared distance of two profiles, in variances of what the profile leaves, below which they are the same: half
a standard deviation."""

BLOCK = 1 << 22
"""Pairs of series compared at a time."""


def likeliest_other(law: Foreseen) -> tuple[Ints, Floats]:
    """The other series whose foretold values are nearest to each window, and how well its history goes on with it.

    Returns:
        The other series, shape (S,), and the window's log-likelihood under its law less ln(S − 1) for the search,
        shape (S,); -inf for a single series.
    """
    S = len(law.window)
    if S < 2:
        return np.zeros(S, dtype=np.int64), np.full(S, -np.inf)
    usual = np.nan_to_num(law.usual())
    other = nearest_other(law.window, usual)
    seen = ~np.isnan(law.window)
    theirs = law.rows(other)
    e = theirs.innovations(law.window)
    total, count = power(e)
    n = seen.sum(axis=1).astype(np.float64)
    score = theirs.likelihood(total, count, n) + theirs.stretching(law.window) - np.log(max(S - 1, 1))
    apart = ((usual - usual[other]) ** 2).mean(axis=1)
    return other, np.where(apart > ALIKE * np.exp(law.scatters.centre), score, -np.inf)


def nearest_other(x: Floats, profiles: Floats) -> Ints:
    """The other series whose profile has the least sum of squared distances from each row, shape (S,).

    Args:
        x: shape (S, n); NaN is missing and is not compared.
        profiles: shape (S, n); a series with a NaN is nobody's nearest.
    """
    S = len(x)
    known = np.logical_not(np.isnan(profiles).any(axis=1))
    usual = np.where(known[:, None], profiles, 0.0)
    seen = ~np.isnan(x)
    values, weights, squares = np.where(seen, x, 0.0), seen.astype(np.float64), usual**2
    other = np.empty(S, dtype=np.int64)
    block = max(1, BLOCK // max(S, 1))
    for first in range(0, S, block):
        rows = slice(first, first + block)
        apart = weights[rows] @ squares.T - 2 * values[rows] @ usual.T
        apart[:, np.flatnonzero(~known)] = np.inf
        apart[np.arange(len(apart)), np.arange(first, first + len(apart))] = np.inf
        other[rows] = np.argmin(apart, axis=1)
    return other


class OwnOrOther(NamedTuple):
    """How windows compare with the profile of their own series and with the nearest other one's.

    Attributes:
        d: ln of the whitened residual sum of squares about the own profile over that about the other, shape (S, B).
        other: the other series, shape (S, B).
        power: mean square of the whitened residuals about the own profile, shape (S, B).
        values: how many whitened values there are, shape (S, B).
    """

    d: Floats
    other: Ints
    power: Floats
    values: Ints


def own_or_other(x: Floats, profile: Floats, model: Autoregression) -> OwnOrOther:
    """Compare every window with its own profile and with the best of all others.

    The nearest other is found among all at once by squared distances, everything whitened by one filter (the mean of
    the series' reflection coefficients), since a filter for each pair would cost a pass over the data for each series.
    Both sums of squares are then taken through the series' own filter, begun anew in each window: what lies before it
    may belong to another series.

    Args:
        x: windows of S series, shape (S, B, n), in one unit for all; NaN is missing.
        profile: what was expected of them, shape (S, B, n).
        model: autoregression of each series' residuals.
    """
    S, B, n = x.shape
    other = np.zeros((S, B), dtype=np.int64)
    common = step_up(model.reflection.mean(axis=0, keepdims=True))[0] if S else np.zeros(0)
    for b in range(B):
        other[:, b] = nearest_other(_filtered(x[:, b], common), _filtered(profile[:, b], common))
    rows = model.rows(np.repeat(np.arange(S), B))
    theirs = profile[other, np.arange(B)]
    told = ~np.isnan(x - profile - theirs)
    own, off = (
        through_filter(np.where(told, x - part, np.nan).reshape(S * B, n), rows).reshape(S, B, n)
        for part in (profile, theirs)
    )
    count = (~np.isnan(own)).sum(axis=2)
    sums = [np.where(np.isnan(part), 0.0, part**2).sum(axis=2) for part in (own, off)]
    with np.errstate(divide="ignore", invalid="ignore"):
        d = np.log(sums[0] / sums[1])
        mean = sums[0] / count
    return OwnOrOther(np.where(np.isfinite(d) & (S > 1), d, np.nan), other, mean, count)


def swap_size(profile: Floats, model: Autoregression, usual: Floats) -> Floats:
    """The d that a swap with the series of the most similar profile would give on average, shape (S,).

    ln(1 + Σ w(p - p')²/(count σ²)), w the series' own filter; 0 where profiles coincide.

    Args:
        profile: of the window, shape (S, n), in one unit for all.
        model: autoregression of each series' residuals.
        usual: mean square σ² of the whitened residuals, shape (S,).
    """
    if len(profile) < 2:
        return np.zeros(len(profile))
    common = step_up(model.reflection.mean(axis=0, keepdims=True))[0]
    white = _filtered(profile, common)
    apart = through_filter(profile - profile[nearest_other(white, white)], model)
    told = ~np.isnan(apart)
    with np.errstate(divide="ignore", invalid="ignore"):
        mean = np.where(told, apart, 0.0) ** 2
        return np.asarray(np.log1p(mean.sum(axis=1) / np.maximum(told.sum(axis=1), 1) / usual))


def _filtered(x: Floats, coefficients: Floats) -> Floats:
    """What one filter leaves of each row, without the first values that it needs."""
    order = len(coefficients)
    out = x[:, order:].copy()
    for j in range(1, order + 1):
        out -= coefficients[j - 1] * x[:, order - j : x.shape[1] - j]
    return out
