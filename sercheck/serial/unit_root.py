"""Does a series return to its level, or wander: tests of both, for many series at once.

Depends on numpy, ``scipy.special`` and ``serial`` only. Every step works on all series of a block; the only loops run
over lags.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from scipy import special

from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.centre import centred
from sercheck.serial.season import detrended

BLOCK = 1 << 19
"""Values of the regressors held at once (4 MB)."""
DEPENDENT = 1e-12
"""Share of a regressor that the others must leave of it; below, it is their sum to rounding."""


class UnitRoot(NamedTuple):
    """A test statistic, its p-value, and the lags used; each of shape (S,).

    NaN statistics (and 0 lags) where the series is too short, constant, or has too many gaps.
    """

    statistic: Floats
    p_value: Floats
    lags: Ints


@dataclass(frozen=True)
class _Surface:
    """MacKinnon's (1994) approximation Φ(polynomial in t) of the Dickey-Fuller law: its reach, and both polynomials."""

    least: float
    star: float
    most: float
    small: tuple[float, ...]
    large: tuple[float, ...]


_LEVEL = _Surface(-18.83, -1.61, 2.74, (2.1659, 1.4412, 0.038269), (1.7339, 0.93202, -0.12745, -0.010368))
_TREND = _Surface(-16.18, -2.89, 0.70, (3.2512, 1.6047, 0.049588), (2.5261, 0.61654, -0.37956, -0.060285))
"""Table 3 of MacKinnon (1994) for one series, about a level and about a line."""

KPSS_RISKS = (0.10, 0.05, 0.025, 0.01)
KPSS_LEVEL = (0.347, 0.463, 0.574, 0.739)
KPSS_TREND = (0.119, 0.146, 0.176, 0.216)
"""Critical values of Kwiatkowski, Phillips, Schmidt and Shin (1992, table 1), about a level and about a line."""


def schwert_lags(n: int, twelfth: float = 12.0) -> int:
    """Lags of Schwert (1989): ⌈12 (n/100)^¼⌉, or with 4 in place of 12 the shorter choice."""
    return int(np.ceil(twelfth * (n / 100) ** 0.25)) if n > 0 else 0


def augmented_dickey_fuller(x: object, *, trend: bool = False, lags: int | None = None) -> UnitRoot:
    """Test the null hypothesis of a unit root (Dickey and Fuller 1979; Said and Dickey 1984).

    The t-value of x_{t-1} in the regression of Δx_t on 1, x_{t-1}, Δx_{t-1} .. Δx_{t-p} (and time). Without ``lags`` p
    is chosen by Akaike's criterion among 0 .. ⌈12 (n/100)^¼⌉, all on the rows that the longest needs. P-values by
    MacKinnon (1994). With missing values a row takes part when all that its regression needs is observed.

    Args:
        x: one series or (S, T); NaN is missing.
        trend: about a line in time rather than a level.
        lags: p, the same for all series.
    """
    data = centred(x)
    steps = data.values.shape[1]
    fixed = 2 if trend else 1
    longest = min(schwert_lags(steps), steps // 2 - fixed - 1) if lags is None else lags
    series = len(data.values)
    statistic, used = np.full(series, np.nan), np.zeros(series, dtype=np.int64)
    if longest < 0 or steps < longest + fixed + 4:
        return UnitRoot(statistic, statistic, used)
    values = np.where(data.seen & data.varies[:, None], data.values, np.nan)
    block = max(1, BLOCK // max((longest + 4) * steps, 1))
    for first in range(0, series, block):
        rows = slice(first, first + block)
        used[rows] = longest if lags is not None else _chosen(values[rows], longest, trend)
    for p in np.unique(used).tolist():
        for part in _parts(np.flatnonzero(used == p), block):
            statistic[part] = _t_value(values[part], p, trend)
    return UnitRoot(statistic, dickey_fuller_p(statistic, trend=trend), used)


def _parts(rows: Ints, size: int) -> list[Ints]:
    return [rows[first : first + size] for first in range(0, len(rows), size)]


def dickey_fuller_p(statistic: Floats, *, trend: bool = False) -> Floats:
    """P-values of Dickey-Fuller t-values by MacKinnon's (1994) approximation, as statsmodels computes them."""
    law = _TREND if trend else _LEVEL
    small = np.polynomial.polynomial.polyval(statistic, law.small)
    large = np.polynomial.polynomial.polyval(statistic, law.large)
    with np.errstate(invalid="ignore"):
        p = special.ndtr(np.where(statistic <= law.star, small, large))
        p = np.where(statistic > law.most, 1.0, np.where(statistic < law.least, 0.0, p))
    return np.where(np.isnan(statistic), np.nan, p)


def _columns(x: Floats, p: int, order: tuple[str, ...]) -> Floats:
    """Regressors in the order named, the answer Δx_t last, 0 in rows that lack a value: shape (S, K, R)."""
    steps = x.shape[1]
    d = np.diff(x, axis=1)
    first = p  # Δx_{t-p} is the first difference there is
    level, answer = x[:, first : steps - 1], d[:, first:]
    past = [d[:, first - k : steps - 1 - k] for k in range(1, p + 1)]
    one = np.ones_like(answer)
    time = np.broadcast_to(np.linspace(-1.0, 1.0, answer.shape[1]), answer.shape)
    named = {"one": [one], "time": [time], "level": [level], "past": past}
    columns = np.stack([column for name in order for column in named[name]] + [answer], axis=1)
    whole = ~np.isnan(columns).any(axis=1, keepdims=True)
    return np.where(whole, columns, 0.0)


def _eliminated(gram: Floats) -> tuple[Floats, Floats, Floats]:
    """Take out the regressors one after another (Gauss; Beaton's sweep): left-over powers, last coefficient and pivot.

    Args:
        gram: X'X with the answer last, shape (S, K + 1, K + 1).

    Returns:
        Residual sum of squares with the first 0 .. K regressors, shape (S, K + 1); the last one's coefficient; what the
        others leave of its power. NaN from the first regressor on that the others explain to rounding.
    """
    a = gram.copy()
    size = a.shape[1]
    start = np.einsum("ijj->ij", gram).copy()
    left = np.full((len(a), size), np.nan)
    left[:, 0] = a[:, -1, -1]
    coefficient, pivot = np.full(len(a), np.nan), np.full(len(a), np.nan)
    for k in range(size - 1):
        pivot = np.where(a[:, k, k] > DEPENDENT * start[:, k], a[:, k, k], np.nan)
        column = a[:, k, k + 1 :].copy()
        coefficient = column[:, -1] / pivot
        a[:, k + 1 :, k + 1 :] -= column[:, :, None] * (column / pivot[:, None])[:, None, :]
        left[:, k + 1] = a[:, -1, -1]
    return left, coefficient, pivot


def _chosen(x: Floats, longest: int, trend: bool) -> Ints:
    order = ("one", "time", "level", "past") if trend else ("one", "level", "past")
    columns = _columns(x, longest, order)
    left, _, _ = _eliminated(columns @ columns.swapaxes(1, 2))
    fixed = len(order) - 1
    n = np.count_nonzero(columns[:, 0], axis=1)[:, None]
    count = fixed + np.arange(longest + 1)
    with np.errstate(divide="ignore", invalid="ignore"):
        criterion = n * np.log(left[:, fixed:] / n) + 2 * count
    criterion = np.where(np.isfinite(criterion) & (n > count), criterion, np.inf)
    return np.asarray(np.argmin(criterion, axis=1), dtype=np.int64)


def _t_value(x: Floats, p: int, trend: bool) -> Floats:
    columns = _columns(x, p, ("one", "time", "past", "level") if trend else ("one", "past", "level"))
    left, coefficient, pivot = _eliminated(columns @ columns.swapaxes(1, 2))
    n = np.count_nonzero(columns[:, 0], axis=1)
    df = n - (columns.shape[1] - 1)
    rest = left[:, -1]
    with np.errstate(divide="ignore", invalid="ignore"):
        able = (df > 0) & (rest > DEPENDENT * left[:, 0])
        return np.where(able, coefficient / np.sqrt(rest / df / pivot), np.nan)


def kpss(x: object, *, trend: bool = False, lags: int | None = None) -> UnitRoot:
    """Test the null hypothesis that a series scatters about its level (Kwiatkowski, Phillips, Schmidt and Shin 1992).

    Σ S_t²/(n² σ̂²), S_t the cumulative sums of the residuals of level (or line), σ̂² their long-run variance with
    Bartlett's weights over ``lags``; without ``lags`` the automatic choice of Hobijn, Franses and Ooms (2004).
    P-values are interpolated in the published table and end at .01 and .10. A missing value counts as lying on its
    level; covariances sum the complete pairs.

    Args:
        x: one series or (S, T); NaN is missing.
        trend: about a line in time rather than a level.
        lags: the same for all series.
    """
    data = centred(x)
    seen, n = data.seen, data.n
    rest = np.nan_to_num(detrended(np.where(seen, data.values, np.nan))) if trend else data.values
    count = np.maximum(n, 1).astype(np.float64)
    power = np.einsum("ij,ij->i", rest, rest)
    steps = rest.shape[1]
    most = _automatic_most(steps) if lags is None else lags
    products = np.zeros((len(rest), min(most, max(steps - 1, 0)) + 1))
    products[:, 0] = power
    for k in range(1, products.shape[1]):
        products[:, k] = np.einsum("ij,ij->i", rest[:, k:], rest[:, :-k])
    used = _automatic(products, count) if lags is None else np.full(len(rest), lags)
    used = np.minimum(used, np.maximum(n - 1, 0))
    variance = _bartlett(rest, products, used) / count
    total = np.einsum("ij,ij->i", *[np.where(seen, np.cumsum(rest, axis=1), 0.0)] * 2)
    flat = _flat(power, data.varies)
    with np.errstate(divide="ignore", invalid="ignore"):
        statistic = np.where(flat | ~(variance > 0), np.nan, total / count**2 / variance)
    table = KPSS_TREND if trend else KPSS_LEVEL
    p = np.where(np.isnan(statistic), np.nan, np.interp(statistic, table, KPSS_RISKS))
    return UnitRoot(statistic, p, np.asarray(used, dtype=np.int64))


def _flat(power: Floats, varies: Bools) -> Bools:
    return np.asarray(~varies | ~(power > 0))


def _automatic_most(n: int) -> int:
    return int(n ** (2 / 9)) if n > 0 else 0


def _automatic(products: Floats, count: Floats) -> Ints:
    """⌊1.1447 (s1/s0)^(2/3) n^(1/3)⌋, s0 = γ_0 + 2 Σ γ_k, s1 = 2 Σ k γ_k over ⌊n^(2/9)⌋ lags."""
    k = np.arange(products.shape[1])
    within = (k >= 1) & (k <= np.floor(count ** (2 / 9))[:, None])
    twice = np.where(within, 2 * products / count[:, None], 0.0)
    s0 = products[:, 0] / count + twice.sum(axis=1)
    with np.errstate(divide="ignore", invalid="ignore"):
        lags = np.floor(1.1447 * np.cbrt(((twice * k).sum(axis=1) / s0) ** 2) * np.cbrt(count))
    return np.asarray(np.where(np.isfinite(lags), lags, 0), dtype=np.int64)


def _bartlett(rest: Floats, products: Floats, used: Ints) -> Floats:
    """Σ e² + 2 Σ_k (1 - k/(lags + 1)) Σ e_t e_{t-k}, shape (S,); further lags only for the series that use them."""
    total = products[:, 0].copy()
    for k in range(1, int(used.max(initial=0)) + 1):
        rows = np.flatnonzero(used >= k)
        product = products[rows, k] if k < products.shape[1] else np.einsum("ij,ij->i", rest[rows, k:], rest[rows, :-k])
        total[rows] += 2 * (1 - k / (used[rows] + 1)) * product
    return total
