"""Slow and obvious twins of the long-run variances, change points and distances."""

import numpy as np


def cosine_powers(x):
    """Λ_j² by the sum that defines it."""
    steps = len(x)
    mean = sum(x) / steps
    powers = []
    for j in range(1, steps):
        total = sum((x[t] - mean) * np.cos(np.pi * j * (t + 0.5) / steps) for t in range(steps))
        powers.append(2 / steps * total**2)
    return np.array(powers)


def batch_mean_variance(history, n):
    """Variance of the mean of n rows and degrees of freedom, by the formula of section and paper."""
    powers, steps = cosine_powers(history), len(history)
    omega = np.pi * np.arange(1, steps) / steps
    w = (np.sin(n * omega / 2) / (n * np.sin(omega / 2))) ** 2
    return (w * powers).sum() / w.sum() / n, w.sum() ** 2 / (w**2).sum()


def bridge_weights(n, steps):
    """Σ_k |Σ_t C_k(t) exp(iωt)|² by loops."""
    weights = []
    for j in range(1, steps):
        omega, total = np.pi * j / steps, 0.0
        for k in range(1, n + 1):
            total += abs(sum(((t <= k) - k / n) * np.exp(1j * omega * t) for t in range(1, n + 1))) ** 2
        weights.append(total)
    return np.array(weights)


def self_normalized(x):
    """Shao and Zhang's statistic by its definition."""
    n, y = len(x), np.asarray(x) - np.mean(x)
    largest = 0.0
    for k in range(1, n):
        left = sum((y[:t].sum() - t / k * y[:k].sum()) ** 2 for t in range(1, k + 1))
        right = sum((y[t - 1 :].sum() - (n - t + 1) / (n - k) * y[k:].sum()) ** 2 for t in range(k + 1, n + 1))
        largest = max(largest, (y[:k].sum() ** 2 / n) / ((left + right) / n**2))
    return largest


def distance(a, b):
    """Largest distance of two empirical distribution functions, at every value of either."""
    return max(abs(np.mean(a <= v) - np.mean(b <= v)) for v in np.concatenate([a, b]))
