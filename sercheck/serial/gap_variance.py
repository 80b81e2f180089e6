"""What gaps add to the variance of sample autocorrelations; depends on numpy and ``serial`` only."""

from __future__ import annotations

import numpy as np

from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.autocovariances import good_length
from sercheck.serial.sampling_error import bartlett_variance


def gapped_variance(rho: Floats, seen: Bools, lag: int) -> Floats:
    """Large-sample variance of r_k times the rows that count, of series with gaps (after Parzen 1963).

    With values missing, the products and the squares of which r_k is the quotient stand on different rows, and for a
    persistent series that mismatch outweighs all else. Bartlett's sum over d becomes
    Σ_d [F_pp (ρ_d² + ρ_{d+k} ρ_{d-k}) - 4 ρ_k F_ps ρ_d ρ_{d-k} + 2 ρ_k² F_ss ρ_d²], where F compares how often two
    pairs (pp), a pair and a single row (ps) or two rows (ss) are observed d apart with what it would be had gaps fallen
    independently of each other; all F = 1 gives Bartlett's (1946) variance. Gaussian fourth moments are supposed.

    Args:
        rho: theoretical autocorrelations ρ_0 .. ρ_J, shape (S, J + 1).
        seen: which rows are observed, shape (S, T).
        lag: k, below T.

    Returns:
        Shape (S,): n var(r_k), n the complete pairs plus k, so that no gaps give ``bartlett_variance``.
    """
    steps = seen.shape[1]
    reach = min(rho.shape[1] - 1, steps // 2)
    size = good_length(steps + reach + 1)
    d = np.arange(-reach, reach + 1)
    single = seen.astype(np.float64)
    pair = single[:, : steps - lag] * single[:, lag:]
    one = np.ones((1, steps))
    ss, ps, pp = _together(single, pair, size, reach)
    all_ss, all_ps, all_pp = _together(one, one[:, lag:], size, reach)
    p, s = pair.mean(axis=1, keepdims=True), single.mean(axis=1, keepdims=True)
    known = (p > 0)[:, 0]
    p, s = np.where(p > 0, p, 1.0), np.where(s > 0, s, 1.0)
    wide = np.concatenate([rho, np.zeros((len(rho), reach + lag + 1))], axis=1)
    here, ahead, behind = wide[:, np.abs(d)], wide[:, np.abs(d + lag)], wide[:, np.abs(d - lag)]
    at = rho[:, lag : lag + 1]
    # So short a stretch may have no two pairs that far apart: unknown.
    all_ss, all_ps, all_pp = (np.where(together > 0.5, together, np.nan) for together in (all_ss, all_ps, all_pp))
    with np.errstate(invalid="ignore"):
        added = (
            (pp / all_pp / p**2 - 1) * (here**2 + ahead * behind)
            - 4 * at * (ps / all_ps / (p * s) - 1) * here * behind
            + 2 * at**2 * (ss / all_ss / s**2 - 1) * here**2
        )
    rows = pair.sum(axis=1) + lag
    total = (bartlett_variance(rho, lag) + added.sum(axis=1)) * rows / steps
    return np.where(known, total, np.nan)


def _together(single: Floats, pair: Floats, size: int, reach: int) -> tuple[Floats, Floats, Floats]:
    """How often two rows, a pair and a row, two pairs are observed d = -reach .. reach apart."""
    s, p = np.fft.rfft(single, size), np.fft.rfft(pair, size)
    return _count(s, s, size, reach), _count(p, s, size, reach), _count(p, p, size, reach)


def _count(first: np.ndarray, second: np.ndarray, size: int, reach: int) -> Floats:
    product = np.fft.irfft(first.conj() * second, size)
    counts: Floats = np.concatenate([product[:, size - reach :], product[:, : reach + 1]], axis=1)
    return counts


def row_counts(seen: Bools, lags: Ints) -> Ints:
    """Complete pairs plus lag at each lag, shape (S, L): the number of rows for a complete series; 0 without pairs."""
    steps = seen.shape[1]
    rows = np.zeros((len(seen), len(lags)), dtype=np.int64)
    whole = bool(seen.all())
    for column, lag in enumerate(lags.tolist()):
        if lag < steps:
            pairs = steps - lag if whole else np.count_nonzero(seen[:, : steps - lag] & seen[:, lag:], axis=1)
            rows[:, column] = np.where(np.asarray(pairs) > 0, pairs + lag, 0)
    return rows
