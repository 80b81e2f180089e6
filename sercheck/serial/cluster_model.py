"""How many rows weigh as one independent row, by a model of the marks: a second witness for a stretch by itself.

Depends on numpy and ``serial``. A mark is 1, 0 or NaN (nothing can be said about the row).
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from sercheck.serial.arrays import Floats
from sercheck.serial.autoregression import Autoregression, burg, innovations, largest_order
from sercheck.serial.far_lag import NEAR
from sercheck.serial.long_run import corrected_long_run

STRONGEST = 0.9
"""Largest correlation of cycles that is allowed for (a choice)."""
ERRORS = 1.0
"""Standard errors by which the correlation of cycles is taken for stronger than it looks (found by simulation: with
none 672 rows fail 1.8 times too often at a risk of .001)."""


class ModelledClusters(NamedTuple):
    """What a model says of the clusters of each series, shape (S,).

    Attributes:
        size: rows that weigh as one independent row, τ ≥ 1, cycles apart.
        df: degrees of freedom of that estimate.
        cycles: what cycles that hang together multiply any τ by that does not know them, at least 1.
    """

    size: Floats
    df: Floats
    cycles: Floats


def modelled_clusters(marks: Floats, season: int | None, rows: int) -> ModelledClusters:
    """τ = σ²/(1 - Σφ)² over the variance of the marks, and what cycles add.

    The long-run variance is that of an autoregression (Burg 1975; order by AICc, at most 16), corrected for its bias
    (``long_run.corrected_long_run``). An autoregression of so few orders does not see the marks of a cycle ago: Φ, the
    correlation of its innovations one season apart and ``ERRORS`` standard errors more, multiplies τ by
    1 + 2 Σ_{j<C} (1 - j/C) Φ^j = (1 + Φ)/(1 - Φ) - 2Φ(1 - Φ^C)/(C(1 - Φ)²), what it does to a mean over C cycles.

    Args:
        marks: the stretch, shape (S, T).
        season: steps of the cycle, or None.
        rows: steps of the window whose share is judged; C = rows/season.
    """
    steps = marks.shape[1]
    model = burg(marks, max_order=min(largest_order(steps), steps // 6, NEAR))
    variance = np.nanvar(np.where(np.isnan(marks).all(axis=1, keepdims=True), 0.0, marks), axis=1)
    run = corrected_long_run(model)
    with np.errstate(divide="ignore", invalid="ignore"):
        size = run.variance / variance
    told = np.isfinite(size)
    size, df = np.maximum(np.where(told, size, 1.0), 1.0), np.where(told, run.df, np.inf)
    return ModelledClusters(size, df, _of_cycles(marks, model, season, rows / season if season else 0.0))


def _of_cycles(marks: Floats, model: Autoregression, season: int | None, cycles: float) -> Floats:
    if season is None or cycles <= 1 or season >= marks.shape[1]:
        return np.ones(len(marks))
    e = innovations(marks, model)
    seen = ~np.isnan(e)
    pairs = (seen[:, season:] & seen[:, :-season]).astype(np.float64)
    e = np.where(seen, e, 0.0)
    ahead, behind = e[:, season:], e[:, :-season]
    power = np.einsum("ij,ij->i", ahead**2, pairs) + np.einsum("ij,ij->i", behind**2, pairs)
    count = pairs.sum(axis=1)
    with np.errstate(divide="ignore", invalid="ignore"):
        echo = 2 * np.einsum("ij,ij->i", ahead, behind) / power + ERRORS / np.sqrt(count)
    echo = np.clip(np.where(power > 0, echo, 0.0), 0.0, STRONGEST)
    return np.asarray((1 + echo) / (1 - echo) - 2 * echo * (1 - echo**cycles) / (cycles * (1 - echo) ** 2))
