"""How far sample autocorrelations scatter, and their bias; depends on numpy, ``scipy.special`` and ``serial`` only.

``rho`` is everywhere an array of theoretical autocorrelations ρ_0 = 1, ρ_1 .. ρ_L, shape (S, L + 1) or (L + 1,), taken
as 0 beyond L.
"""

from __future__ import annotations

from copy import copy

import numpy as np
from scipy import special

from sercheck.serial.arrays import Floats, Ints, as_series
from sercheck.serial.autocovariances import Lags, good_length
from sercheck.serial.autoregression import burg, largest_order, model_autocorrelation

REACH = 100
"""Lags of the filter in the robust variance (taken over with the method); at least twice the lag tested."""
BLOCK = 1 << 16
"""Values transformed at a time."""


def model_lags(lag: int) -> int:
    """How far a model's autocorrelations are followed for a statistic at ``lag``: max(200, 6 lag)."""
    return max(200, 6 * lag)


def bartlett_weights(rho: Floats, lag: int) -> Floats:
    """W_j = ρ_{k+j} + ρ_{k-j} - 2 ρ_j ρ_k for j = 1 .. L + k, k the lag (Bartlett 1946), shape (..., L + k).

    To first order r_k - ρ_k is Σ_j W_j times the innovations' sample autocorrelation at j, so that n var(r_k) is the
    sum of the squared weights.
    """
    longest = rho.shape[-1] - 1
    size = longest + lag
    wide = np.concatenate([rho, np.zeros((*rho.shape[:-1], 2 * lag + longest))], axis=-1)
    weights: Floats = wide[..., lag + 1 : lag + 1 + size].copy()
    weights[..., :lag] += wide[..., lag - 1 :: -1] if lag > 1 else wide[..., :1]
    weights[..., lag:] += wide[..., 1 : size - lag + 1]
    weights -= 2 * wide[..., 1 : size + 1] * wide[..., lag : lag + 1]
    return weights


def bartlett_variance(rho: Floats, lag: int) -> Floats:
    """Large-sample n var(r_k) of a linear process with autocorrelations ``rho`` (Bartlett 1946).

    Σ_i (ρ_i² + ρ_{i+k} ρ_{i-k} - 4 ρ_k ρ_i ρ_{i-k} + 2 ρ_i² ρ_k²) over all i, summed as Σ_{j>=1} W_j²; shape (...).
    """
    weights = bartlett_weights(rho, lag)
    variance: Floats = np.einsum("...j,...j->...", weights, weights)
    return variance


def bartlett_error(x: object, lag: Lags) -> Floats:
    """Standard error of the sample autocorrelation at ``lag``: √(n var(r_k) / n), ρ from the series' autoregression.

    The autoregression (Burg's method, AICc) stands for the unknown ρ, because the sums of squared sample
    autocorrelations themselves do not converge. Divide by n, the number of observed values.

    Args:
        x: one series (T,) or (S, T); NaN is missing.
        lag: one or several lags from 1.

    Returns:
        Without unit, of shape ``x.shape[:-1] + np.shape(lag)``; NaN for a constant series.

    Raises:
        ValueError: a lag below 1, or more than two dimensions.
    """
    values = as_series(x)
    lags = np.atleast_1d(np.asarray(lag, dtype=np.int64))
    if (lags < 1).any():
        raise ValueError(f"expected lags of at least 1, got {lag!r}")
    longest = int(lags.max(initial=1))
    model = burg(values, max_order=None if longest == 1 else largest_order(values.shape[1], longest))
    rho = model_autocorrelation(model, model_lags(longest))
    variance = np.stack([bartlett_variance(rho, int(k)) for k in lags], axis=1) / np.maximum(model.n, 1)[:, None]
    error = np.where(np.isnan(model.variance)[:, None], np.nan, np.sqrt(variance))
    return error.reshape(np.asarray(x).shape[:-1] + np.asarray(lag).shape)


def autocorrelation_bias(rho: Floats, lag: int) -> Floats:
    """First-order bias of r_k times n, divisor n and mean estimated (Kendall 1954; Marriott and Pope 1954).

    -[k ρ_k + (1 - ρ_k) Σ ρ_j + 2 Σ (ρ_j ρ_{j+k} - ρ_k ρ_j²)], sums over all j, which is -(1 + 4φ) for AR(1) at lag 1;
    shape (...). The middle term is ``mean_bias``.
    """
    wide = np.concatenate([rho, np.zeros((*rho.shape[:-1], lag))], axis=-1)
    at = wide[..., lag]
    squares = 2 * np.einsum("...j,...j->...", rho, rho) - 1
    shifted = 2 * np.einsum("...j,...j->...", rho, wide[..., lag : lag + rho.shape[-1]])
    between = wide[..., 1:lag]
    shifted = shifted + np.einsum("...j,...j->...", between, between[..., ::-1])
    bias: Floats = mean_bias(rho, lag) - (lag * at + 2 * (shifted - at * squares))
    return bias


def mean_bias(rho: Floats, lag: int, cycle: int = 1) -> Floats:
    """The part of n times the bias of r_k that estimated means make: -s Σ_j (ρ_{k+js} - ρ_k ρ_{js}) over all j.

    With s = 1 the mean of all rows is taken out, and it is -(1 - ρ_k) Σ ρ_j (Kendall 1954); with s the steps of a
    cycle, the mean at each place of it: the expected periodogram at the cycle's frequencies, folded (Poisson's sum).

    Args:
        rho: autocorrelations, shape (..., L + 1).
        lag: k, at most L.
        cycle: s.
    """
    if cycle == 1:
        return np.asarray(-(1 - rho[..., lag]) * (2 * rho.sum(axis=-1) - 1))
    longest = rho.shape[-1] - 1
    around = np.arange(-((longest + lag) // cycle), (longest + lag) // cycle + 1) * cycle
    wide = np.concatenate([rho, np.zeros((*rho.shape[:-1], 2 * lag + cycle + 1))], axis=-1)
    ahead, here = wide[..., np.abs(lag + around)].sum(axis=-1), wide[..., np.abs(around)].sum(axis=-1)
    return np.asarray(-cycle * (ahead - rho[..., lag] * here))


class Residuals:
    """Innovations of a block of series, prepared once for the robust variances at several lags.

    Args:
        e: innovations, shape (S, T), NaN where there are none.
        order: of the model that they come from, shape (S,): the rows at the start that have none.
        parameters: of that model, where some of its coefficients are not its own.
    """

    def __init__(self, e: Floats, order: Ints, parameters: Ints | None = None) -> None:
        self.seen = ~np.isnan(e)
        self.e = np.where(self.seen, e, 0.0)
        # the variances do not depend on the unit; a power of two keeps squares within reach of doubles
        peak = np.maximum(self.e.max(axis=1, initial=0.0), -self.e.min(axis=1, initial=0.0))
        self.e *= np.ldexp(1.0, -np.clip(np.frexp(peak)[1], -1021, 1022))[:, None]
        self.count = self.seen.sum(axis=1)
        self.order = order
        self.parameters = order if parameters is None else parameters
        self.power = np.einsum("ij,ij->i", self.e, self.e)
        self._spectrum: tuple[int, np.ndarray] | None = None

    def robust_variance(self, weights: Floats, n: Floats | Ints, lag: int = 1) -> Floats:
        """Variance of r_k that does not suppose independent innovations (after Taylor 1984), shape (S,).

        V_h = [n/(n-p-1)] Σ_t e_t² (Σ_{j<=J} W_j e_{t-j})² / (Σ e_t²)², J = max(100, 2k). Uncorrelated innovations whose
        size comes in bursts (GARCH) make it larger than Bartlett's ΣW²/n. Where innovations are missing the sum is
        brought to what n rows would give: terms are counted with the weights whose innovation is there.

        Args:
            weights: Bartlett weights W_1 .. of the null hypothesis, shape (S, J) or longer.
            n: number of rows that counts, shape (S,).
            lag: k.

        Returns:
            NaN where no innovations are left.
        """
        reach = min(max(REACH, 2 * lag), weights.shape[1], max(self.e.shape[1] - 1, 1))
        weights = weights[:, :reach]
        squares = weights**2
        steps = self.e.shape[1]
        size = good_length(steps + reach)
        total = np.empty(len(self.e))
        terms = np.empty(len(self.e))
        block = max(1, BLOCK // size)
        spectrum = self._transformed(size)
        for first in range(0, len(self.e), block):
            rows = slice(first, first + block)
            foreseen = np.fft.irfft(spectrum[rows] * np.fft.rfft(weights[rows], size), size)[:, : max(steps - 1, 0)]
            foreseen *= self.e[rows, 1:]
            total[rows] = np.einsum("ij,ij->i", foreseen, foreseen)
            terms[rows] = self._terms(rows, squares[rows], size)
        count = self.count
        rows_that_count = np.asarray(n, dtype=np.float64)
        whole = np.maximum(rows_that_count - self.order, 1)
        full = squares @ np.ones(reach) * whole - squares @ np.arange(1, reach + 1)
        freedom = rows_that_count - self.parameters - 1
        with np.errstate(divide="ignore", invalid="ignore"):
            share = total / self.power**2 * count**2 / terms
            variance = np.where(freedom > 0, rows_that_count / freedom, np.nan) * share * full / whole**2
        return np.where((self.power > 0) & (terms > 0), variance, np.nan)

    def changed(self, rows: Ints, other: Residuals) -> Residuals:
        """The same innovations, those of ``rows`` from another block."""

        def put(name: str) -> np.ndarray:
            whole: np.ndarray = getattr(self, name).copy()
            whole[rows] = getattr(other, name)
            return whole

        result = copy(self)
        vars(result).update({name: put(name) for name in ("seen", "e", "count", "order", "parameters", "power")})
        if self._spectrum is not None:
            spectrum = self._spectrum[1].copy()
            spectrum[rows] = other._transformed(self._spectrum[0])
            vars(result)["_spectrum"] = self._spectrum[0], spectrum
        return result

    def _transformed(self, size: int) -> np.ndarray:
        """The innovations' transform of ``size`` points: most statistics ask for the same."""
        if self._spectrum is None or self._spectrum[0] != size:
            block = max(1, BLOCK // size)
            parts = [np.fft.rfft(self.e[first : first + block], size) for first in range(0, len(self.e), block)]
            self._spectrum = size, np.concatenate(parts or [np.zeros((0, size // 2 + 1), dtype=np.complex128)])
        return self._spectrum[1]

    def _terms(self, rows: slice, squares: Floats, size: int) -> Floats:
        """Σ_t Σ_j W_j² over the pairs whose innovations are both there."""
        reach = squares.shape[1]
        steps = self.e.shape[1]
        counts = np.maximum(self.count[rows, None] - np.arange(1, reach + 1), 0)
        closed = self.order[rows] + self.count[rows] == steps
        terms: Floats = np.einsum("ij,ij->i", squares, counts)
        for_gaps = np.flatnonzero(~closed)
        if len(for_gaps):
            seen = self.seen[rows][for_gaps].astype(np.float64)
            terms[for_gaps] = np.einsum("ij,ij->i", seen, _filtered(seen, squares[for_gaps], size))
        return terms


def _filtered(x: Floats, weights: Floats, size: int) -> Floats:
    """Σ_j W_j x_{t-j}, j from 1, for each t, by Fourier transforms of ``size`` points."""
    steps = x.shape[1]
    product = np.fft.rfft(x, size) * np.fft.rfft(weights, size)
    filtered = np.zeros_like(x)
    filtered[:, 1:] = np.fft.irfft(product, size)[:, : max(steps - 1, 0)]
    return filtered


def white_noise_band(n: int, confidence: float = 0.95) -> float:
    """Half width z/√n of the band for r_k of white noise, as statistics programs draw it."""
    return float(special.ndtri((1 + confidence) / 2) / np.sqrt(n))


def moving_average_band(r: Floats, n: int, confidence: float = 0.95) -> Floats:
    """Half widths z √((1 + 2 Σ_{i<k} r_i²)/n) for lags 1 .. K, as if ρ were 0 from lag k on (Bartlett 1946).

    Args:
        r: sample (or theoretical) autocorrelations from lag 1, shape (..., K).
        n: length of the series.
        confidence: 0.95 unless a program is told otherwise.
    """
    before = np.concatenate([np.zeros((*r.shape[:-1], 1)), np.cumsum(r[..., :-1] ** 2, axis=-1)], axis=-1)
    return np.asarray(special.ndtri((1 + confidence) / 2) * np.sqrt((1 + 2 * before) / n), dtype=np.float64)


def white_noise_mean(n: int, lag: Lags) -> Floats:
    """Expectation -(n-k)/(n(n-1)) of r_k when the order of the rows is random (Moran 1948)."""
    k = np.asarray(lag)
    return np.asarray(-(n - k) / (n * (n - 1)), dtype=np.float64)


def white_noise_error(n: int, lag: Lags) -> Floats:
    """Standard error √((n-k)/(n(n+2))) of r_k of Gaussian white noise (Moran 1948; Ljung and Box 1978)."""
    return np.sqrt((n - np.asarray(lag)) / (n * (n + 2)))
