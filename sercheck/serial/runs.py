"""How long rows recur in history, and how long they may in a batch; numpy, ``scipy.special`` and ``serial``.

A mark is 1 (the row repeats something), 0 (it does not) or NaN (it cannot be said), as in ``rates``.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass

import numpy as np
from scipy import special

from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.clusters import tally
from sercheck.serial.rates import Side, first_within

SAME_RUNS = 10
"""Runs of history that a length must have to anchor the tail of the law of runs (chosen by simulation)."""

PLACE_PRIOR = 100.0
"""Cases that the chance over all places weighs beside those of one place (chosen on real feeds)."""

ROUNDING = 1e-9
"""Relative difference of two products of the same chances, multiplied in another order."""


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
    """Runs of a two-state chain whose chances go with the place in the batch (the hour of the day, for a day).

    A run of r marks that begins at place s has the weight w(s, r) = e_s q_{s+1} … q_{s+r-1}: what stands still at noon
    is odder than what stands still at night. The most telling run of the batch is judged, the one of least weight w:
    P = 1 − exp(−Σ_s w(s, r_s)), r_s the fewest marks from place s on that weigh no more than w (Poisson clumping,
    Aldous 1989; places go round, as if the next batch came after). With the same chances everywhere it is the longest
    run, and P is 1 − exp(−n p01 p11^{r−1}).

    Attributes:
        enters: chance e_s that a marked row at the place follows an unmarked one, shape (S, n).
        stays: chance q_s that it follows a marked one, shape (S, n).
        place: where the most telling run begins, shape (S,).
        first: chance of its first mark: ``stays`` where it goes on from before the batch, else ``enters``, shape (S,).
        share: share of marked rows (for rows that know nothing of each other).
    """

    enters: Floats
    stays: Floats
    place: Ints
    first: Floats
    share: Floats

    def tail(self, marks: Floats) -> Floats:
        """P of a run of so many marks at the place of the most telling one."""
        weight = self._weight(marks[:, 0])
        n = self.stays.shape[1]
        series, places = np.arange(len(weight)), np.arange(n)
        expected = np.zeros(len(weight))
        here = self.enters.copy()
        left = np.ones(here.shape, dtype=bool)
        for step in range(1, n + 1):
            reached = left & (here <= weight[:, None] * (1 + ROUNDING))
            expected += np.where(reached, here, 0.0).sum(axis=1)
            left &= ~reached
            if not left.any() or step == n:
                break
            here = here * self.stays[np.ix_(series, (places + step) % n)]
        share_seen = self.rows[:, 0] / n
        return np.where(marks > 0, -np.expm1(-expected * share_seen)[:, None], 1.0)

    def _weight(self, marks: Floats) -> Floats:
        """Weight of a run of so many marks that begins at ``place``, shape (S,)."""
        n = self.stays.shape[1]
        weight = self.first.copy()
        for step in range(1, int(min(np.max(marks, initial=0.0), n))):
            on = np.take_along_axis(self.stays, ((self.place + step) % n)[:, None], axis=1)[:, 0]
            weight = np.where(step < marks, weight * on, weight)
        return weight

    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        return chain_alike(self.longest, self.rows, self.share).limit(side, risk)


def chain_alike(longest: Floats, rows: Floats, share: Floats) -> ChainRuns:
    """The law of runs did every row know nothing of the others."""
    n = max(int(np.max(rows, initial=0.0)), 1)
    even = np.broadcast_to(share, (len(share), n))
    return ChainRuns(longest, rows, even, even, np.zeros(len(share), dtype=np.int64), share[:, 0], share)


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
        return chain_alike(self.longest, self.rows, self.share).limit(side, risk)


def chain_runs(past: Floats, batch: Floats) -> ChainRuns:
    """Learn the chain of marks from history, shape (S, N); judge the batch's most telling run, shape (S, n).

    Over all of history every chance is g = (count + ½)/(cases + 1), that of going on the one after three marks where
    history has three in a row and it is larger. At a place of the batch it is (K + c g)/(M + c), K of M cases at the
    place and its two neighbours in history's stretches, c the larger the less the places differ (``_by_place``).
    """
    n = batch.shape[1]
    now, then = past[:, :-1], past[:, 1:]
    told = ~np.isnan(then)
    stays = _chance((now == 1) & told, then == 1)
    if past.shape[1] > 3:
        three = (now[:, 2:] == 1) & (now[:, 1:-1] == 1) & (now[:, :-2] == 1) & told[:, 2:]
        longer = _chance(three, then[:, 2:] == 1)
        stays = np.where(three.any(axis=1), np.maximum(stays, longer), stays)
    enters = _chance((now == 0) & told, then == 1)
    from_none = _by_place((now == 0) & told, then == 1, enters, n)
    from_one = _by_place((now == 1) & told, then == 1, stays, n)
    goes_on = past[:, -1] == 1 if past.shape[1] else np.zeros(len(past), dtype=bool)
    longest, place, first = _most_telling(batch == 1, goes_on, from_none, from_one)
    K, N = tally(past)
    rows = np.where(N > 0, tally(batch)[1], 0).astype(np.float64)
    column = (slice(None), None)
    share = (K + 0.5) / (N + 1)
    return ChainRuns(longest[column], rows[column], from_none, from_one, place, first, share[column])


def _by_place(cases: Bools, after: Bools, overall: Floats, n: int) -> Floats:
    """Chance at each place of a batch of n rows, drawn to the overall one, shape (S, n).

    How much the places differ is told by D, the chi-square sum of their counts over its degrees of freedom: D − 1 is
    the variance of the chances over that of an estimate from M cases, so M/(D − 1) cases is what the overall chance
    is worth (empirical Bayes, Morris 1983), but ``PLACE_PRIOR`` at least.
    """
    usable = cases.shape[1] // n * n

    def around(v: Bools, half: float) -> Floats:
        count = v[:, v.shape[1] - usable :].reshape(len(v), usable // n, n).sum(axis=1) + half / n
        return np.asarray(count + np.roll(count, 1, axis=1) + np.roll(count, -1, axis=1))

    hits, rows, g = around(cases & after, 0.5), around(cases, 1.0), overall[:, None]
    common = (hits.sum(axis=1) / rows.sum(axis=1))[:, None]
    square = ((hits - rows * common) ** 2 / (rows * common * (1 - common))).sum(axis=1) / max(n - 1, 1)
    worth = rows.mean(axis=1) / np.maximum(square - 1, 1e-9)
    drawn = np.maximum(worth, PLACE_PRIOR)[:, None]
    return np.asarray((hits + drawn * g) / (rows + drawn))


def _most_telling(marks: Bools, goes_on: Bools, enters: Floats, stays: Floats) -> tuple[Floats, Ints, Floats]:
    """Marks, first place and first chance of the batch's run of least weight (no run: 0 marks, the likeliest place)."""
    place = enters.argmax(axis=1)
    first = np.take_along_axis(enters, place[:, None], axis=1)[:, 0]
    longest, best = np.zeros(len(marks)), np.full(len(marks), np.inf)
    began, opened = np.zeros(len(marks), dtype=np.int64), first.copy()
    run, weight = np.zeros(len(marks)), np.ones(len(marks))
    for t in range(marks.shape[1]):
        on = marks[:, t]
        new = on & (run == 0)
        opens = np.where(goes_on, stays[:, 0], enters[:, 0]) if t == 0 else enters[:, t]
        began, opened = np.where(new, t, began), np.where(new, opens, opened)
        weight = np.where(new, opens, weight * stays[:, t])
        run = np.where(on, run + 1, 0.0)
        more = on & (weight < best)
        best = np.where(more, weight, best)
        longest, place = np.where(more, run, longest), np.where(more, began, place)
        first = np.where(more, opened, first)
    return longest, place, first


def _chance(cases: Bools, after: Bools) -> Floats:
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
