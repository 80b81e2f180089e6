"""How much a mean, a slope or a bridge scatters under serial dependence; depends on numpy and ``serial`` only.

Two sources. History: its cosine powers Λ_j², weighted by how strongly the statistic of a batch answers to each
frequency, which is the variance at the batch's own time scale and survives long memory. The batch alone: an
autoregressive long-run variance beside the mean of the first cosine powers (short memory is then assumed).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np

from sercheck.serial.arrays import Floats
from sercheck.serial.autoregression import Autoregression, burg, largest_order
from sercheck.serial.centre import centred

BLOCK = 1 << 20
"""Values transformed at once (8 MB), so that memory stays flat."""
COSINES = 0.41
"""Cosines of the short-memory variance: .41 n^(2/3) (Lazarus, Lewis, Stock and Watson 2018)."""


@dataclass(frozen=True)
class CosineSpectrum:
    """Cosine powers of S series over T steps.

    Attributes:
        power: Λ_j² at the frequencies πj/T, j = 1 .. T - 1, shape (S, T - 1), missing values counting as the mean.
        mean: mean of the observed values, shape (S,).
        variance: their variance with divisor n, shape (S,).
        n: observed values, shape (S,).
        steps: T.
    """

    power: Floats
    mean: Floats
    variance: Floats
    n: Floats
    steps: int

    def weighted(self, weights: Floats) -> Floats:
        """Weighted mean of the powers, an estimate of the spectrum (2π f) there, shape (S,).

        Missing values thin the powers out. The share f of observed values is put right both for gaps that come in
        stretches, P/f, and for gaps at random, (P - f(1-f)s²)/f²; the larger of the two counts.

        Args:
            weights: not negative, shape (S, T - 1) or (1, T - 1).
        """
        total = weights.sum(axis=1)
        # not by @, whose last digit depends on how many series are in the block
        shared = len(weights) == 1
        power = np.einsum("ij,j->i", self.power, weights[0]) if shared else np.einsum("ij,ij->i", self.power, weights)
        with np.errstate(divide="ignore", invalid="ignore"):
            power = power / total
            seen = self.n / self.steps
            at_random = (power - seen * (1 - seen) * self.variance) / seen**2
            return np.asarray(np.maximum(power / seen, at_random), dtype=np.float64)


def cosine_spectrum(x: object) -> CosineSpectrum:
    """Λ_j = √(2/T) Σ_t (x_t - x̄) cos(πj (t - ½)/T), squared, of each series.

    Cosines at these frequencies need no taper and have no leakage from a trend's ends (Müller 2007).

    Args:
        x: one series or (S, T); NaN is missing.
    """
    data = centred(x)
    series, steps = data.values.shape
    power = np.empty((series, max(steps - 1, 0)))
    block = max(1, BLOCK // max(steps, 1))
    unit = data.scale**2
    for first in range(0, series, block):
        rows = slice(first, first + block)
        power[rows] = _cosines(data.values[rows]) ** 2
    power *= unit[:, None]
    n = data.n.astype(np.float64)
    with np.errstate(divide="ignore", invalid="ignore"):
        variance = np.einsum("ij,ij->i", data.values, data.values) / n * unit
    return CosineSpectrum(power, data.mean, variance, n, steps)


def _cosines(x: Floats) -> Floats:
    """The cosine transform by one real Fourier transform of the reordered series (Makhoul 1980)."""
    steps = x.shape[1]
    if steps < 2:
        return np.empty((len(x), 0))
    order = np.concatenate([np.arange(0, steps, 2), np.arange(1, steps, 2)[::-1]])
    half = np.fft.rfft(x[:, order], axis=1)
    j = np.arange(half.shape[1])
    turned = half * np.exp(-0.5j * np.pi * j / steps)
    out = np.empty((len(x), steps))
    out[:, : half.shape[1]] = turned.real
    out[:, half.shape[1] :] = -turned.imag[:, (steps - half.shape[1]) : 0 : -1]
    return np.asarray(out[:, 1:] * np.sqrt(2 / steps), dtype=np.float64)


def contrast_weights(contrast: Floats, steps: int) -> Floats:
    """w_j = |Σ_t c_t exp(iπjt/T)|², j = 1 .. T - 1: how strongly Σ c_t x_t answers to each frequency.

    Args:
        contrast: shape (S, n) or (1, n).
        steps: T, the length of the history whose powers are weighted, at least n.
    """
    out = np.empty((len(contrast), max(steps - 1, 0)))
    if steps < 2:
        return out
    block = max(1, BLOCK // (2 * steps))
    for first in range(0, len(contrast), block):
        rows = slice(first, first + block)
        turned = np.fft.rfft(contrast[rows], 2 * steps, axis=1)[:, 1:steps]
        out[rows] = turned.real**2 + turned.imag**2
    return out


@cache
def bridge_weights(n: int, steps: int) -> Floats:
    """w_j = Σ_k |C_k(ω_j)|², C_k(t) = 1(t ≤ k) - k/n: how a bridge of cumulative sums answers, shape (1, T - 1)."""
    turn = np.exp(1j * np.pi * np.arange(1, steps) / steps)
    whole = (turn ** (n + 1) - turn) / (turn - 1)
    part, step, total = np.zeros_like(turn), np.ones_like(turn), np.zeros(len(turn))
    for k in range(1, n):
        step = step * turn
        part = part + step
        at = part - k / n * whole
        total += at.real**2 + at.imag**2
    return total[None, :]


def mean_contrast(seen: Floats) -> Floats:
    """The contrast whose sum is the mean of the observed values: one row when all series are complete."""
    if seen.all():
        return np.full((1, seen.shape[1]), 1 / seen.shape[1])
    return np.asarray(seen / np.maximum(seen.sum(axis=1, keepdims=True), 1), dtype=np.float64)


def contrast_variance(spectrum: CosineSpectrum, contrast: Floats) -> tuple[Floats, Floats]:
    """Variance of Σ c_t x_t in a batch like history, and its degrees of freedom, both of shape (S,).

    V = Σ c² Σ w_j Λ_j² / Σ w_j, df = (Σ w)² / Σ w². For the mean of n successive values this is overlapping batch
    means (Meketon and Schmeiser 1984) in its spectral form (Welch 1987), w_j = [sin(nω_j/2) / (n sin(ω_j/2))]². A
    missing value has c_t = 0, so that its gap is in the answer to each frequency.
    """
    weights = contrast_weights(contrast, spectrum.steps)
    with np.errstate(divide="ignore", invalid="ignore"):
        df = weights.sum(axis=1) ** 2 / np.einsum("ij,ij->i", weights, weights)
    variance = np.einsum("ij,ij->i", contrast, contrast) * spectrum.weighted(weights)
    return variance, np.broadcast_to(df, variance.shape)


@dataclass(frozen=True)
class LongRun:
    """Long-run variance (2π times the spectrum at frequency 0) of each series, all of shape (S,).

    Attributes:
        variance: in the squared unit of the series.
        df: degrees of freedom.
        memory: Σφ of the fitted autoregression; NaN where none was fitted.
    """

    variance: Floats
    df: Floats
    memory: Floats


def model_long_run(model: Autoregression) -> Floats:
    """σ²/(1 - Σφ)² of fitted autoregressions (Berk 1974), shape (S,)."""
    return np.asarray(model.variance / np.prod(1 - model.reflection, axis=1) ** 2, dtype=np.float64)


def longest_order(steps: int) -> int:
    """Highest order of the autoregressions that long-run variances are taken from: min(10 log10 n, n/6)."""
    return min(largest_order(steps), steps // 6)


def autoregressive_long_run(x: object, trend: bool = False) -> LongRun:
    """Long-run variance by Burg's autoregression, corrected for its bias.

    σ²/(1 - S - b)² · n/(n - p - 1), S = Σφ (Berk 1974), order p ≤ min(10 log10 n, n/6). With the models of lower order
    from the same recursion, q = σ_p² Σ_{m<p} (1 - S_m)²/σ_m² and b = (q/(1-S) + 2S)/n is the bias of S to order 1/n
    (0 for p = 0); 1 - S - b is held within .4 and 1.5 times 1 - S. Degrees of freedom n/(1 + 2q/(1-S)²)
    (Satterthwaite 1946).

    Args:
        x: one series or (S, T); NaN is missing.
        trend: the series are residuals of a straight line: b = (2q/(1-S) + 2S)/n, floor .3, n/(n - p - 2).

    Returns:
        NaN for a series that is constant or has no two successive values.
    """
    return corrected_long_run(burg(x, max_order=longest_order(np.atleast_2d(np.asarray(x)).shape[-1])), trend)


def corrected_long_run(model: Autoregression, trend: bool = False) -> LongRun:
    """``autoregressive_long_run`` of fitted models."""
    n = model.n.astype(np.float64)
    left = np.cumprod(1 - model.reflection, axis=1)
    shrink = np.cumprod(1 - model.reflection**2, axis=1)
    ones = np.ones((len(n), 1))
    left, shrink = np.concatenate([ones, left], axis=1), np.concatenate([ones, shrink], axis=1)
    lower = np.arange(left.shape[1]) < model.order[:, None]
    q = shrink[:, -1] * np.sum(np.where(lower, left**2 / shrink, 0.0), axis=1)
    rest = left[:, -1]
    lost = 2 if trend else 1
    with np.errstate(divide="ignore", invalid="ignore"):
        bias = np.where(model.order > 0, (lost * q / rest + 2 * (1 - rest)) / n, 0.0)
        held = np.clip(rest - bias, (0.3 if trend else 0.4) * rest, 1.5 * rest)
        spared = n - model.order - lost
        variance: Floats = np.where(spared > 0, model.variance / held**2 * n / spared, np.nan)
        df = np.asarray(n / (1 + 2 * q / rest**2), dtype=np.float64)
    return LongRun(variance, df, np.asarray(1.0 - rest, dtype=np.float64))


def cosine_count(n: int) -> int:
    """Cosines of the short-memory variance, round(.41 n^(2/3)), at least 1."""
    return max(1, round(COSINES * float(np.cbrt(n)) ** 2))


def cosine_long_run(x: object) -> LongRun:
    """Long-run variance as the mean of the first B cosine powers, t on B degrees of freedom.

    B = round(.41 n^(2/3)) (Müller 2007; Lazarus, Lewis, Stock and Watson 2018).
    """
    spectrum = cosine_spectrum(x)
    count = cosine_count(spectrum.steps)
    weights = np.zeros((1, max(spectrum.steps - 1, 0)))
    weights[:, :count] = 1.0
    series = len(spectrum.n)
    return LongRun(spectrum.weighted(weights), np.full(series, float(count)), np.full(series, np.nan))


def trend_cosine_long_run(residuals: Floats) -> LongRun:
    """Long-run variance of a straight line's residuals from B cosines made orthogonal to level and line (Sun 2011).

    Args:
        residuals: least-squares residuals of [1, t], shape (S, T); NaN counts as 0 and thins the mean out.
    """
    steps = residuals.shape[1]
    count = cosine_count(steps)
    basis = _orthogonal_cosines(steps, count)
    seen = ~np.isnan(residuals)
    coordinates = np.where(seen, residuals, 0.0) @ basis
    with np.errstate(divide="ignore", invalid="ignore"):
        variance = np.einsum("ij,ij->i", coordinates, coordinates) / count * (steps / seen.sum(axis=1))
    series = len(residuals)
    return LongRun(variance, np.full(series, float(count)), np.full(series, np.nan))


@cache
def _orthogonal_cosines(steps: int, count: int) -> Floats:
    t = np.arange(steps) + 0.5
    cosines = np.cos(np.pi * np.outer(t, np.arange(1, count + 1)) / steps)
    whole, _ = np.linalg.qr(np.column_stack([np.ones(steps), t - steps / 2, cosines]))
    return np.asarray(whole[:, 2:], dtype=np.float64)
