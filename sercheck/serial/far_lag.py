"""A model's one echo from farther back than its order reaches: a cycle that evolves; depends on ``serial`` only."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from scipy import special

from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.autocovariances import good_length
from sercheck.serial.autoregression import (
    STEEPEST,
    Autoregression,
    innovations,
)

ROOT = 0.98
"""Largest root of a model beyond which a series counts as not stationary (found by simulation)."""
CHANCE = 0.01
"""Share of series without an echo that get one (Bonferroni over the lags looked at; a choice)."""
FEWEST_REPEATS = 3
"""How often a lag must fit into the series to be looked at (a choice; 7 times in the simulations)."""
FARTHEST = 200
"""Longest lag looked at: so far ``sampling_error`` follows a model's autocorrelations."""
NEAR = 16
"""Highest order beside which an echo is looked for: a model that holds the cycle itself has roots near 1 for it (a
choice)."""
FOR_EVER = 0.9
"""Echo from which a cycle is as good as fixed (a choice; a healthy one at .6 is estimated below .8)."""
BLOCK = 1 << 16
"""Values transformed at a time."""
DIM, MARGIN = 1e-4, 0.1
"""Share of the scatter at lag 0 below which single precision is not trusted, and what a score may be wrong by there
(a hundred times what the transforms' errors make of a thousand steps)."""


def with_far_lag(x: Floats, model: Autoregression) -> tuple[Autoregression, Floats, Floats]:
    """Multiply the models by 1 - ΦB^L where their innovations still echo at one lag L beyond the order.

    An order of at most 10 log10 n does not reach a cycle of 24 steps in 168 rows, and a model that does not know an
    evolving cycle takes its autocorrelations for surer than they are. Σ e_t e_{t-k}/√Σ e_t² e_{t-k}² (Taylor 1984) is
    normal at every lag k without an echo; the lag where it is largest is taken when it passes the level ``CHANCE`` over
    the number of lags. Φ = 2 Σ e_t e_{t-L}/Σ (e_t² + e_{t-L}²), as Burg (1975) weighs both directions. Only positive
    echoes count: taking out a window's own cycle leaves negative ones.

    Args:
        x: the series that the models were fitted to, shape (S, T); NaN is missing.
        model: their models.

    Returns:
        The models, of order p + L where there is an echo, their innovations, shape (S, T), and Φ, shape (S,), 0 where
        there is none.
    """
    e = innovations(x, model)
    lag, phi = _echo(e, model.order)
    rows = np.flatnonzero(lag)
    if not len(rows):
        return model, e, phi
    order = model.order.copy()
    order[rows] += lag[rows]
    own = model.coefficients.shape[1]
    width = max(own, int(order.max()))
    coefficients, reflection = np.zeros((len(order), width)), np.zeros((len(order), width))
    coefficients[:, :own], reflection[:, :own] = model.coefficients, model.reflection
    for L in np.unique(lag[rows]):
        here = rows[lag[rows] == L]
        echo = phi[here, None]
        reach = min(own, width - int(L))  # coefficients beyond a model's order are 0
        coefficients[here, L : L + reach] -= echo * model.coefficients[here, :reach]
        coefficients[here, L - 1] += echo[:, 0]
    reflection[rows] = _step_down(coefficients[rows])
    variance = model.variance.copy()
    variance[rows] *= 1 - phi[rows] ** 2
    told = replace(model, order=order, coefficients=coefficients, reflection=reflection, variance=variance)
    e[rows] = innovations(x[rows], told.rows(rows))
    return told, e, phi


def _echo(e: Floats, order: Ints) -> tuple[Ints, Floats]:
    """The lag (0 for none) and the coefficient of each series' echo, shape (S,)."""
    series, steps = e.shape
    lag, phi = np.zeros(series, dtype=np.int64), np.zeros(series)
    most = min(steps // FEWEST_REPEATS, FARTHEST)
    if most < 1:
        return lag, phi
    seen = ~np.isnan(e)
    values = np.where(seen, e, 0.0)
    peak = np.maximum(values.max(axis=1, initial=0.0), -values.min(axis=1, initial=0.0))
    values *= np.ldexp(1.0, -np.clip(np.frexp(peak)[1], -1021, 1022))[:, None]  # squares stay within reach of doubles
    size = good_length(steps + most)
    block = max(1, BLOCK // size)
    asked = np.maximum(most - order, 1)
    level = special.ndtri(1 - CHANCE / asked)
    found = [np.zeros(0, dtype=np.int64)]
    for first in range(0, series, block):
        part = slice(first, first + block)
        found.append(first + _may_echo(values[part], order[part], level[part], most, size))
    rows = np.concatenate(found)
    lags = np.arange(1, most + 1)
    for first in range(0, len(rows), block):
        few = rows[first : first + block]
        x = values[few]
        squares = x**2
        products, scatter = _products(x, most, size), _products(squares, most, size)
        z = _scores(products, scatter, squares, lags > order[few, None])
        best = np.argmax(z, axis=1)
        row = np.arange(len(best))
        for i in np.flatnonzero(z[row, best] > level[few]).tolist():
            far = int(best[i]) + 1
            lag[few[i]] = far
            phi[few[i]] = 2 * products[i, best[i]] / _both_ways(squares[i], seen[few[i]], far)
    return lag, np.clip(phi, -STEEPEST, STEEPEST)


def _may_echo(x: Floats, order: Ints, level: Floats, most: int, size: int) -> Ints:
    """Rows whose echoes are worth computing in doubles.

    In single precision the transforms take a quarter of the time. Their products err by some 3e-7 of the power at lag
    0: a score is then good to 1e-3 where Σ e_t² e_{t-k}² is not below ``DIM`` of Σ e⁴.
    """
    single = x.astype(np.float32)
    sums = []
    for values in (single, single * single):
        spectrum = np.fft.rfft(values, size, axis=1)
        sums.append(np.fft.irfft(spectrum.real**2 + spectrum.imag**2, size, axis=1)[:, : most + 1])
    products, scatter = sums
    dim = scatter < DIM * scatter[:, :1]
    asked = np.arange(most + 1) > order[:, None]
    with np.errstate(invalid="ignore", divide="ignore"):
        high = products > (level[:, None] - MARGIN).astype(np.float32) * np.sqrt(np.maximum(scatter, 0))
    return np.flatnonzero(((dim | high) & asked).any(axis=1))


def _scores(products: Floats, scatter: Floats, squares: Floats, asked: Bools) -> Floats:
    """Σ e_t e_{t-k}/√Σ e_t² e_{t-k}²; -inf where there is nothing to scatter."""
    # what Fourier transforms leave of nothing is no scatter
    told = asked & (scatter > 1e-12 * squares.sum(axis=1, keepdims=True) ** 2 / squares.shape[1])
    return np.where(told, products / np.sqrt(np.where(told, scatter, 1.0)), -np.inf)


def _both_ways(squares: Floats, seen: Bools, lag: int) -> float:
    pair = seen[lag:] & seen[:-lag]
    return float(np.sum(squares[lag:][pair]) + np.sum(squares[:-lag][pair]))


def _products(x: Floats, most: int, size: int) -> Floats:
    """Σ_t x_t x_{t-k} for k = 1 .. most."""
    spectrum = np.fft.rfft(x, size, axis=1)
    products: Floats = np.fft.irfft(np.abs(spectrum) ** 2, size, axis=1)[:, 1 : most + 1]
    return products


def _step_down(coefficients: Floats) -> Floats:
    """Reflection coefficients of stationary models, shape (S, P) (the step-up recursion backwards)."""
    a = coefficients.copy()
    reflection = np.zeros_like(a)
    for m in range(a.shape[1], 0, -1):
        k = np.clip(a[:, m - 1], -STEEPEST, STEEPEST)  # rounding only: a stationary model's are inside
        reflection[:, m - 1] = k
        a[:, : m - 1] = (a[:, : m - 1] + k[:, None] * a[:, : m - 1][:, ::-1]) / (1 - k**2)[:, None]
    return reflection
