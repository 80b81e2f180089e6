"""Is there any correlation left, over many lags at once; depends on numpy, ``scipy.special`` and ``serial`` only."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from scipy import special

from sercheck.serial.arrays import Floats, Ints
from sercheck.serial.autocovariances import autocorrelation_of
from sercheck.serial.centre import centred

THRESHOLD = 2.0
"""Standard errors under which a correlation between two products counts as none (Dalla, Giraitis and Phillips 2022
use 1.96 and 2.57)."""
BLOCK = 1 << 18
"""Values whose products are held at once: ten lags of them are 20 MB."""


class Portmanteau(NamedTuple):
    """A sum over lags and its law when nothing is correlated.

    Attributes:
        statistic: shape (S,); NaN for a series that does not vary or has no pair at one of the lags.
        df: degrees of freedom of its χ² law.
        p_value: probability of so large a statistic, shape (S,).
    """

    statistic: Floats
    df: int
    p_value: Floats


def box_pierce(x: object, lags: int, fitted: int = 0) -> Portmanteau:
    """Q = n Σ_{k ≤ lags} r_k², χ² with lags - fitted degrees of freedom (Box and Pierce 1970).

    Args:
        x: one series or (S, T); NaN is missing. r_k as in ``autocorrelation``, n the number of observed values.
        lags: autocorrelations in the sum.
        fitted: parameters that were fitted to have these residuals.

    Raises:
        ValueError: when no degree of freedom is left.
    """
    data = centred(x)
    r = autocorrelation_of(data, np.arange(1, lags + 1))
    return box_pierce_of(r, data.n, fitted)


def ljung_box(x: object, lags: int, fitted: int = 0) -> Portmanteau:
    """Q = n (n + 2) Σ_{k ≤ lags} r_k²/(n - k), χ² with lags - fitted degrees of freedom (Ljung and Box 1978).

    To be reported rather than decided by: under changing variance (GARCH) it is too large three times too often.
    Arguments and errors are those of ``box_pierce``.
    """
    data = centred(x)
    r = autocorrelation_of(data, np.arange(1, lags + 1))
    return ljung_box_of(r, data.n, fitted)


def box_pierce_of(r: Floats, n: Ints, fitted: int = 0) -> Portmanteau:
    """``box_pierce`` from autocorrelations at lags 1 .. K, shape (S, K), of n values each, shape (S,)."""
    return _chi_square(np.einsum("ij,ij->i", r, r) * n, r.shape[1] - fitted)


def ljung_box_of(r: Floats, n: Ints, fitted: int = 0) -> Portmanteau:
    """``ljung_box`` from autocorrelations at lags 1 .. K, shape (S, K), of n values each, shape (S,)."""
    left = n[:, None] - np.arange(1.0, r.shape[1] + 1)
    with np.errstate(divide="ignore", invalid="ignore"):
        total = (np.where(left > 0, r**2, np.nan) / left).sum(axis=1)
    return _chi_square(total * n * (n + 2.0), r.shape[1] - fitted)


def _chi_square(statistic: Floats, df: int) -> Portmanteau:
    if df < 1:
        raise ValueError("more lags than fitted parameters are needed")
    return Portmanteau(statistic, df, np.asarray(special.chdtrc(df, statistic)))


def robust_autocorrelations(e: Floats, lags: int) -> Floats:
    """t_k = Σ e_t e_{t-k} / √(Σ e_t² e_{t-k}²), k = 1 .. lags, shape (S, lags) (Taylor 1984).

    Standard normal each when the e are uncorrelated about 0, whatever their variance does over time.

    Args:
        e: innovations, or values about their mean, shape (S, T); NaN is missing: the sums run over complete pairs.
        lags: from 1; a lag without a pair that varies gives NaN.
    """
    peak = np.max(np.abs(e), axis=1, where=~np.isnan(e), initial=0.0)
    e = np.where(np.isnan(e), 0.0, e) / np.where(peak > 0, peak, 1.0)[:, None]
    t = np.full((len(e), lags), np.nan)
    for k in range(1, min(lags, e.shape[1] - 1) + 1):
        product = e[:, k:] * e[:, :-k]
        size = np.sqrt(np.einsum("ij,ij->i", product, product))
        np.divide(product.sum(axis=1), size, out=t[:, k - 1], where=size > 0)
    return t


def learned_portmanteau(e: Floats, lags: int, order: Ints, share: Floats) -> Portmanteau:
    """The robust sum of innovations over 1 + (min(p, lags)/lags) n/N, χ² with ``lags`` degrees of freedom.

    The divisor allows for the errors in the p coefficients of a model that N values of history taught. The sum is that
    of ``cumulative``: Σ t_k² alone is too large twice too often at small risks when variance comes in bursts.

    Args:
        e: innovations of the window, shape (S, T); NaN is missing.
        lags: correlations in the sum.
        order: p, shape (S,).
        share: n/N, shape (S,).
    """
    return _chi_square(_robust_sum(e, lags) / (1 + np.minimum(order, lags) / lags * share), lags)


def cumulative(x: object, lags: int, fitted: int = 0) -> Portmanteau:
    """Q = t' R⁻¹ t of a series that is to be white, χ² with lags - fitted degrees of freedom.

    t is that of ``robust_autocorrelations`` of x about its mean. R is the sample correlation of the products
    x_t x_{t-j} and x_t x_{t-k}, entries within ``THRESHOLD`` standard errors of 0 set to 0; the identity where that is
    not positive definite (Dalla, Giraitis and Phillips 2022).

    Args:
        x: one series or (S, T); NaN is missing.
        lags: from 1.
        fitted: parameters that were fitted to have these residuals.

    Raises:
        ValueError: when no degree of freedom is left.
    """
    data = centred(x)
    e = np.where(data.seen & data.varies[:, None], data.values, np.nan)
    return _chi_square(_robust_sum(e, lags), lags - fitted)


def _robust_sum(e: Floats, lags: int) -> Floats:
    t = robust_autocorrelations(e, lags)
    peak = np.max(np.abs(e), axis=1, where=~np.isnan(e), initial=0.0)
    scaled = np.nan_to_num(e / np.where(peak > 0, peak, 1.0)[:, None])
    statistic = np.empty(len(e))
    block = max(1, BLOCK // max(e.shape[1], 1))
    for first in range(0, len(e), block):
        rows = slice(first, first + block)
        statistic[rows] = _quadratic(t[rows], scaled[rows])
    return statistic


def _quadratic(t: Floats, e: Floats) -> Floats:
    lags = t.shape[1]
    products = np.zeros((len(e), lags, e.shape[1]))
    for k in range(1, min(lags, e.shape[1] - 1) + 1):
        np.multiply(e[:, k:], e[:, :-k], out=products[:, k - 1, k:])
    cross = products @ products.swapaxes(1, 2)
    squares = products**2
    error = np.sqrt(squares @ squares.swapaxes(1, 2))
    size = np.sqrt(np.einsum("ijj->ij", cross))
    with np.errstate(divide="ignore", invalid="ignore"):
        correlation = np.where(np.abs(cross) > THRESHOLD * error, cross / (size[:, :, None] * size[:, None, :]), 0.0)
    identity = np.eye(lags)
    correlation = np.where(identity > 0, 1.0, np.nan_to_num(correlation))
    definite = np.linalg.eigvalsh(correlation)[:, 0] > np.sqrt(np.finfo(np.float64).eps)
    correlation = np.where(definite[:, None, None], correlation, identity)
    told = np.nan_to_num(t)
    solved = np.linalg.solve(correlation, told[:, :, None])[:, :, 0]
    return np.asarray(np.where(np.isnan(t).any(axis=1), np.nan, np.einsum("ij,ij->i", told, solved)))
