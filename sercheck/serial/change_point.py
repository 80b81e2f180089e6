"""Whether the level of a series changed, and where; depends on numpy, ``scipy.special`` and ``serial`` only."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from scipy import special

from sercheck.serial.arrays import Floats, Ints, as_series
from sercheck.serial.self_normalized_table import PROBABILITIES, QUANTILES, SIZES

TRIM = 0.05
"""Share of the rows at either end where no change is placed (usual practice, Andrews 1993 trims more)."""
NODES = np.linspace(-8.0, 8.0, 129)
"""Normal deviates at which the scatter of a variance is integrated: the tails beyond have 1e-15."""


class Break(NamedTuple):
    """The most likely place of one change of level in each series, all of shape (S,).

    ``place`` is the first step after it (-1 where there is none), ``change`` the mean after it less the mean before.
    """

    place: Ints
    change: Floats


def bridge(x: object) -> Floats:
    """|S_k - (k/n) S_n| / √n of the observed values, k = 1 .. n, shape (S, T); missing values add nothing."""
    values = as_series(x)
    seen = ~np.isnan(values)
    n = np.maximum(seen.sum(axis=1, keepdims=True), 1)
    middle = np.where(seen, values, 0.0).sum(axis=1, keepdims=True) / n
    walk = np.cumsum(np.where(seen, values - middle, 0.0), axis=1)
    return np.asarray(np.abs(walk) / np.sqrt(n), dtype=np.float64)


def cusum(x: object) -> Floats:
    """K = max_k |S_k - (k/n) S_n| / √n of each series, shape (S,) (Ploberger and Krämer 1992, not yet scaled)."""
    walk = bridge(x)
    return walk.max(axis=1) if walk.shape[1] else np.full(len(walk), np.nan)


def most_likely_break(x: object) -> Break:
    """Place of one change by least squares, argmax |S_k| / √(k (n - k)), ``TRIM`` of the rows off at either end."""
    values = as_series(x)
    seen = ~np.isnan(values)
    k = np.cumsum(seen, axis=1)
    n = seen.sum(axis=1, keepdims=True)
    inside = (k >= np.maximum(TRIM * n, 1)) & (n - k >= np.maximum(TRIM * n, 1))
    weight = np.sqrt(np.maximum(k * (n - k), 1))
    height = np.where(inside, bridge(values) / weight, -1.0)
    if not values.shape[1]:
        return Break(np.full(len(values), -1), np.full(len(values), np.nan))
    at = height.argmax(axis=1)
    able = inside.any(axis=1)
    before = np.arange(values.shape[1]) <= at[:, None]
    filled = np.where(seen, values, 0.0)
    early, late = np.where(before, filled, 0.0).sum(axis=1), np.where(before, 0.0, filled).sum(axis=1)
    first = np.take_along_axis(k, at[:, None], axis=1)[:, 0]
    rest = n[:, 0] - first
    change = late / np.maximum(rest, 1) - early / np.maximum(first, 1)
    return Break(np.where(able, at + 1, -1), np.where(able, change, np.nan))


def bridge_tail(k: Floats, df: Floats) -> Floats:
    """P(sup |Brownian bridge| > s k), s² ~ χ²_df/df: the tail of a CUSUM scaled by an estimated variance.

    The integral over s runs over normal deviates z with s² = F⁻¹(Φ(z)), by the trapezoidal rule. df inf is the
    Kolmogorov law itself.

    Args:
        k: K/ω, shape (S,).
        df: degrees of freedom of ω², broadcast to ``k``.
    """
    k, df = np.broadcast_arrays(np.asarray(k, dtype=np.float64), np.asarray(df, dtype=np.float64))
    finite = np.where(np.isfinite(df), df, 1.0)
    degrees, which = np.unique(finite, return_inverse=True)
    scale = np.sqrt(special.chdtri(degrees[:, None], special.ndtr(-NODES)) / degrees[:, None])
    weight = np.exp(-(NODES**2) / 2)
    total = np.zeros(k.shape)
    for place, share in enumerate(weight / weight.sum()):
        total += share * special.kolmogorov(np.where(np.isnan(k), 0.0, k) * scale[which.reshape(k.shape), place])
    p = np.where(np.isfinite(df), total, special.kolmogorov(np.where(np.isnan(k), 0.0, k)))
    return np.where(np.isnan(k) | np.isnan(df), np.nan, p)


def bridge_quantile(risk: Floats, df: Floats) -> Floats:
    """The K/ω at which ``bridge_tail`` equals ``risk``, by bisection on each different pair."""
    risk, df = np.broadcast_arrays(np.asarray(risk, dtype=np.float64), np.asarray(df, dtype=np.float64))
    pairs, which = np.unique(np.stack([risk.ravel(), df.ravel()]), axis=1, return_inverse=True)
    low, high = np.zeros(pairs.shape[1]), np.full(pairs.shape[1], 1.0)
    while True:
        short = bridge_tail(high, pairs[1]) > pairs[0]
        if not short.any():
            break
        high = np.where(short, 2 * high, high)
    for _ in range(52):
        middle = (low + high) / 2
        beyond = bridge_tail(middle, pairs[1]) <= pairs[0]
        low, high = np.where(beyond, low, middle), np.where(beyond, middle, high)
    high = np.where(np.isnan(pairs).any(axis=0), np.nan, high)
    return np.asarray(high[which.ravel()].reshape(risk.shape), dtype=np.float64)


def self_normalized(x: object) -> Floats:
    """G = max_k T_k²/V_k, a change of level judged by the scatter of its own partial sums (Shao and Zhang 2010).

    T_k = (S_k - (k/n) S_n)/√n; V_k = n⁻² [Σ_{t≤k} (S_t - (t/k) S_k)² + Σ_{t>k} (S_{t..n} - (n-t+1)/(n-k) S_{k+1..n})²].
    Needs no estimate of a long-run variance.

    Args:
        x: one series or (S, T); missing values count as the mean.
    """
    values = as_series(x)
    seen = ~np.isnan(values)
    n = values.shape[1]
    middle = np.where(seen, values, 0.0).sum(axis=1, keepdims=True) / np.maximum(seen.sum(axis=1, keepdims=True), 1)
    s = np.cumsum(np.where(seen, values - middle, 0.0), axis=1)
    t = np.arange(1, n + 1, dtype=np.float64)
    left = _scatter_before(s, t)
    back = s[:, -1:] - np.concatenate([np.zeros((len(s), 1)), s[:, :-1]], axis=1)
    right = _scatter_before(back[:, ::-1], t)[:, ::-1]
    scatter = left[:, :-1] + right[:, 1:]
    top = s[:, :-1] ** 2 / n
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = np.where(scatter > 0, top / (scatter / n**2), np.nan)
    able = ~np.isnan(ratio)
    return np.where(able.any(axis=1), np.where(able, ratio, -np.inf).max(axis=1, initial=-np.inf), np.nan)


def _scatter_before(s: Floats, t: Floats) -> Floats:
    """Σ_{u≤k} (S_u - (u/k) S_k)² for every k, from running sums."""
    squares, cross, powers = np.cumsum(s**2, axis=1), np.cumsum(s * t, axis=1), np.cumsum(t**2)
    slope = s / t
    return np.asarray(np.maximum(squares - 2 * slope * cross + slope**2 * powers, 0.0), dtype=np.float64)


def self_normalized_tail(g: Floats, n: int) -> Floats:
    """P(G > g) for n independent normal values, from the simulated table; log-linear in √G beyond it.

    The table (``self_normalized_table``) holds quantiles at a few n; between them it is linear in 1/n.
    """
    root = np.sqrt(np.where(np.isnan(g), 0.0, g))
    knots, logs = _knots(n), np.log(PROBABILITIES)
    slope = (logs[-1] - logs[-2]) / (knots[-1] - knots[-2])
    beyond = logs[-1] + slope * (root - knots[-1])
    inside = np.interp(root, np.concatenate([[0.0], knots]), np.concatenate([[0.0], logs]))
    return np.where(np.isnan(g), np.nan, np.exp(np.where(root > knots[-1], beyond, inside)))


def self_normalized_quantile(risk: Floats, n: int) -> Floats:
    """The G at which ``self_normalized_tail`` equals ``risk``."""
    knots, logs = np.concatenate([[0.0], _knots(n)]), np.concatenate([[0.0], np.log(PROBABILITIES)])
    at = np.log(risk)
    slope = (knots[-1] - knots[-2]) / (logs[-1] - logs[-2])
    inside = np.interp(-at, -logs, knots)
    return np.asarray(np.where(at < logs[-1], knots[-1] + slope * (at - logs[-1]), inside) ** 2, dtype=np.float64)


def _knots(n: int) -> Floats:
    """√ of the table's quantiles at n."""
    inverse = 1 / np.asarray(SIZES, dtype=np.float64)
    table = np.sqrt(np.asarray(QUANTILES))
    order = np.argsort(inverse)
    return np.array([np.interp(1 / n, inverse[order], column[order]) for column in table.T])
