"""Seasonal profiles of many series at once; depends on numpy only."""

from __future__ import annotations

import numpy as np

from sercheck.serial.arrays import Floats, Ints


def phase_means(x: Floats, phase: Ints, length: int) -> tuple[Floats, Ints]:
    """Mean of the observed values at each place of the cycle.

    Args:
        x: shape (S, T), NaN is missing.
        phase: place in the cycle of each step, 0 .. length - 1, shape (T,).
        length: steps in one cycle.

    Returns:
        Means (NaN where a phase was never observed) and counts, both of shape (S, length).
    """
    seen = ~np.isnan(x)
    picks = np.zeros((x.shape[1], length))
    picks[np.arange(x.shape[1]), phase] = 1.0
    counts = (seen @ picks).astype(np.int64)
    with np.errstate(invalid="ignore", divide="ignore"):
        means = (np.where(seen, x, 0.0) @ picks) / counts
    return means, counts
