"""How often rows recur in history, and how far a batch may go; numpy, ``scipy.special`` and ``serial``.

A mark is 1 (the row repeats something), 0 (it does not) or NaN (it cannot be said), as in ``rates``. Days differ: some
bring many repeats and some none. The spread of history's counts from batch to batch therefore enters the law.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from scipy import special

from sercheck.serial.arrays import Floats, Ints
from sercheck.serial.clusters import BLOCK, tally
from sercheck.serial.rates import Side
from sercheck.serial.window_t import windows

FEW_STRETCHES = 20
"""Stretches of history up to which the spread of their counts is not estimated (chosen on real feeds)."""

SPREAD_OF_FEW = 4.0
"""Ratio of the counts' variance to the binomial one that is taken then (chosen on real feeds)."""

LEAST_MIXING = 0.5
"""Smallest M of the beta-binomial: the widest law that is used (chosen on real feeds)."""


@dataclass(frozen=True)
class BetaBinomialShare:
    """The share of marked rows of a batch against history's; arrays of shape (S, 1), looks at the side 'upper'.

    With K of N rows marked in history, π = (K + ½)/(N + 1); τ = max(1, variance of the counts of history's stretches
    over the binomial variance), 4 with 20 stretches or fewer; M = (n − τ)/(τ − 1), at least ½ and at most N + 1;
    p = P(BetaBin(n, πM, (1 − π)M) ≥ k).

    Attributes:
        hits, rows: k and n of the batch.
        past_rows: N.
        rate: π.
        tau: τ.
        power: probability of ``detectable``.
    """

    hits: Floats
    rows: Floats
    past_rows: Floats
    rate: Floats
    tau: Floats
    power: float

    @property
    def bound(self) -> Floats:
        """History's share."""
        return np.where(self.past_rows > 0, self.rate, np.nan)

    @property
    def mixing(self) -> Floats:
        """M: how firmly each stretch keeps to the common rate."""
        with np.errstate(divide="ignore", invalid="ignore"):
            m = np.where(self.tau > 1, (self.rows - self.tau) / (self.tau - 1), np.inf)
        return np.minimum(self.past_rows + 1, np.maximum(LEAST_MIXING, m))

    @property
    def standard_error(self) -> Floats:
        """√(π(1 − π) τ/n)."""
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.where(self.rows > 0, np.sqrt(self.rate * (1 - self.rate) * self.tau / self.rows), np.nan)

    def _tails(self, read: Callable[[Floats, slice], Floats]) -> Floats:
        """Gather from the tails P(X ≥ 0), P(X ≥ 1), ... of a block of series at a time."""
        S, most = len(self.rows), int(np.max(self.rows, initial=0))
        out = np.full((S, 1), np.nan)
        a, b = self.rate * self.mixing, (1 - self.rate) * self.mixing
        k = np.arange(most)
        block = max(1, BLOCK // (most + 1))
        for first in range(0, S, block):
            part = slice(first, first + block)
            n, alpha, beta = self.rows[part], a[part], b[part]
            with np.errstate(divide="ignore", invalid="ignore"):
                left = np.maximum(n - k, 0)
                ratio = np.log(left * (k + alpha)) - np.log((k + 1) * (np.maximum(left - 1, 0) + beta))
            log_p = np.empty((len(n), most + 1))
            log_p[:, :1] = special.betaln(alpha, n + beta) - special.betaln(alpha, beta)
            log_p[:, 1:] = log_p[:, :1] + np.cumsum(ratio, axis=1)
            tails = np.minimum(1.0, np.cumsum(np.exp(log_p)[:, ::-1], axis=1)[:, ::-1])
            out[part] = read(tails, part)
        return np.where((self.rows > 0) & (self.past_rows > 0), out, np.nan)

    def p_value(self, side: Side) -> Floats:
        """P(X ≥ hits); NaN on the lower side, where it does not look."""
        if side == "lower":
            return np.full(self.rows.shape, np.nan)

        def read(tails: Floats, part: slice) -> Floats:
            return np.take_along_axis(tails, self.hits[part].astype(np.int64), axis=1)

        return self._tails(read)

    def limit_hits(self, risk: Floats) -> Floats:
        """The fewest marked rows whose p-value is within the risk; NaN where there are none."""
        level = np.broadcast_to(np.asarray(risk, dtype=np.float64), self.rows.shape)

        def read(tails: Floats, part: slice) -> Floats:
            hits = np.count_nonzero(tails > level[part], axis=1)[:, None].astype(np.float64)
            return np.where((hits <= self.rows[part]) & ~np.isnan(level[part]), hits, np.nan)

        return self._tails(read)

    def limit(self, side: Side, risk: Floats) -> Floats:
        """The share at which the p-value comes within ``risk``; NaN where no share does."""
        if side == "lower":
            return np.full(self.rows.shape, np.nan)
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.where(self.rows > 0, self.limit_hits(risk) / self.rows, np.nan)

    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        """The limit did every stretch keep to the common rate (τ = 1)."""
        return replace(self, tau=np.ones(self.tau.shape)).limit(side, risk)

    def detectable(self, side: Side, risk: Floats) -> Floats:
        """Distance from history's share to the one that reaches the limit with probability ``power``."""
        if side == "lower":
            return np.full(self.rows.shape, np.nan)
        hits, rows = self.limit_hits(risk) / self.tau, self.rows / self.tau
        change: Floats = special.betaincinv(hits, rows - hits + 1.0, self.power) - self.rate
        return change


def beta_binomial_share(past: Floats, batch: Floats, power: float, clump: Ints | float = 1.0) -> BetaBinomialShare:
    """Learn the law of a batch's share of marks from history's.

    Args:
        past: marks of history, shape (S, N).
        batch: marks of the batch, shape (S, n); history's stretches are as long.
        power: probability of ``detectable``.
        clump: marks c that one event makes at least, shape (S,) or a number: τ is no smaller (a history without
            events cannot tell it) and π = (K + c/2)/(N + c), half an event more than was seen.
    """
    K, N = (count.astype(np.float64) for count in tally(past))
    hits, rows = (count.astype(np.float64) for count in tally(batch))
    tau = np.maximum(clump, spread_of_counts(past, batch.shape[1]))
    column = (slice(None), None)
    rate = (K + 0.5 * clump) / (N + clump)
    return BetaBinomialShare(hits[column], rows[column], N[column], rate[column], tau[column], power)


def spread_of_counts(past: Floats, length: int) -> Floats:
    """Variance of the counts of marks in history's stretches over the binomial variance, at least 1, shape (S,).

    Σ (k_d − n_d π)² / Σ n_d π (1 − π), d over the stretches with rows; 4 with 20 stretches or fewer; 1 where all rows
    are alike.
    """
    cut = windows(past, length)
    hits = np.nansum(cut, axis=2)
    rows = np.count_nonzero(~np.isnan(cut), axis=2)
    used = np.count_nonzero(rows, axis=1)
    with np.errstate(divide="ignore", invalid="ignore"):
        share = (hits.sum(axis=1) / rows.sum(axis=1))[:, None]
        ratio = ((hits - rows * share) ** 2).sum(axis=1) / (rows * share * (1 - share)).sum(axis=1)
    spread = np.where(np.isfinite(ratio), np.maximum(1.0, ratio), 1.0)
    return np.where(used > FEW_STRETCHES, spread, SPREAD_OF_FEW)
