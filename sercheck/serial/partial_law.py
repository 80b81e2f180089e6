"""The law of a partial autocorrelation by Burg's method, under a bound; depends on numpy and ``serial`` only."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from sercheck.serial.arrays import Floats, Ints
from sercheck.serial.autocovariances import good_length
from sercheck.serial.autoregression import (
    Autoregression,
    model_autocorrelation,
    step_up,
)
from sercheck.serial.centre import centred
from sercheck.serial.own_models import OwnModels
from sercheck.serial.reflections import Reflected, blocks
from sercheck.serial.sampling_error import autocorrelation_bias, bartlett_weights, mean_bias, model_lags

FEW_LAGS = 4
"""Lags up to which sums cost less than Fourier transforms (measured)."""
BLOCK = 1 << 15
"""Values worked on at a time: the arrays of the recursion stay in a second-level cache."""


@dataclass(frozen=True)
class Reflections:
    """Burg's reflection coefficients at L lags; arrays of shape (S, L).

    Attributes:
        k: estimates of the partial autocorrelations; NaN for a constant series or without complete stretches.
        rows: complete stretches plus lag: the number of rows for a complete series.
    """

    k: Floats
    rows: Ints


@dataclass(frozen=True)
class PartialLaw:
    """(atanh k - centre)/scale is standard normal; ``error`` is the standard error of k; arrays of shape (S, L)."""

    centre: Floats
    scale: Floats
    error: Floats


def reflections(x: object, lags: Ints, known: Reflected | None = None) -> Reflections:
    """Burg's recursion (Burg 1975) up to the largest lag, nothing closed up over gaps.

    With f and b the forward and backward prediction errors of order j - 1, k_j = 2 Σ f_t b_{t-1}/Σ (f_t² + b_{t-1}²).

    Args:
        x: one series or (S, T); NaN is missing.
        lags: from 1, shape (L,).
        known: what is known of complete series already; the recursion goes over the others.
    """
    data = centred(x)
    series, steps = data.values.shape
    k = np.full((series, len(lags)), np.nan)
    rows = np.zeros(k.shape, dtype=np.int64)
    left = np.arange(series)
    if known is not None and lags.max(initial=0) <= known.k.shape[1]:
        k[known.easy], rows[known.easy] = known.k[known.easy][:, lags - 1], steps
        left = np.flatnonzero(~known.easy)
    block = max(1, BLOCK // max(steps, 1))
    for part in blocks(left, block):
        f = b = data.values[part]
        seen = whole = data.seen[part]
        for order in range(1, min(int(lags.max(initial=0)), steps - 1) + 1):
            whole = whole[:, 1:] & seen[:, : steps - order]
            ahead, behind = f[:, 1:] * whole, b[:, :-1] * whole
            power = np.einsum("ij,ij->i", ahead, ahead) + np.einsum("ij,ij->i", behind, behind)
            step = 2 * np.einsum("ij,ij->i", ahead, behind) / np.where(power > 0, power, np.inf)
            here = np.flatnonzero(lags == order)
            k[part[:, None], here] = step[:, None]
            rows[part[:, None], here] = np.where(power > 0, whole.sum(axis=1) + order, 0)[:, None]
            f, b = ahead - step[:, None] * behind, behind - step[:, None] * ahead
    return Reflections(np.where(data.varies[:, None] & (rows > 0), k, np.nan), rows)


class PartialLaws:
    """Laws of the reflection coefficients of a block of series; its models are fitted once.

    Args:
        x: the series, shape (S, T), NaN is missing.
        lags: from 1, shape (L,).
        cycle: steps of the cycle whose means, of these very rows, were taken out; 1 for the mean alone.
        models: those of ``x``, where other statistics need them too.
    """

    def __init__(self, x: Floats, lags: Ints, cycle: int = 1, models: OwnModels | None = None) -> None:
        self.lags, self.cycle = lags, cycle
        models = OwnModels(x) if models is None else models
        longest = int(lags.max(initial=1))
        self.estimate = reflections(models.data, lags, models.reflected(longest))
        own = models.alone(longest)
        self.model, self.residuals, self.wanders = own.model, own.residuals, own.wanders

    def under(self, b: float) -> PartialLaw:
        """The law of each coefficient when the true partial autocorrelation is exactly ``b``, inside (-1, 1).

        The model of each series gets b as its reflection coefficient at the lag. To first order the estimate moves by
        Σ_j W_j times the innovations' autocorrelation at j, W = Σ_i (∂k/∂ρ_i) W^(i) of Bartlett's (1946) weights, which
        gives the linear variance V (1 - b² over n when the order is the lag, Quenouille 1949; more or less when the
        true order is higher), and the robust V_h (after Taylor 1984). The bias β is -(a + (k + 2) b)/n, a = 1 at odd
        and 2 at even lags k, for a process whose order is the lag (Shaman and Stine 1988), plus Σ_i (∂k/∂ρ_i) times the
        difference that the orders beyond make to the bias of r_i (Kendall 1954; Marriott and Pope 1954). With
        s² = max(V, V_h) and g = 1 - b², [atanh k - atanh b - β/g - b s²/g²] g/s is standard normal. Where a cycle's own
        means were taken out, rows and β change as in ``lag_law.bound_law``.
        """
        g = 1 - b * b
        s2, bias = np.empty(self.estimate.k.shape), np.empty(self.estimate.k.shape)
        for column, lag in enumerate(self.lags.tolist()):
            rows = np.maximum(self.estimate.rows[:, column], 1)
            weights, beyond, slope, rho = partial_expansion(self.model, lag, b)
            linear = np.einsum("ij,ij->i", weights, weights) / rows
            s2[:, column] = np.fmax(linear, self.residuals.robust_variance(weights, rows, lag))
            bias[:, column] = (beyond - (1 if lag % 2 else 2) - (lag + 2) * b) / rows
            if self.cycle > 1:
                share = rows / np.maximum(rows - self.cycle, 1)
                mean, cycle = (_means(rho, slope, each) / rows for each in (1, self.cycle))
                s2[:, column] *= share
                bias[:, column] = (bias[:, column] - mean) * share + cycle
        s = np.sqrt(s2)
        return PartialLaw(np.arctanh(b) + bias / g + b * s2 / g**2, s / g, s)


def partial_expansion(model: Autoregression, lag: int, b: float) -> tuple[Floats, Floats, Floats, Floats]:
    """First-order expansion of the partial autocorrelation at ``lag`` where its true value is ``b``.

    The derivatives are those of the last component of R⁻¹ρ: with φ the coefficients of order k and
    ψ = R⁻¹ e_k = (-a_{k-1}, .., -a_1, 1)/v of order k - 1, ∂k/∂ρ_i = ψ_i - Σ_l φ_l (ψ_{l+i} + ψ_{l-i}).

    Returns:
        Weights of the innovations' autocorrelations, shape (S, J), n times the bias that the model's orders beyond
        the lag add, shape (S,), the derivatives ∂k/∂ρ_i, shape (S, lag), and the autocorrelations, shape (S, L + 1).
    """
    series, width = model.reflection.shape
    reflection = np.zeros((series, max(width, lag)))
    below_one = np.nextafter(1.0, 0.0)  # a series that is foretold without error leaves no variance to divide by
    reflection[:, :width] = np.clip(model.reflection, -below_one, below_one)
    reflection[:, lag - 1] = b
    order = np.maximum(model.order, lag)
    phi = step_up(reflection[:, :lag])
    psi = np.ones((series, lag))
    psi[:, :-1] = -step_up(reflection[:, : lag - 1])[:, ::-1]
    psi /= np.prod(1 - reflection[:, : lag - 1] ** 2, axis=1)[:, None]
    changed = replace(model, order=order, coefficients=step_up(reflection), reflection=reflection)
    short = replace(model, order=np.minimum(order, lag), coefficients=phi, reflection=reflection[:, :lag])
    rho, rho_short = (model_autocorrelation(each, model_lags(lag)) for each in (changed, short))
    slope = np.empty((series, lag))
    for i in range(1, lag + 1):
        slope[:, i - 1] = psi[:, i - 1] - np.einsum("ij,ij->i", phi[:, : lag - i], psi[:, i:])
        slope[:, i - 1] -= np.einsum("ij,ij->i", phi[:, i:], psi[:, : lag - i])
    beyond = np.einsum("ij,ij->i", slope, _biases(rho, lag) - _biases(rho_short, lag))
    return _combined_weights(rho, slope), beyond, slope, rho


def _means(rho: Floats, slope: Floats, cycle: int) -> Floats:
    """The means' part of n times the bias, shape (S,)."""
    parts = [slope[:, i] * mean_bias(rho, i + 1, cycle) for i in range(slope.shape[1])]
    return np.asarray(np.sum(parts, axis=0))


def _combined_weights(rho: Floats, slope: Floats) -> Floats:
    """Σ_i slope_i W^(i), W^(i) Bartlett's weights at lag i: a convolution of ρ with the slopes, both symmetric."""
    longest, lag = rho.shape[1] - 1, slope.shape[1]
    if lag <= FEW_LAGS:
        weights = np.zeros((len(slope), longest + lag))
        for i in range(1, lag + 1):
            weights[:, : longest + i] += slope[:, i - 1 : i] * bartlett_weights(rho, i)
        return weights
    around = np.concatenate([np.zeros((len(slope), 1)), slope], axis=1)
    size = good_length(2 * (longest + lag) + 1)
    both = np.fft.irfft(_symmetric(rho, size) * _symmetric(around, size), size)[:, 1 : longest + lag + 1]
    both[:, :longest] -= 2 * rho[:, 1:] * np.einsum("ij,ij->i", slope, rho[:, 1 : lag + 1])[:, None]
    return both


def _biases(rho: Floats, lag: int) -> Floats:
    """``autocorrelation_bias`` at the lags 1 .. lag, shape (S, lag)."""
    if lag <= FEW_LAGS:
        return np.stack([autocorrelation_bias(rho, i) for i in range(1, lag + 1)], axis=1)
    size = good_length(2 * rho.shape[1] + lag)
    shifted = np.fft.irfft(_symmetric(rho, size) ** 2, size)
    at = rho[:, 1 : lag + 1]
    total = 2 * rho.sum(axis=1, keepdims=True) - 1
    biases: Floats = -(
        np.arange(1, lag + 1) * at + (1 - at) * total + 2 * (shifted[:, 1 : lag + 1] - at * shifted[:, :1])
    )
    return biases


def _symmetric(half: Floats, size: int) -> Floats:
    """Transform of a symmetric sequence given by its half from 0 on: real."""
    whole = np.zeros((len(half), size))
    whole[:, : half.shape[1]] = half
    whole[:, size - half.shape[1] + 1 :] = half[:, :0:-1]
    return np.fft.rfft(whole).real
