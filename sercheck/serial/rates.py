"""Shares of rows whose marks come in clusters: exact binomial laws on effective sizes; numpy and ``scipy.special``.

A mark is 1 (the row has the property), 0 (it has not) or NaN (nothing can be said about the row). Marks of a feed come
in bursts, so n rows weigh no more than n/τ independent ones. τ is taken from history and batch together: history alone
misses the clusters of rare events.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from typing import Literal

import numpy as np
from scipy import special

from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.cluster_model import modelled_clusters
from sercheck.serial.clusters import cluster_size, clusters, tally
from sercheck.serial.risk import t_tail

Side = Literal["upper", "lower"]
SIDES: tuple[Side, ...] = ("upper", "lower")

FEWEST_EXPECTED = 3.0
"""Marked effective rows expected at a literal share below which a pass says nothing (chosen by simulation)."""

LONG_HISTORY = 8
"""Batches of history from which τ is taken as known (simulated: sizes under 1 from there on)."""

EVEN = 0.25
"""Share, or 1 less it, from which either kind of rows may be the rarer one (simulated: a share of a half)."""

RUNS = 0.75
"""Degrees of freedom for each run of the rarer kind (simulated: with 1 a share of .3 of a hidden autoregression at .9
fails 3 times too often at a risk of .001)."""

FEWEST_RUNS = 10
"""Runs of the rarer kind that begin to tell how it clusters (simulated: fewer give up to 300 times the risk)."""


def first_within(tail: Callable[[Floats], Floats], most: Floats, risk: Floats) -> Floats:
    """The smallest whole number up to ``most`` whose tail probability is within the risk, by bisection.

    Args:
        tail: gives the tail probability of an array of counts; 1 at count 0 and falling.
        most: largest count that can be, in the shape of ``tail``'s result.
        risk: broadcasts to it; NaN gives NaN.

    Returns:
        The counts; NaN where not even ``most`` is within the risk, or where nothing can be counted.
    """
    most, level = np.broadcast_arrays(most, np.asarray(risk, dtype=np.float64))
    before = np.zeros(most.shape)
    within = most + 1.0
    for _ in range(int(np.max(most, initial=0.0) + 2).bit_length()):
        middle = np.floor((before + within) / 2)
        found = tail(middle) <= level
        within = np.where(found, middle, within)
        before = np.where(found, before, np.maximum(before, middle))
    return np.where((within <= most) & (most > 0) & ~np.isnan(level), within, np.nan)


def binomial_tail(hits: Floats, rows: Floats, share: Floats, side: Side) -> Floats:
    """P(X ≥ hits) (upper) or P(X ≤ hits) (lower) for X binomial; sizes need not be whole (Korn and Graubard 1998).

    Upper: I_share(hits, rows − hits + 1), lower: I_{1−share}(rows − hits, hits + 1) (Clopper and Pearson 1934). NaN
    stays NaN; with no rows both are 1.
    """
    share = np.asarray(share, dtype=np.float64)
    if side == "upper":
        return _beta(hits, rows - hits + 1.0, share)
    return _beta(rows - hits, hits + 1.0, 1.0 - share)


def conditional_tail(hits: Floats, rows: Floats, past_hits: Floats, past_rows: Floats, side: Side) -> Floats:
    """Mid-p that a share is above (upper) or below (lower) that of the past, given the marks of both together.

    Given their sum the marks of the batch are binomial with w = rows / (rows + past_rows) (Przyborowski and Wilenski
    1940): ½ [I_w(k, K + 1) + I_w(k + 1, K)] above, and 1 less that below. Sizes need not be whole. NaN without rows on
    both sides.
    """
    total = np.where((rows > 0) & (past_rows > 0), rows + past_rows, np.nan)
    if side == "lower":  # the same law seen from history: small tails keep their digits
        hits, rows, past_hits, past_rows = past_hits, past_rows, hits, rows
    w = rows / total
    p: Floats = 0.5 * (_beta(hits, past_hits + 1.0, w) + _beta(hits + 1.0, past_hits, w))
    return p


def _beta(a: Floats, b: Floats, x: Floats) -> Floats:
    """I_x(a, b) with its limits 1 at a = 0 and 0 at b = 0."""
    a, b, x = np.broadcast_arrays(a, b, x)
    inner = special.betainc(np.where(a > 0, a, 1.0), np.where(b > 0, b, 1.0), x)
    return np.where(np.isnan(inner), np.nan, np.where(a <= 0, 1.0, np.where(b <= 0, 0.0, inner)))


@dataclass(frozen=True)
class ShareLaw(ABC):
    """How the share of marked rows scatters; all arrays have one shape (S, L).

    The limit is the first attainable share (a whole number of rows) whose p-value is within the risk, so that the
    p-value is within the risk exactly when the share is at the limit or beyond. NaN where no share is that far.

    Attributes:
        hits: marked rows in the batch.
        rows: rows of the batch that can be marked.
        tau: rows that weigh as one independent row (``clusters`` of history and batch).
        power: probability of ``detectable``.
    """

    hits: Floats
    rows: Floats
    tau: Floats
    power: float

    @abstractmethod
    def tail(self, hits: Floats, side: Side) -> Floats:
        """The p-value of ``hits`` marked rows on ``side``."""

    @property
    @abstractmethod
    def bound(self) -> Floats:
        """The share that is compared with."""

    def p_value(self, side: Side) -> Floats:
        """Probability of a share this far or farther on ``side`` when the bound holds exactly."""
        return np.where(self.rows > 0, self.tail(self.hits, side), np.nan)

    def limit_hits(self, side: Side, risk: Floats) -> Floats:
        """Marked rows at the limit: the fewest (upper) or most (lower) within the risk; NaN where there are none."""
        if side == "upper":
            return first_within(lambda hits: self.tail(hits, side), self.rows, risk)
        return self.rows - first_within(lambda unmarked: self.tail(self.rows - unmarked, side), self.rows, risk)

    def limit(self, side: Side, risk: Floats) -> Floats:
        """The share at which the p-value comes within ``risk``."""
        return quotient(self.limit_hits(side, risk), self.rows)

    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        """The limit had the rows been independent (τ = 1)."""
        return replace(self, tau=np.ones(self.tau.shape)).limit(side, risk)

    def detectable(self, side: Side, risk: Floats) -> Floats:
        """Distance from the bound to the share that passes the limit with probability ``power`` (a beta quantile)."""
        hits = self.limit_hits(side, risk) / self.tau
        rows = self.rows / self.tau
        if side == "upper":
            share = special.betaincinv(hits, rows - hits + 1.0, self.power)
        else:
            share = special.betaincinv(hits + 1.0, rows - hits, 1.0 - self.power)
        change: Floats = np.abs(share - self.bound)
        return change


@dataclass(frozen=True)
class AgainstShare(ShareLaw):
    """The share of marked rows against a share that the author wrote: exact binomial on effective sizes.

    Attributes:
        share: the author's share.
        df: for each side, degrees of freedom behind τ where it comes from few rows or cycles (after
            Korn and Graubard 1998: the tail is read as that of Student's t in place of the normal law); a side that
            is not there, or inf, keeps the exact tail.
        blind: sides on which a failure would rest on clusters that nobody has seen: p is 1 there.
    """

    share: Floats
    df: Mapping[Side, Floats] = field(default_factory=dict)
    blind: Mapping[Side, Bools] = field(default_factory=dict)

    @property
    def bound(self) -> Floats:
        """The author's share."""
        return np.broadcast_to(np.asarray(self.share, dtype=np.float64), self.rows.shape)

    @property
    def standard_error(self) -> Floats:
        """√(p(1 − p) τ/n) at the author's share."""
        return _root(self.bound, self.tau, self.rows)

    @property
    def too_few(self) -> Bools:
        """Where a pass says nothing: fewer than ``FEWEST_EXPECTED`` effective rows of the rarer kind are expected."""
        return np.asarray(self.rows * np.minimum(self.bound, 1 - self.bound) / self.tau < FEWEST_EXPECTED)

    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        """The limit had the rows been independent (τ = 1, nothing estimated)."""
        return replace(self, tau=np.ones(self.tau.shape), df={}, blind={}).limit(side, risk)

    def tail(self, hits: Floats, side: Side) -> Floats:
        """Clopper and Pearson's tail on hits/τ and rows/τ."""
        p = binomial_tail(hits / self.tau, self.rows / self.tau, self.bound, side)
        if side in self.df:
            p = _as_t(p, self.df[side])
        return np.where(self.blind[side], 1.0, p) if side in self.blind else p


@dataclass(frozen=True)
class AgainstPast(ShareLaw):
    """The share of marked rows against that of history: conditional binomial with mid-p on effective sizes.

    Where most rows of history are marked the unmarked ones are counted: the law is nearly exact for rare rows and
    wide for common ones.
    """

    past_hits: Floats
    past_rows: Floats
    df: Floats | None = None
    """Degrees of freedom behind τ where whole cycles tell it, as in ``AgainstShare``."""

    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        """The limit had the rows been independent (τ = 1, nothing estimated)."""
        return replace(self, tau=np.ones(self.tau.shape), df=None).limit(side, risk)

    @property
    def bound(self) -> Floats:
        """History's share."""
        return quotient(self.past_hits, self.past_rows)

    @property
    def standard_error(self) -> Floats:
        """√(p(1 − p) τ (1/n + 1/N)), p of history and batch together."""
        pooled = quotient(self.hits + self.past_hits, self.rows + self.past_rows)
        harmonic = quotient(self.rows * self.past_rows, self.rows + self.past_rows)
        return _root(pooled, self.tau, harmonic)

    def tail(self, hits: Floats, side: Side) -> Floats:
        """Mid-p of the conditional binomial on sizes divided by τ, of the rarer kind of rows in history."""
        n, K, N = self.rows / self.tau, self.past_hits / self.tau, self.past_rows / self.tau
        marked = conditional_tail(hits / self.tau, n, K, N, side)
        other: Side = "lower" if side == "upper" else "upper"
        unmarked = conditional_tail((self.rows - hits) / self.tau, n, N - K, N, other)
        p = np.where(2 * self.past_hits > self.past_rows, unmarked, marked)
        return p if self.df is None else _as_t(p, self.df)


def _as_t(p: Floats, df: Floats) -> Floats:
    return np.where(np.isfinite(df), t_tail(-special.ndtri(p), df), p)


def quotient(hits: Floats, rows: Floats) -> Floats:
    """The quotient; NaN where there are no rows."""
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.where(rows > 0, hits / rows, np.nan)


def against_share(marks: Floats, start: int, share: float, power: float, *, season: int | None = None) -> AgainstShare:
    """The law of the share of marked rows from column ``start`` on against a literal share; arrays of shape (S, 1).

    Where history is shorter than ``LONG_HISTORY`` batches, τ comes from little more than the batch that it judges:
    its bias is given back, a model of the marks is a second witness of it (``modelled_clusters``) of which the larger
    counts, and its degrees of freedom, observed/τ − 1, are used. On the side where the rarer kind of
    row would be too rare ('lower' for a share up to ½, else 'upper') few of them are left to tell how they cluster:
    there three quarters of their runs, less 1, are the degrees of freedom when fewer (on both sides for a share near ½,
    where either kind is the rarer one), and below ``FEWEST_RUNS`` it is blind.

    Args:
        marks: history and batch, shape (S, T), NaN takes no part.
        start: first column of the batch.
        share: the author's share, 0 to 1.
        power: probability of ``detectable``.
        season: steps of the shortest cycle of the feed, if it has one.
    """
    hits, rows = _batch(marks, start)
    if start >= LONG_HISTORY * (marks.shape[1] - start):
        tau, behind = (each[:, None] for each in clusters(marks, season=season, start=start))
        return AgainstShare(hits, rows, tau, power, np.asarray(share), dict.fromkeys(SIDES, _freedom(behind)))
    modelled = modelled_clusters(marks, season, marks.shape[1] - start)
    within = np.maximum(cluster_size(marks, short=True), modelled.size) * modelled.cycles
    cycles = clusters(marks, short=True, season=season)
    tau = np.maximum(within, cycles.size)[:, None]
    observed = np.count_nonzero(~np.isnan(marks), axis=1)[:, None]
    df = np.where(tau > 1.0, _freedom(np.minimum(observed / tau, cycles.behind[:, None])), np.inf)
    df = np.minimum(df, np.maximum(modelled.df, 1.0)[:, None])
    marked, unmarked = (runs[:, None] for runs in runs_of(marks))
    thin: Side = "lower" if share <= 0.5 else "upper"
    full: Side = "upper" if share <= 0.5 else "lower"
    runs = marked if share <= 0.5 else unmarked
    thinned = np.minimum(df, np.maximum(RUNS * runs - 1.0, 1.0))
    few = {thin: thinned, full: thinned if min(share, 1 - share) >= EVEN else df}
    return AgainstShare(hits, rows, tau, power, np.asarray(share), few, {thin: runs < FEWEST_RUNS})


def against_past(marks: Floats, start: int, power: float, *, season: int | None = None) -> AgainstPast:
    """The law of the share of marked rows from column ``start`` on against that before it; arrays of shape (S, 1)."""
    hits, rows = _batch(marks, start)
    past_hits, past_rows = _batch(marks[:, :start], 0)
    tau, behind = (each[:, None] for each in clusters(marks, season=season, start=start))
    return AgainstPast(hits, rows, tau, power, past_hits, past_rows, _freedom(behind))


def _freedom(independent: Floats) -> Floats:
    return np.maximum(independent - 1.0, 1.0)


def _batch(marks: Floats, start: int) -> tuple[Floats, Floats]:
    hits, rows = tally(marks[:, start:])
    return hits[:, None].astype(np.float64), rows[:, None].astype(np.float64)


def runs_of(marks: Floats) -> tuple[Ints, Ints]:
    """Count the runs of marked and of unmarked rows, each of shape (S,); NaN ends a run."""
    before = np.full_like(marks, np.nan)
    before[:, 1:] = marks[:, :-1]
    starts = marks != before
    return np.count_nonzero(starts & (marks == 1), axis=1), np.count_nonzero(starts & (marks == 0), axis=1)


def _root(share: Floats, tau: Floats, rows: Floats) -> Floats:
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.where(rows > 0, np.sqrt(share * (1.0 - share) * tau / rows), np.nan)
