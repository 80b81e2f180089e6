"""Order statistics and quantiles of many series at once; depends on numpy only."""

from __future__ import annotations

import numpy as np

from sercheck.serial.arrays import Floats


def in_order(x: Floats) -> Floats:
    """Each row in increasing order, missing values (NaN) last."""
    return np.sort(x, axis=1)


def order_statistic(ordered: Floats, place: Floats) -> Floats:
    """The value at a place counted from 0, shape (S, L); NaN for a place that is NaN or outside the row."""
    width = ordered.shape[1]
    inside = (place >= 0) & (place < width)
    if not width:
        return np.full(place.shape, np.nan)
    at = np.where(inside, place, 0).astype(np.int64)
    return np.where(inside, np.take_along_axis(ordered, at, axis=1), np.nan)


def quantile(ordered: Floats, held: Floats, probability: Floats) -> Floats:
    """Quantile between the order statistics around (n - 1) q (Hyndman and Fan 1996, type 7).

    Args:
        ordered: from ``in_order``, shape (S, n).
        held: observed values of each row, shape (S, 1).
        probability: shape (S, L).

    Returns:
        Shape (S, L); NaN for a row without values or a probability that is NaN.
    """
    place = (held - 1) * probability
    left = np.floor(place)
    low = order_statistic(ordered, left)
    high = order_statistic(ordered, np.minimum(left + 1, held - 1))
    part = place - left
    return np.asarray(low * (1 - part) + high * part, dtype=np.float64)
