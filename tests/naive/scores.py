"""Slow and obvious twins of the normal scores and of the window-t."""

from statistics import NormalDist

import numpy as np


def normal_score(value, history):
    """Score of one value in a list of observed values, by counting."""
    known = sorted({v for v in history if not np.isnan(v)})
    observed = [v for v in history if not np.isnan(v)]

    def score_of_known(v):
        less = sum(1 for w in observed if w < v)
        equal = sum(1 for w in observed if w == v)
        return NormalDist().inv_cdf((less + equal / 2) / len(observed))

    if value <= known[0]:
        return score_of_known(known[0])
    if value >= known[-1]:
        return score_of_known(known[-1])
    below = max(v for v in known if v <= value)
    above = min(v for v in known if v >= value)
    if below == above:
        return score_of_known(below)
    part = (value - below) / (above - below)
    return (1 - part) * score_of_known(below) + part * score_of_known(above)


def window_t(history, statistic):
    """T and degrees of freedom of one value against a list of earlier ones."""
    known = [v for v in history if not np.isnan(v)]
    m = len(known)
    mean = sum(known) / m
    variance = sum((v - mean) ** 2 for v in known) / (m - 1)
    return (statistic - mean) / (variance * (1 + 1 / m)) ** 0.5, m - 1
