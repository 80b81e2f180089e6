"""Slow and obvious twin of the rows that were seen before."""

import numpy as np


def comparable(stretch):
    """Whether a stretch is complete and no constant."""
    return not np.isnan(stretch).any() and len(set(stretch)) > 1


def seen_before(x, start, length):
    """Marks of one series' history and batch, stretch by stretch."""
    T = len(x)
    marks = np.full(T, np.nan)
    for here in range(T - length + 1):
        stretch = tuple(x[here : here + length])
        in_history, in_batch = here + length <= start, here >= start
        if not (in_history or in_batch) or not comparable(stretch):
            continue
        if in_history:
            others = [j for j in range(start - length + 1) if abs(j - here) >= length]
        else:
            others = range(here - length + 1)
        again = any(tuple(x[j : j + length]) == stretch for j in others)
        for row in range(here, here + length):
            marks[row] = np.nanmax([marks[row], float(again)])
    return marks[:start], marks[start:]
