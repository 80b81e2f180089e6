"""Slow and obvious twins of the seasonal numerics: one series at a time, sums written out."""

import cmath
import math

import numpy as np
from scipy import stats


def phase_means(x, phase, length):
    """Means and counts of the observed values at each place of the cycle."""
    pairs = [(value, place) for value, place in zip(x, phase, strict=True) if not math.isnan(value)]
    held = [[value for value, place in pairs if place == j] for j in range(length)]
    return [sum(values) / len(values) if values else math.nan for values in held], [len(values) for values in held]


def detrended(x):
    """Residuals of a least-squares line over the observed values."""
    seen = ~np.isnan(x)
    t = np.arange(len(x), dtype=float)
    design = np.column_stack([np.ones(seen.sum()), t[seen]])
    line = np.linalg.lstsq(design, x[seen], rcond=None)[0]
    return x - line[0] - line[1] * t


def spectral_f(x, length):
    """F of each harmonic and the combined p-value, every ordinate a sum of its own."""
    cycles = len(x) // length
    rest = np.nan_to_num(detrended(x[len(x) - cycles * length :]))
    n = len(rest)

    def ordinate(j):
        return abs(sum(value * cmath.exp(-2j * math.pi * j * t / n) for t, value in enumerate(rest))) ** 2

    m = (cycles - 1) // 2
    f = []
    for h in range(1, min(3, (length - 1) // 2) + 1):
        beside = [ordinate(cycles * h + k) for k in range(-m, m + 1) if k]
        f.append(ordinate(cycles * h) / (sum(beside) / len(beside)))
    p = [stats.f.sf(value, 2, 4 * m) for value in f]
    return f, stats.combine_pvalues(p, method="fisher").pvalue


def whitened(x, coefficients):
    """e_t = x_t - Σ a_j x_{t-j}; NaN where one of the values is missing."""
    order = len(coefficients)
    return np.array(
        [
            math.nan if t < order else x[t] - sum(a * x[t - j] for j, a in enumerate(coefficients, start=1))
            for t in range(len(x))
        ]
    )


def regression(y, *columns):
    """Coefficients, their variances over σ², residual sum and rows of y on [1, columns]."""
    kept = ~np.isnan(np.column_stack([y, *columns])).any(axis=1)
    design = np.column_stack([np.ones(kept.sum()), *(column[kept] for column in columns)])
    beta = np.linalg.lstsq(design, y[kept], rcond=None)[0]
    rss = float(np.sum((y[kept] - design @ beta) ** 2))
    return beta[1:], np.diag(np.linalg.inv(design.T @ design))[1:], rss, int(kept.sum())


def amplitude(batch, profile, coefficients, variance, cycles, widening):
    """(â/λ, its error, points) of the matched filter."""
    y, p = whitened(batch, coefficients), whitened(profile, coefficients)
    (a,), (weight,), rss, m = regression(y, p)
    shrinkage = 1 - variance * (m - 1) * weight / cycles
    return a / shrinkage, math.sqrt(rss / (m - 2) * weight * widening) / shrinkage, m


def slip(batch, still, ahead, behind, coefficients, widening):
    """(γ or 0, its error, freedom) of a slip by the distance of ``ahead`` and ``behind``."""
    y, p, up, down = (whitened(x, coefficients) for x in (batch, still, ahead, behind))
    beta, weights, rss, m = regression(y, p, (up + down) / 2 - p, (down - up) / 2)
    moved = down if beta[2] > 0 else up
    better = regression(y, moved)
    value = beta[2] if better[2] < regression(y, p)[2] and better[0][0] >= 0 else 0.0
    return value, math.sqrt(rss / (m - 4) * weights[2] * widening), m - 4
