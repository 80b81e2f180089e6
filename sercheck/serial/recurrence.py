"""How often and how long rows recur in history, and how far a batch may go; numpy, ``scipy.special`` and ``rates``.

A mark is 1 (the row repeats something), 0 (it does not) or NaN (it cannot be said), as in ``rates``. Days differ: some
bring many repeats and some none. The spread of history's counts from batch to batch therefore enters the law.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from scipy import special

from sercheck.serial.arrays import Floats, Ints
from sercheck.serial.clusters import BLOCK, tally
from sercheck.serial.rates import Side, first_within
from sercheck.serial.window_t import windows

FEW_STRETCHES = 20
"""Stretches of history up to which the spread of their counts is not estimated (chosen on real feeds)."""

SPREAD_OF_FEW = 4.0
"""Ratio of the counts' variance to the binomial one that is taken then (chosen on real feeds)."""

LEAST_MIXING = 0.5
"""Smallest M of the beta-binomial: the widest law that is used (chosen on real feeds)."""

SAME_RUNS = 10
"""Runs of history that a length must have to anchor the tail of the law of runs (chosen by simulation)."""


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


@dataclass(frozen=True)
class RunLaw(ABC):
    """The longest run of marked rows in a batch; arrays of shape (S, 1), looks at the side 'upper'.

    Observed and limits are told as the number of equal values: a run of r marks is r + 1 of them.

    Attributes:
        longest: marks in the batch's longest run.
        rows: rows of the batch that can be marked.
    """

    longest: Floats
    rows: Floats

    @abstractmethod
    def tail(self, marks: Floats) -> Floats:
        """Probability that a batch holds a run of at least that many marks (1 for none)."""

    @abstractmethod
    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        """The limit did marks come independently."""

    @property
    def bound(self) -> Floats:
        """The longest run that half of history's batches stay under."""
        half = np.fmin(first_within(self.tail, self.rows, np.asarray(0.5)), self.rows)
        return np.where(self.rows > 0, half, np.nan)

    @property
    def standard_error(self) -> Floats:
        """None: a run has a law of its own."""
        return np.full(self.rows.shape, np.nan)

    def p_value(self, side: Side) -> Floats:
        """Probability of a run this long or longer; NaN on the lower side."""
        if side == "lower":
            return np.full(self.rows.shape, np.nan)
        return np.where(self.rows > 0, self.tail(self.longest), np.nan)

    def limit(self, side: Side, risk: Floats) -> Floats:
        """The shortest run, in equal values, whose p-value is within ``risk``; NaN where none is."""
        if side == "lower":
            return np.full(self.rows.shape, np.nan)
        return first_within(self.tail, self.rows, risk) + 1.0

    def detectable(self, side: Side, risk: Floats) -> Floats:
        """Distance from the bound to the limit: a run that reaches it is always found."""
        return self.limit(side, risk) - self.bound


@dataclass(frozen=True)
class ChainRuns(RunLaw):
    """Runs of a two-state chain: P(a run of r) = 1 − exp(−n p01 p11^{r−1}).

    Attributes:
        enters: p01, the chance that a marked row follows an unmarked one.
        stays: p11, the chance that a marked row follows a marked one, raised to that after three where larger.
        share: share of marked rows (for rows that know nothing of each other).
    """

    enters: Floats
    stays: Floats
    share: Floats

    def tail(self, marks: Floats) -> Floats:
        """1 − exp(−n p01 p11^{r−1})."""
        return np.where(marks > 0, -np.expm1(-self.rows * self.enters * self.stays ** np.maximum(marks - 1, 0)), 1.0)

    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        return replace(self, enters=self.share, stays=self.share).limit(side, risk)


@dataclass(frozen=True)
class PastRuns(RunLaw):
    """Runs against the runs of a stationary history: p = 1 − exp(−n λ/N).

    u is the longest length that at least ten of history's runs reach (1 where there are not ten), K of them, with e
    further marks: beyond u, λ = K B(e + 1 + r − u, K + ½)/B(e + 1, K + ½) runs of r are expected in history (a
    geometric tail with its rate unknown); up to u, λ is their number. With fewer than ten runs in all, u = 1 and the
    rate is estimated as everywhere here: λ = (K + ½) q^{r−1}, q = (e + ½)/(e + K + 1).

    Attributes:
        past_rows: N.
        runs: marks in each run of history at its last row, 0 elsewhere, shape (S, N).
        share: share of marked rows of history.
        anchor: u, K and e.
    """

    past_rows: Floats
    runs: Ints
    share: Floats
    anchor: tuple[Floats, Floats, Floats]

    def tail(self, marks: Floats) -> Floats:
        """1 − exp(−n λ/N)."""
        u, K, e = self.anchor
        further = np.maximum(marks - u, 0)
        tail = np.exp(special.betaln(e + 1 + further, K + 0.5) - special.betaln(e + 1, K + 0.5))
        scarce = (K + 0.5) * ((e + 0.5) / (e + K + 1.0)) ** further
        beyond = np.where(K < SAME_RUNS, scarce, K * tail)
        counted = np.count_nonzero(self.runs >= np.maximum(marks, 1), axis=1)[:, None]
        expected = np.where(marks > u, beyond, np.maximum(counted, beyond))
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.where(marks > 0, -np.expm1(-self.rows * expected / self.past_rows), 1.0)

    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        return ChainRuns(self.longest, self.rows, self.share, self.share, self.share).limit(side, risk)


def chain_runs(past: Floats, batch: Floats) -> ChainRuns:
    """Learn the chain of marks from history, shape (S, N); judge the batch's longest run, shape (S, n).

    Every chance is (count + ½)/(cases + 1); that after three marks counts only where history has three in a row.
    """
    now, then = past[:, :-1] == 1, past[:, 1:]
    after = then == 1
    enters = _chance((past[:, :-1] == 0) & ~np.isnan(then), after)
    stays = _chance(now & ~np.isnan(then), after)
    if past.shape[1] > 3:
        three = now[:, 2:] & now[:, 1:-1] & now[:, :-2] & ~np.isnan(then[:, 2:])
        longer = _chance(three, after[:, 2:])
        stays = np.where(three.any(axis=1), np.maximum(stays, longer), stays)
    K, N = tally(past)
    longest, rows = longest_run(batch), tally(batch)[1]
    column = (slice(None), None)
    share = (K + 0.5) / (N + 1)
    rows_seen = np.where(N > 0, rows, 0).astype(np.float64)
    return ChainRuns(longest[column], rows_seen[column], enters[column], stays[column], share[column])


def _chance(cases: np.ndarray, after: np.ndarray) -> Floats:
    share: Floats = (np.count_nonzero(cases & after, axis=1) + 0.5) / (np.count_nonzero(cases, axis=1) + 1.0)
    return share


def past_runs(past: Floats, batch: Floats) -> PastRuns:
    """Hold the batch's longest run, shape (S, n), against the runs of a stationary history, shape (S, N)."""
    lengths = run_lengths(past)
    ends = np.ones(past.shape, dtype=bool)
    ends[:, :-1] = lengths[:, 1:] <= lengths[:, :-1]
    runs = np.where(ends, lengths, 0)
    K, N = tally(past)
    rows = np.where(N > 0, tally(batch)[1], 0).astype(np.float64)
    column = (slice(None), None)
    share = (K + 0.5) / (N + 1)
    return PastRuns(
        longest_run(batch)[column],
        rows[column],
        N[column].astype(np.float64),
        runs,
        share[column],
        _anchor(runs),
    )


def _anchor(runs: Ints) -> tuple[Floats, Floats, Floats]:
    place = runs.shape[1] - SAME_RUNS
    u = np.ones(len(runs), dtype=np.int64)
    if place >= 0:
        u = np.maximum(1, np.partition(runs, place, axis=1)[:, place])
    reach = runs >= u[:, None]
    K = np.count_nonzero(reach, axis=1).astype(np.float64)
    e = np.where(reach, runs - u[:, None], 0).sum(axis=1)
    return u[:, None].astype(np.float64), K[:, None], e[:, None].astype(np.float64)


def run_lengths(marks: Floats) -> Ints:
    """Marks in a row up to and with each step, 0 at unmarked and missing ones, shape (S, T)."""
    steps = np.arange(1, marks.shape[1] + 1)
    broken = np.maximum.accumulate(np.where(marks == 1, 0, steps), axis=1)
    return np.asarray(steps - broken, dtype=np.int64)


def longest_run(marks: Floats) -> Floats:
    """Marks in the longest run, shape (S,)."""
    longest: Floats = run_lengths(marks).max(axis=1, initial=0).astype(np.float64)
    return longest
