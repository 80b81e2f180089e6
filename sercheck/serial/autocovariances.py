"""Autocovariances, autocorrelations and differences of many series; depends on numpy and ``serial`` only."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from sercheck.serial.arrays import Floats, Ints, as_series
from sercheck.serial.centre import ROUNDING, Centred, centred

FEW_LAGS = 20
"""Up to so many lags their products cost less than the Fourier transforms (measured at 168, 1,000, 5,000 steps)."""
SEGMENT = 1 << 13
"""Shortest segment of a long series: transforms of twice this length stay in a second-level cache."""
BLOCK = 1 << 16
"""Values transformed at a time."""

Lags = int | Sequence[int] | Ints
"""One lag or several, in steps."""


def autocovariance(x: object, lags: Lags) -> Floats:
    """Sample autocovariances c_k = (1/n) Σ_t (x_t - m)(x_{t+k} - m), m the mean of all observed values.

    Divisor n at every lag (Box and Jenkins 1970), which keeps the sequence positive semidefinite. With missing values
    the sum runs over the p_k complete pairs and is divided by p_k + k, as R's ``acf`` does with ``na.pass``; nothing is
    closed up over a gap.

    Args:
        x: one series (T,) or (S, T); NaN and infinite values are missing.
        lags: from 0; a lag without a complete pair gives NaN.

    Returns:
        In the squared unit of ``x``, of shape ``x.shape[:-1] + np.shape(lags)``; 0 for a constant series. Beyond the
        reach of doubles (values above 1e154) it is infinite, where autocorrelations are still exact.

    Raises:
        ValueError: a negative lag, or more than two dimensions.
    """
    data = centred(x)
    steps = _lag_array(lags)
    sums, pairs = lagged_products(data, steps)
    with np.errstate(over="ignore", under="ignore"):
        c = _per_pair(sums, pairs, steps) * data.scale[:, None] * data.scale[:, None]
    return _shaped(np.where(data.varies[:, None] | (pairs == 0), c, 0.0), x, lags)


def autocorrelation(x: object, lags: Lags) -> Floats:
    """Sample autocorrelations r_k = c_k / c_0, c_k as in ``autocovariance``.

    A series that is constant, or varies by no more than the rounding of doubles, gives NaN: it has no autocorrelation.
    Scale and shift of the series do not change the result, from 1e-300 to 1e300.

    Args:
        x: one series (T,) or (S, T); NaN and infinite values are missing.
        lags: from 0; a lag without a complete pair gives NaN.

    Returns:
        Without unit, of shape ``x.shape[:-1] + np.shape(lags)``.

    Raises:
        ValueError: a negative lag, or more than two dimensions.
    """
    return _shaped(autocorrelation_of(centred(x), _lag_array(lags)), x, lags)


def partial_autocorrelation(x: object, lags: Lags) -> Floats:
    """Sample partial autocorrelations: the Durbin-Levinson recursion on the autocorrelations (Durbin 1960).

    The value at lag k is the last coefficient of the Yule-Walker autoregression of order k, as R's ``pacf`` gives it.
    With missing values the autocorrelations need not be positive definite and a value beyond ±1 can occur.

    Args:
        x: one series (T,) or (S, T); NaN and infinite values are missing.
        lags: from 1; NaN from the first lag on that has no complete pair, and for a constant series.

    Returns:
        Without unit, of shape ``x.shape[:-1] + np.shape(lags)``.

    Raises:
        ValueError: a lag below 1, or more than two dimensions.
    """
    steps = _lag_array(lags, least=1)
    r = autocorrelation_of(centred(x), np.arange(1, steps.max(initial=1) + 1))
    return _shaped(step_down(r)[:, steps - 1], x, lags)


def step_down(r: Floats) -> Floats:
    """Partial autocorrelations from autocorrelations r_1 .. r_K, both of shape (S, K) (Levinson 1947, Durbin 1960)."""
    series, width = r.shape
    partial = np.empty_like(r)
    a = np.zeros((series, width))
    left = np.ones(series)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        for m in range(width):
            k = (r[:, m] - np.einsum("ij,ij->i", a[:, :m], r[:, :m][:, ::-1])) / left
            a[:, :m] -= k[:, None] * a[:, :m][:, ::-1]
            a[:, m] = partial[:, m] = k
            left *= 1 - k**2
    return np.where(np.isfinite(partial), partial, np.nan)


def differences(x: object, lag: int = 1) -> Floats:
    """Differences x_t - x_{t-lag}: first ones (lag 1) or seasonal ones (lag = steps of a season).

    Args:
        x: one series (T,) or (S, T); NaN and infinite values are missing.
        lag: at least 1.

    Returns:
        In the unit and shape of ``x``: NaN at the first ``lag`` steps and wherever one of the two values is missing.
        Differences that scatter by no more than the rounding of the values they come from (a straight line) are
        set to one constant, so that nobody measures the rounding.

    Raises:
        ValueError: a lag below 1, or more than two dimensions.
    """
    if lag < 1:
        raise ValueError(f"expected a lag of at least 1, got {lag}")
    values = as_series(x)
    d = np.full(values.shape, np.nan)
    np.subtract(values[:, lag:], values[:, : max(values.shape[1] - lag, 0)], out=d[:, lag:])
    seen = ~np.isnan(d)
    low = np.min(d, axis=1, where=seen, initial=np.inf)
    high = np.max(d, axis=1, where=seen, initial=-np.inf)
    peak = np.max(np.abs(values), axis=1, where=~np.isnan(values), initial=0.0)
    noise = (high - low <= ROUNDING * peak) & (low <= high)
    if noise.any():
        middle = np.where(noise, low + (np.where(noise, high, 0.0) - np.where(noise, low, 0.0)) / 2, 0.0)
        d = np.where(noise[:, None] & seen, middle[:, None], d)
    return d.reshape(np.asarray(x).shape)


def autocorrelation_of(data: Centred, lags: Ints) -> Floats:
    """``autocorrelation`` of series already centred, shape (S, K)."""
    sums, pairs = lagged_products(data, lags)
    power = np.einsum("ij,ij->i", data.values, data.values) / np.maximum(data.n, 1)
    known = data.varies & (power > 0)
    return np.where(known[:, None], _per_pair(sums, pairs, lags) / np.where(known, power, 1.0)[:, None], np.nan)


def lagged_products(data: Centred, lags: Ints) -> tuple[Floats, Ints]:
    """Sums of products over the complete pairs at each lag, and the number of pairs, both of shape (S, K)."""
    steps = data.values.shape[1]
    inside = np.flatnonzero(lags < steps)
    sums = np.zeros((len(data.values), len(lags)))
    pairs = np.zeros(sums.shape, dtype=np.int64)
    gaps = np.flatnonzero(data.n < steps)
    if len(inside) <= FEW_LAGS:
        for column in inside:
            lag = int(lags[column])
            sums[:, column] = _product(data.values, lag)
            pairs[:, column] = steps - lag
            if len(gaps):
                seen = data.seen[gaps]
                pairs[gaps, column] = np.count_nonzero(seen[:, : steps - lag] & seen[:, lag:], axis=1)
    else:
        reach = lags[inside]
        sums[:, inside] = _fourier_products(data.values, int(reach.max()))[:, reach]
        pairs[:, inside] = steps - reach
        if len(gaps):
            counts = _fourier_products(data.seen[gaps].astype(np.float64), int(reach.max()))
            pairs[np.ix_(gaps, inside)] = np.rint(counts[:, reach])
    return sums, pairs


def products(x: Floats, reach: int) -> Floats:
    """Σ_t x_t x_{t+k} for k = 0 .. ``reach`` of complete series, shape (S, reach + 1)."""
    if reach >= FEW_LAGS:
        return _fourier_products(x, reach)
    return np.stack([_product(x, lag) for lag in range(reach + 1)], axis=1)


def _product(x: Floats, lag: int) -> Floats:
    product: Floats = np.einsum("ij,ij->i", x[:, : x.shape[1] - lag], x[:, lag:])
    return product


def _fourier_products(x: Floats, reach: int) -> Floats:
    """Σ_t x_t x_{t+k} for k = 0 .. reach by real Fourier transforms, a block of series at a time.

    A long series is cut into segments of M >= reach steps. With X_j the transform of segment j padded to 2M, segment j
    followed by the next one has the transform X_j + (-1)^f X_{j+1}; the products conj(X_j) times that are added up
    before the one inverse transform (Rader 1970).
    """
    series, steps = x.shape
    long = steps + reach > 2 * SEGMENT and 2 * reach < steps
    segment = good_length(max(SEGMENT, reach)) if long else steps
    size = 2 * segment if long else good_length(steps + reach)
    count = -(-steps // segment)
    result = np.empty((series, reach + 1))
    sign = np.where(np.arange(size // 2 + 1) % 2, -1.0, 1.0)
    block = max(1, BLOCK // (size * count))
    for first in range(0, series, block):
        part = x[first : first + block]
        if long:
            part = np.pad(part, ((0, 0), (0, count * segment - steps))).reshape(len(part), count, segment)
            spectrum = np.fft.rfft(part, size)
            power = (spectrum.real**2 + spectrum.imag**2).sum(axis=1).astype(np.complex128)
            power += sign * (spectrum[:, :-1].conj() * spectrum[:, 1:]).sum(axis=1)
        else:
            spectrum = np.fft.rfft(part, size)
            power = spectrum.real**2 + spectrum.imag**2
        result[first : first + block] = np.fft.irfft(power, size)[:, : reach + 1]
    return result


def good_length(least: int) -> int:
    """The smallest even length of at least ``least`` without prime factors above 5, quick to transform."""
    best = 1 << max(least - 1, 1).bit_length()
    five = 1
    while five < best:
        three = five
        while three < best:
            two = 2
            while two * three < least:
                two *= 2
            best = min(best, two * three)
            three *= 3
        five *= 5
    return best


def _per_pair(sums: Floats, pairs: Ints, lags: Ints) -> Floats:
    c: Floats = np.divide(sums, pairs + lags, out=np.full(sums.shape, np.nan), where=pairs > 0)
    return c


def _lag_array(lags: Lags, least: int = 0) -> Ints:
    steps = np.atleast_1d(np.asarray(lags))
    if steps.dtype.kind not in "iu" and steps.size:
        raise ValueError(f"expected whole lags, got {lags!r}")
    if steps.ndim > 1 or (steps < least).any():
        raise ValueError(f"expected lags of at least {least}, got {lags!r}")
    return steps.astype(np.int64)


def _shaped(result: Floats, x: object, lags: Lags) -> Floats:
    return np.reshape(result, np.asarray(x).shape[:-1] + np.asarray(lags).shape)
