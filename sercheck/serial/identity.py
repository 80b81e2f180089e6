"""Does a window go on the history of another series; depends on numpy and ``serial`` only."""

from __future__ import annotations

import numpy as np

from sercheck.serial.arrays import Floats, Ints
from sercheck.serial.foreseen import Foreseen, power

ALIKE = 0.25
"""Mean squared distance of two profiles, in variances of what the profile leaves, below which they are the same: half
a standard deviation."""

BLOCK = 1 << 22
"""Pairs of series compared at a time."""


def likeliest_other(law: Foreseen) -> tuple[Ints, Floats]:
    """The other series whose foretold values are nearest to each window, and how well its history goes on with it.

    Returns:
        The other series, shape (S,), and the window's log-likelihood under its law less ln(S − 1) for the search,
        shape (S,); -inf for a single series.
    """
    S = len(law.window)
    if S < 2:
        return np.zeros(S, dtype=np.int64), np.full(S, -np.inf)
    usual = np.nan_to_num(law.usual())
    seen = ~np.isnan(law.window)
    x = np.where(seen, law.window, 0.0)
    squares = usual**2
    other = np.empty(S, dtype=np.int64)
    block = max(1, BLOCK // S)
    for first in range(0, S, block):
        rows = slice(first, first + block)
        apart = seen[rows] @ squares.T - 2 * x[rows] @ usual.T
        apart[np.arange(len(apart)), np.arange(first, first + len(apart))] = np.inf
        other[rows] = np.argmin(apart, axis=1)
    theirs = law.rows(other)
    e = theirs.innovations(law.window)
    total, count = power(e)
    n = seen.sum(axis=1).astype(np.float64)
    score = theirs.likelihood(total, count, n) + theirs.stretching(law.window) - np.log(max(S - 1, 1))
    apart = ((usual - usual[other]) ** 2).mean(axis=1)
    return other, np.where(apart > ALIKE * np.exp(law.scatters.centre), score, -np.inf)
