"""Slow and obvious twins of the size of clusters and of the first count within a risk."""

import numpy as np


def cluster_size(marks):
    """Geyer's initial monotone sequence of one row of marks, lag by lag; NaN pairs are left out."""
    T = len(marks)
    known = [m for m in marks if not np.isnan(m)]
    if len(set(known)) < 2:
        return 1.0
    mean = sum(known) / len(known)
    variance = sum((m - mean) ** 2 for m in known) / len(known)
    r = []
    for lag in range(T):
        if lag >= T / 4:
            break
        products = [(marks[t] - mean) * (marks[t + lag] - mean) for t in range(T - lag)]
        products = [p for p in products if not np.isnan(p)]
        r.append(sum(products) / (len(products) + lag) / variance)
    total, last = 0.0, np.inf
    for m in range(len(r) // 2):
        pair = r[2 * m] + r[2 * m + 1]
        if pair <= 0:
            break
        last = min(last, pair)
        total += last
    return max(1.0, -1.0 + 2.0 * total) if len(r) >= 2 else 1.0
