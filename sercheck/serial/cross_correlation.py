"""Correlations between two sets of series at given lags; depends on numpy and ``serial`` only."""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np

from sercheck.serial.arrays import Floats, Ints
from sercheck.serial.centre import centred


def _partners(x: Floats, y: Floats, lag: int) -> tuple[Floats, Floats]:
    """Rows x_t and their partners y_{t-lag}."""
    size = max(x.shape[1] - abs(lag), 0)
    first, also = max(lag, 0), max(-lag, 0)
    return x[:, first : first + size], y[:, also : also + size]


def cross_correlation(x: Floats, y: Floats, lags: Sequence[int]) -> tuple[Floats, Ints]:
    """Correlation of x_t with y_{t-k} over the complete pairs, about the pairs' own means (Pearson).

    Args:
        x: shape (S, T), NaN is missing.
        y: the same shape.
        lags: k, steps that y lies before x; below 0 after.

    Returns:
        Correlations, NaN where fewer than three pairs are there or one side does not vary, and the number of pairs,
        both of shape (S, L).
    """
    r = np.full((len(x), len(lags)), np.nan)
    count = np.zeros(r.shape, dtype=np.int64)
    for column, lag in enumerate(lags):
        now, then = _partners(x, y, lag)
        both = ~(np.isnan(now) | np.isnan(then))
        count[:, column] = both.sum(axis=1)
        one, two = centred(np.where(both, now, np.nan)), centred(np.where(both, then, np.nan))
        product = np.einsum("ij,ij->i", one.values, two.values)
        powers = [np.sqrt(np.einsum("ij,ij->i", side.values, side.values)) for side in (one, two)]
        size = powers[0] * powers[1]
        able = one.varies & two.varies & (size > 0) & (count[:, column] > 2)
        r[:, column] = np.where(able, product / np.where(able, size, 1.0), np.nan)
    return r, count


class Cross(NamedTuple):
    """Robust t-values of cross-correlations, each of shape (S, L).

    Attributes:
        t: Σ e_t f_{t-k} / √Σ (e_t f_{t-k})², standard normal when the two are not related.
        unit: what one unit of t is worth as a correlation: t · unit = Σ ef/√(Σe² Σf²).
        pairs: complete pairs.
    """

    t: Floats
    unit: Floats
    pairs: Ints


def robust_cross(e: Floats, f: Floats, lags: Sequence[int]) -> Cross:
    """Relation between two sets of innovations whatever their variance does (Dalla, Giraitis and Phillips 2022).

    Args:
        e: innovations with mean 0, shape (S, T), NaN is missing.
        f: the same of the other series.
        lags: k, steps that f lies before e; below 0 after.
    """
    e, f = (np.ldexp(x, -_exponent(x)[:, None]) for x in (e, f))
    shape = (len(e), len(lags))
    t, unit = np.full(shape, np.nan), np.full(shape, np.nan)
    count = np.zeros(shape, dtype=np.int64)
    for column, lag in enumerate(lags):
        now, then = _partners(e, f, lag)
        both = ~(np.isnan(now) | np.isnan(then))
        now, then = np.where(both, now, 0.0), np.where(both, then, 0.0)
        product = now * then
        error = np.sqrt(np.einsum("ij,ij->i", product, product))
        size = np.sqrt(np.einsum("ij,ij->i", now, now)) * np.sqrt(np.einsum("ij,ij->i", then, then))
        able = error > 0
        t[:, column] = np.where(able, product.sum(axis=1) / np.where(able, error, 1.0), np.nan)
        unit[:, column] = np.where(able, error / np.where(able, size, 1.0), np.nan)
        count[:, column] = both.sum(axis=1)
    return Cross(t, unit, count)


def _exponent(x: Floats) -> np.ndarray:
    """Power of two near the largest value, which keeps fourth powers within doubles."""
    peak = np.max(np.abs(x), axis=1, where=~np.isnan(x), initial=0.0)
    return np.asarray(np.clip(np.frexp(peak)[1], -1021, 1022))
