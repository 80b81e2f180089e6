"""How many independent observations a dependent series is worth for its mean; depends on numpy and ``serial`` only."""

from __future__ import annotations

import numpy as np

from sercheck.serial.arrays import Floats
from sercheck.serial.centre import centred
from sercheck.serial.long_run import cosine_count, cosine_spectrum


def effective_size_of(n: Floats | int, autocorrelation: Floats) -> Floats:
    """Effective size for given autocorrelations: n / (1 + 2 Σ_{0<k<n} (1 - k/n) ρ_k).

    The variance of the mean of n values is σ² over it (Bayley and Hammersley 1946). With ρ² in place of ρ it is the
    effective size of a variance.

    Args:
        n: number of values, one number or shape (S,).
        autocorrelation: ρ_0, ρ_1, .. (ρ_0 = 1), one series or shape (S, K + 1); lags beyond K count as 0.

    Returns:
        Shape (S,).
    """
    rho = np.atleast_2d(np.asarray(autocorrelation, dtype=np.float64))
    size = np.broadcast_to(np.asarray(n, dtype=np.float64), (len(rho),))
    lags = np.arange(1, rho.shape[1])
    weights = np.maximum(1 - lags / size[:, None], 0.0)
    return np.asarray(size / (1 + 2 * np.einsum("ij,ij->i", weights, rho[:, 1:])), dtype=np.float64)


def low_frequency_share(x: object) -> tuple[Floats, int]:
    """Share g of the sum of squares that lies in the first B cosines, shape (S,), and B = round(.41 n^(2/3)).

    White noise has g = B/(n - 1) on average. NaN for a constant series or one of fewer than two values.
    """
    # in units of the series' scale, so that squares of values such as 1e300 stay finite
    data = centred(x)
    spectrum = cosine_spectrum(np.where(data.seen, data.values, np.nan))
    count = min(cosine_count(spectrum.steps), spectrum.power.shape[1])
    weights = np.zeros((1, spectrum.power.shape[1]))
    weights[:, :count] = 1.0
    with np.errstate(divide="ignore", invalid="ignore"):
        share = spectrum.weighted(weights) * count / (spectrum.variance * spectrum.n)
    return np.where(data.varies, share, np.nan), count


def effective_size(x: object) -> Floats:
    """Effective number of observations for the mean of each series: n times variance over long-run variance.

    n_eff = B/g, g the share of the sum of squares that lies in the first B = round(.41 n^(2/3)) cosines of the series
    (long-run variance of Müller 2007; B of Lazarus, Lewis, Stock and Watson 2018). It may exceed n where neighbours
    compensate each other. An estimate with a relative error of √(2/B), not an exact size.

    Args:
        x: one series or (S, T); NaN is missing, never closed up.

    Returns:
        Shape (S,); NaN for a constant series.

    Raises:
        ValueError: if ``x`` has more than two dimensions.
    """
    share, count = low_frequency_share(x)
    with np.errstate(divide="ignore"):
        return np.asarray(count / share, dtype=np.float64)
