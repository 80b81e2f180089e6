"""Slow and obvious twins of the walk-forward profile, the one-step forecast and the longer look: one series, loops."""

from __future__ import annotations

import numpy as np


def profile(y, phase, length, delay, gain):
    """The profile known ``delay`` steps (in whole cycles) before each step, its own place in the cycle."""
    lag = max(1, -(-delay // length))
    cycle = np.cumsum(np.r_[0, np.diff(phase) < 0])
    known = np.full(len(y), np.nan)
    p, seen, sizes = np.zeros(length), np.zeros(length, dtype=int), [[] for _ in range(length)]
    after = []
    for c in range(cycle.max() + 1):
        usual = [np.median(size[-5:]) if size else 0.0 for size in sizes]
        for place in range(length):
            at = np.flatnonzero((cycle == c) & (phase == place))
            if not len(at) or np.isnan(y[at[0]]):
                continue
            d = y[at[0]] - p[place]
            cap = 4 * max(usual[place], np.median(usual))
            if seen[place]:
                sizes[place].append(abs(d))
            p[place] += max(1 / (seen[place] + 1), gain) * (np.clip(d, -cap, cap) if seen[place] >= 5 else d)
            seen[place] += 1
        after.append(np.where(seen >= 2, p, np.nan))
    for c in range(lag, cycle.max() + 1):
        here = cycle == c
        known[here] = after[c - lag][phase[here]]
    return known


def forecast(table):
    """Centre, scale and misses of the last entry by an explicit regression."""
    week = np.full(len(table), np.nan)
    for d in range(7, len(table)):
        last = table[d - 7 : d]
        if np.isfinite(last).sum() >= 4:
            week[d] = np.nanmean(last)
    before = np.r_[np.nan, table[:-1]]
    before = np.where(np.isnan(before), week, before)
    rows = [d for d in range(len(table) - 1) if np.isfinite(table[d]) and np.isfinite(week[d])]
    X = np.column_stack([before[rows], week[rows]])
    mean_x, mean_y = X.mean(axis=0), table[rows].mean()
    X = X - mean_x
    inverse = np.linalg.inv(X.T @ X + 1e-3 * (X[:, 0] ** 2).sum() * np.eye(2))
    slopes = inverse @ X.T @ (table[rows] - mean_y)
    h = 1 / len(rows) + np.einsum("ij,jk,ik->i", X, inverse, X)
    r = (table[rows] - mean_y - X @ slopes) / np.sqrt(1 - h)
    s = np.sqrt(np.mean(r**2))
    now = np.array([before[-1], week[-1]]) - mean_x
    misses = np.full(len(table) - 1, np.nan)
    misses[rows] = r / s
    return mean_y + now @ slopes, s * np.sqrt(1 + min(1, 1 / len(rows) + now @ inverse @ now)), misses


def look(misses, held):
    """Sum carried and the divisor of the longer look."""
    told = np.where(held, np.nan, misses)
    past = []
    for d in range(len(told)):
        last = told[max(0, d - 6) : d + 1]
        if np.isfinite(told[d]) and np.isfinite(last).sum() >= 4:
            past.append(np.nansum(last) / np.sqrt(np.isfinite(last).sum()))
    last = told[-6:]
    k = 1 + np.isfinite(last).sum()
    return np.nansum(last), np.sqrt(k) * max(1, np.sqrt(np.mean(np.square(past)))) if k >= 4 else np.nan
