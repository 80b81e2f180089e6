"""A model's one echo from farther back than its order reaches: a cycle that evolves; depends on ``serial`` only."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy import special

from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.autocovariances import good_length
from sercheck.serial.autoregression import (
    STEEPEST,
    Autoregression,
    burg,
    innovations,
    largest_order,
    root_beyond,
)
from sercheck.serial.sampling_error import Residuals

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


@dataclass(frozen=True)
class Alone:
    """What a window tells of itself.

    Attributes:
        model: of order p + L where there is an echo at lag L.
        residuals: its innovations, prepared.
        wanders: no level that the series returns to: a root of the near model beyond ``ROOT``, or an echo that
            does not fade; shape (S,).
    """

    model: Autoregression
    residuals: Residuals
    wanders: Bools


def alone(x: Floats, longest: int) -> Alone:
    """Model each series of ``x``, shape (S, T), for statistics at lags up to ``longest``, echoes included."""
    order = min(largest_order(x.shape[1]), NEAR)
    near = burg(x, max_order=order if longest == 1 else max(order, longest + 2))
    model, e, echo = with_far_lag(x, near)
    return Alone(model, Residuals(e, model.order, near.order + (echo > 0)), root_beyond(near, ROOT) | (echo > FOR_EVER))


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
    peak = np.max(np.abs(values), axis=1, initial=0.0)
    values *= np.ldexp(1.0, -np.clip(np.frexp(peak)[1], -1021, 1022))[:, None]  # squares stay within reach of doubles
    lags = np.arange(1, most + 1)
    size = good_length(steps + most)
    block = max(1, BLOCK // size)
    for first in range(0, series, block):
        part = slice(first, first + block)
        squares = values[part] ** 2
        products, scatter = _products(values[part], most, size), _products(squares, most, size)
        asked = lags > order[part, None]
        level = special.ndtri(1 - CHANCE / np.maximum(asked.sum(axis=1), 1))
        # what Fourier transforms leave of nothing is no scatter
        told = asked & (scatter > 1e-12 * squares.sum(axis=1, keepdims=True) ** 2 / steps)
        z = np.where(told, products / np.sqrt(np.where(told, scatter, 1.0)), -np.inf)
        best = np.argmax(z, axis=1)
        row = np.arange(len(best))
        far = np.flatnonzero(z[row, best] > level)
        lag[part][far] = best[far] + 1
        phi[part][far] = [
            2 * products[i, best[i]] / _both_ways(squares[i], seen[part][i], int(best[i]) + 1) for i in far.tolist()
        ]
    return lag, np.clip(phi, -STEEPEST, STEEPEST)


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
