"""A batch's statistic against the same statistic of history's windows; depends on numpy and ``serial.arrays`` only."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from sercheck.serial.arrays import Floats, Ints

FEWEST_WINDOWS = 8
"""Windows of history below which the window-t says nothing (simulated: its tails are right from eight on)."""
FEWEST_WINDOWS_SMALL_RISK = 20
"""The same at a risk of .001 or less (simulated: with fewer the reference is wider than any fault)."""
SMALL_RISK = 0.001
"""Risk from which ``FEWEST_WINDOWS_SMALL_RISK`` is asked."""


class WindowT(NamedTuple):
    """Law of a new window's statistic: (statistic - centre) / scale follows Student's t with ``df``."""

    centre: Floats
    scale: Floats
    df: Floats


def fewest_windows(risk: float) -> int:
    """Windows of history that a test at this risk needs."""
    return FEWEST_WINDOWS_SMALL_RISK if risk <= SMALL_RISK else FEWEST_WINDOWS


def windows(history: Floats, length: int) -> Floats:
    """Cut history into stretches of the batch's length that do not overlap.

    Stretches are counted back from the end, so that the last one touches the batch and, when the length is a whole
    number of cycles, all of them begin at the batch's place in the cycle. What is left over at the beginning is not
    used.

    Args:
        history: shape (S, N), NaN is missing.
        length: steps in the batch, at least 1.

    Returns:
        A view of shape (S, m, length), m = N // length, oldest first.
    """
    count = history.shape[1] // length
    return history[:, history.shape[1] - count * length :].reshape(history.shape[0], count, length)


def window_t(statistic_history: Floats, statistic: Floats) -> WindowT:
    """Student reference for one new value of a statistic from its values in history's windows.

    With m values of mean c and standard deviation s (divisor m - 1): (statistic - c) / (s √(1 + 1/m)) follows
    Student's t on m - 1 degrees of freedom when windows are independent and the statistic is nearly normal: take the
    logarithm of a variance, atanh of a correlation, asin √ of a share first.

    Args:
        statistic_history: the statistic in history's windows, shape (S, m) or (S, m, L); NaN (a window in which it
            could not be computed) takes no part.
        statistic: the statistic in the batch, shape (S,) or (S, L).

    Returns:
        Centre, scale and degrees of freedom in the shape of ``statistic``; all NaN where the statistic is NaN or
        fewer than two windows have one. Degrees of freedom are m - 1 of the windows that have one.
    """
    seen = ~np.isnan(statistic_history)
    count = seen.sum(axis=1).astype(np.float64)
    able = (count >= 2) & ~np.isnan(statistic)
    m = np.where(able, count, np.nan)
    centre = np.where(seen, statistic_history, 0.0).sum(axis=1) / m
    with np.errstate(invalid="ignore"):
        apart = np.where(seen, statistic_history - np.expand_dims(centre, 1), 0.0)
    variance = (apart**2).sum(axis=1) / (m - 1)
    return WindowT(centre, np.sqrt(variance * (1 + 1 / m)), m - 1)


def count_windows(statistic_history: Floats) -> Ints:
    """How many of history's windows have the statistic, in the shape of one batch's statistic."""
    return np.asarray((~np.isnan(statistic_history)).sum(axis=1), dtype=np.int64)
