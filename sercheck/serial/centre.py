"""Takes scale and mean out of many series without losing digits; depends on numpy only."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sercheck.serial.arrays import Bools, Floats, Ints, as_series

ROUNDING = 8 * np.finfo(np.float64).eps
"""A spread under this share of the largest value is rounding noise (a few units in the last place of a double)."""


@dataclass(frozen=True)
class Centred:
    """Series with scale and mean taken out.

    Attributes:
        values: deviations from the mean of all observed values, in units of ``scale``; 0 where missing, shape (S, T).
        seen: observed, shape (S, T).
        n: observed values, shape (S,).
        mean: mean in the unit of the input, shape (S,); NaN when nothing was observed.
        scale: the power of two taken out, shape (S,).
        varies: the values differ by more than rounding noise, shape (S,).
    """

    values: Floats
    seen: Bools
    n: Ints
    mean: Floats
    scale: Floats
    varies: Bools

    @property
    def complete(self) -> bool:
        """No value of the block is missing."""
        return bool((self.n == self.seen.shape[1]).all())


def centred(x: object) -> Centred:
    """Take out a power of two and the mean of the observed values of each series.

    The power of two (exact) keeps squares of values such as 1e300 or 1e-300 within reach of doubles. The mean is taken
    twice: the deviations from a first mean are nearly exact, and their own mean removes what it missed.

    Args:
        x: one series or (S, T); NaN and infinite values are missing. What is centred already comes back as it is.
    """
    if isinstance(x, Centred):
        return x
    x = as_series(x)
    seen = ~np.isnan(x)
    n = seen.sum(axis=1)
    full = bool((n == x.shape[1]).all()) and x.shape[1] > 0
    low = x.min(axis=1) if full else np.min(x, axis=1, where=seen, initial=np.inf)
    high = x.max(axis=1) if full else np.max(x, axis=1, where=seen, initial=-np.inf)
    some = n > 0
    low, high = np.where(some, low, 0.0), np.where(some, high, 0.0)
    peak = np.maximum(np.abs(low), np.abs(high))
    # of 2^exponent at most 2^1022 is taken out, so that the scale and its inverse are doubles
    exponent = np.clip(np.frexp(peak)[1], -1021, 1022)
    unit = np.ldexp(1.0, -exponent)
    values = x * unit[:, None]
    if not full:
        np.copyto(values, 0.0, where=~seen)
    count = np.maximum(n, 1)
    first = values.sum(axis=1) / count
    values -= first[:, None]
    if not full:
        np.copyto(values, 0.0, where=~seen)
    rest = values.sum(axis=1) / count
    values -= rest[:, None]
    if not full:
        np.copyto(values, 0.0, where=~seen)
    varies = high * unit - low * unit > ROUNDING * peak * unit
    mean = np.where(some, np.ldexp(first + rest, exponent), np.nan)
    return Centred(values, seen, n, mean, np.ldexp(1.0, exponent), varies)
