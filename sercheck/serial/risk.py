"""Quantiles, tails, and sharing a risk among many tests; depends on numpy and ``scipy.special`` only."""

from __future__ import annotations

import numpy as np
from scipy import special

from sercheck.serial.arrays import Bools, Floats


def t_tail(t: Floats, df: Floats | float) -> Floats:
    """Upper tail probability of Student's t (``df`` inf: normal); NaN stays NaN.

    Exact to the accuracy of ``scipy.special.stdtr`` and ``ndtr``.
    """
    t, df = np.broadcast_arrays(np.asarray(t, dtype=np.float64), np.asarray(df, dtype=np.float64))
    infinite = np.isinf(df)
    tail: Floats = np.where(infinite, special.ndtr(-t), special.stdtr(np.where(infinite, 1.0, df), -t))
    return tail


def t_quantile(p: Floats | float, df: Floats | float) -> Floats:
    """Quantile of Student's t at probability ``p`` (``df`` inf: normal); NaN stays NaN."""
    p, df = np.broadcast_arrays(np.asarray(p, dtype=np.float64), np.asarray(df, dtype=np.float64))
    infinite = np.isinf(df)
    quantile: Floats = np.where(infinite, special.ndtri(p), special.stdtrit(np.where(infinite, 1.0, df), p))
    return quantile


def holm(p: Floats, risk: float) -> Floats:
    """The risk at which each p-value is judged under Holm's step-down procedure (Holm 1979).

    ``p <= level`` rejects exactly the hypotheses that Holm rejects, so that any of them is a false alarm with
    probability at most ``risk``. NaN (undecided) takes no part and gets NaN.

    Args:
        p: p-values, shape (m,).
        risk: risk over all of them.
    """
    level = np.full(p.shape, np.nan)
    told = np.flatnonzero(~np.isnan(p))
    order = told[np.argsort(p[told], kind="stable")]
    steps = risk / np.arange(len(order), 0, -1)
    kept = np.flatnonzero(p[order] > steps)
    if len(kept):
        steps[kept[0] :] = steps[kept[0]]
    level[order] = steps
    return level


def benjamini_yekutieli(p: Floats, rate: float) -> Floats:
    """The risk at which each p-value is judged so that the false discovery rate is at most ``rate``.

    Step-up procedure valid under any dependence (Benjamini and Yekutieli 2001): the level is rate·j/(m·Σ1/i), j the
    last rank that passes. NaN takes no part and gets NaN.
    """
    level = np.full(p.shape, np.nan)
    told = np.flatnonzero(~np.isnan(p))
    m = len(told)
    if m:
        steps = rate * np.arange(1, m + 1) / (m * np.sum(1 / np.arange(1, m + 1)))
        passed = np.flatnonzero(np.sort(p[told]) <= steps)
        level[told] = steps[passed[-1]] if len(passed) else steps[0]
    return level


def broken(p: Floats, level: Floats) -> Bools:
    """Where a p-value is at or under its level (never for NaN)."""
    with np.errstate(invalid="ignore"):
        return np.asarray(p <= level)
