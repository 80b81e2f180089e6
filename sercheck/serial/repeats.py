"""Values that repeat or follow from their neighbours: exact evidence on every series; depends on numpy and ``serial``.

All functions take one series or a (series, time) array; NaN is missing, never closed up: what a missing value touches
is neither counted for nor against.
"""

from __future__ import annotations

import numpy as np
from scipy import special

from sercheck.serial.arrays import Floats, as_series
from sercheck.serial.runs import longest_run as _longest_marks

COMMON_END = 0.05
"""Share from which a commonest value at an end of the range is a resting state, such as zero at night (real feeds)."""

DECIMALS = 8
"""Decimals up to which a common rounding of a series is looked for."""

FLOAT_SLACK = 8 * float(np.finfo(np.float64).eps)
"""Relative error that halving and adding three floats can leave."""


def equal_to_earlier(x: object, lag: int = 1) -> Floats:
    """Mark the rows that equal the row ``lag`` steps before: 1, 0, or NaN where either is missing, shape (S, T)."""
    values = as_series(x)
    marks = np.full(values.shape, np.nan)
    now, then = values[:, lag:], values[:, : values.shape[1] - lag]
    marks[:, lag:] = np.where(np.isnan(now) | np.isnan(then), np.nan, now == then)
    return marks


def equal_share(x: object, lag: int = 1) -> Floats:
    """Share of rows that equal the row ``lag`` steps before, shape (S,); NaN where no pair is complete."""
    return share_of(equal_to_earlier(x, lag))


def longest_equal_run(x: object) -> Floats:
    """Number of equal values in the longest unbroken run, shape (S,): 1 without repeats, NaN without values."""
    values = as_series(x)
    run = _longest_marks(equal_to_earlier(values)) + 1.0
    return np.where(np.isnan(values).all(axis=1), np.nan, run)


def share_of(marks: Floats) -> Floats:
    """Share of marked rows among those that can be marked, shape (S,); NaN where there are none."""
    rows = np.count_nonzero(~np.isnan(marks), axis=1)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.where(rows > 0, np.nansum(marks, axis=1) / rows, np.nan)


def rounding(x: object) -> Floats:
    """The decimal step that all values of a series are whole multiples of, 1 to 1e-8, shape (S,); 0 where none is."""
    values = as_series(x)
    step = np.zeros(len(values))
    size = np.where(np.isnan(values), 0.0, np.abs(values))
    for decimals in range(DECIMALS, -1, -1):
        scaled = values * 10.0**decimals
        slack = np.minimum(FLOAT_SLACK * size * 10.0**decimals, 0.01)
        whole = (np.abs(scaled - np.round(scaled)) <= slack) | np.isnan(values)
        step = np.where(whole.all(axis=1), 10.0**-decimals, step)
    return step


def midpoints(x: object) -> Floats:
    """Mark the rows that lie half-way between their neighbours, within rounding, shape (S, T).

    x_t = (x_{t−1} + x_{t+1})/2 up to half of the step that the series is rounded to. Stretches of three equal values
    are no evidence of filling in by a line and are not marked. NaN where a neighbour is missing.
    """
    values = as_series(x)
    marks = np.full(values.shape, np.nan)
    if values.shape[1] < 3:
        return marks
    before, here, after = values[:, :-2], values[:, 1:-1], values[:, 2:]
    size = np.abs(before) + np.abs(here) + np.abs(after)
    apart = np.abs(here - (before + after) / 2)
    within = apart <= rounding(values)[:, None] / 2 + FLOAT_SLACK * size
    level = (before == here) & (here == after)
    marks[:, 1:-1] = np.where(np.isnan(size), np.nan, within & ~level)
    return marks


def midpoint_share(x: object) -> Floats:
    """Share of rows half-way between their neighbours (``midpoints``), shape (S,)."""
    return share_of(midpoints(x))


def rise_share(x: object) -> Floats:
    """Share of steps that go up, among steps between two observed values, shape (S,): 1 for a sorted series."""
    values = as_series(x)
    step = np.diff(values, axis=1)
    return share_of(np.where(np.isnan(step), np.nan, step > 0))


def odd_minus_even(x: object) -> Floats:
    """Mean of the odd rows (second, fourth, ...) less that of the even ones, trend taken out, shape (S,).

    The mean of (−1)^t [x_t − (x_{t−1} + x_{t+1})/2] over complete triples: a cycle or a trend cancels, two sources
    that take turns stand out with their whole distance. NaN without a complete triple.
    """
    values = as_series(x)
    if values.shape[1] < 3:
        return np.full(len(values), np.nan)
    bend = values[:, 1:-1] - (values[:, :-2] + values[:, 2:]) / 2
    sign = np.where(np.arange(bend.shape[1]) % 2 == 0, 1.0, -1.0)
    return share_of(bend * sign)


def resting_value(x: object) -> Floats:
    """The commonest value of each series where it is an end of the range and more than 5 % of the rows, else NaN.

    Zero at night is the usual case: its repeats say nothing of the feed's health. Shape (S,).
    """
    values = as_series(x)
    n = np.count_nonzero(~np.isnan(values), axis=1)
    most = _commonest_count(values)
    lowest = np.fmin.reduce(values, axis=1, initial=np.nan)
    highest = np.fmax.reduce(values, axis=1, initial=np.nan)
    result = np.full(len(values), np.nan)
    for end in (lowest, highest):
        count = np.count_nonzero(values == end[:, None], axis=1)
        result = np.where((count == most) & (count > COMMON_END * n), end, result)
    return result


def _commonest_count(values: Floats) -> np.ndarray:
    """How often the commonest value of each series occurs, shape (S,)."""
    if not values.shape[1]:
        return np.zeros(len(values), dtype=np.int64)
    ordered = np.sort(values, axis=1)
    steps = np.arange(values.shape[1])
    starts = np.ones(ordered.shape, dtype=bool)
    starts[:, 1:] = ordered[:, 1:] != ordered[:, :-1]  # NaN differs from NaN: each counts once
    first = np.maximum.accumulate(np.where(starts, steps, 0), axis=1)
    return np.asarray((steps - first).max(axis=1) + 1)


def runs_test(above: object) -> tuple[Floats, Floats, Floats, Floats]:
    """Runs of two kinds against their number in random order (Wald and Wolfowitz 1940).

    With n1 and n2 rows of each kind: mean 2 n1 n2/n + 1, variance 2 n1 n2 (2 n1 n2 − n)/(n² (n − 1)), normal law.

    Args:
        above: 1 and 0 (or True and False), one series or shape (S, T); NaN takes no part and ends a run.

    Returns:
        Runs, their mean, their variance and the two-sided p-value, each of shape (S,); NaN where a kind is missing.
    """
    marks = as_series(above)
    n1 = np.count_nonzero(marks == 1, axis=1).astype(np.float64)
    n2 = np.count_nonzero(marks == 0, axis=1).astype(np.float64)
    n = n1 + n2
    before = np.full_like(marks, np.nan)
    before[:, 1:] = marks[:, :-1]
    runs = np.count_nonzero((marks != before) & ~np.isnan(marks), axis=1).astype(np.float64)
    with np.errstate(divide="ignore", invalid="ignore"):
        mean = 2 * n1 * n2 / n + 1
        variance = 2 * n1 * n2 * (2 * n1 * n2 - n) / (n**2 * (n - 1))
        p = 2 * special.ndtr(-np.abs(runs - mean) / np.sqrt(variance))
    able = (n1 > 0) & (n2 > 0) & (variance > 0)
    return tuple(np.where(able, out, np.nan) for out in (runs, mean, variance, p))  # type: ignore[return-value]
