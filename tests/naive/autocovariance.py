"""Slow and obvious twins of the autocovariances."""

import math
from fractions import Fraction
from itertools import pairwise


def autocorrelation(x, lag):
    """Sum over the complete pairs, divided by their number plus the lag; the same at lag 0 below it."""
    here = [value for value in x if not math.isnan(value)]
    mean = math.fsum(here) / len(here)
    pairs = [
        (x[t] - mean) * (x[t + lag] - mean)
        for t in range(len(x) - lag)
        if not math.isnan(x[t]) and not math.isnan(x[t + lag])
    ]
    if not pairs:
        return math.nan
    power = math.fsum((value - mean) ** 2 for value in here) / len(here)
    return math.fsum(pairs) / (len(pairs) + lag) / power


def exact_lag_one(x):
    """Lag-one autocorrelation of a complete series in rational numbers, rounded once."""
    values = [Fraction(float(value)) for value in x]
    mean = sum(values) / len(values)
    d = [value - mean for value in values]
    return float(sum(a * b for a, b in pairwise(d)) / sum(a * a for a in d))
