"""Slow and obvious twins of the sums over lags: one series, loops."""

import numpy as np


def sums(x, lags):
    """Box and Pierce's and Ljung and Box's sums of a complete series."""
    n, y = len(x), np.asarray(x) - np.mean(x)
    box_pierce = ljung_box = 0.0
    for k in range(1, lags + 1):
        r = sum(y[t] * y[t - k] for t in range(k, n)) / sum(v * v for v in y)
        box_pierce += n * r**2
        ljung_box += n * (n + 2) * r**2 / (n - k)
    return box_pierce, ljung_box


def cumulative(x, lags):
    """Give t' R^-1 t of Dalla, Giraitis and Phillips, pair by pair; missing values leave their products out."""
    e = np.asarray(x) - np.nanmean(x)
    n = len(e)
    products = [
        [e[t] * e[t - k] if t >= k and not np.isnan(e[t] * e[t - k]) else 0.0 for t in range(n)]
        for k in range(1, lags + 1)
    ]
    t = np.array([sum(row) / np.sqrt(sum(v * v for v in row)) for row in products])
    R = np.eye(lags)
    for j in range(lags):
        for k in range(lags):
            both = [a * b for a, b in zip(products[j], products[k], strict=True)]
            if j != k and abs(sum(both)) > 2 * np.sqrt(sum(v * v for v in both)):
                R[j, k] = sum(both) / np.sqrt(sum(a * a for a in products[j]) * sum(b * b for b in products[k]))
    if np.linalg.eigvalsh(R)[0] <= 1e-8:
        R = np.eye(lags)
    return t @ np.linalg.inv(R) @ t
