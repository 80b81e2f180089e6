"""Normal scores: values as their place in their own history; depends on numpy, ``scipy.special`` and ``serial``."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy import special

from sercheck.serial.arrays import Bools, Floats, Ints, as_series

GRID = 257
"""Points of the compact quantile grid: steps of .03 standard deviations for 2,000 values, finer than any limit."""
ROUNDING = 2.0**-44
"""What a sum or difference of numbers may be off, as a share of their size: 256 units in the last place (ours: a
profile is a mean of tens of values, and a reading in another unit is rounded anew)."""


@dataclass(frozen=True)
class Ranking:
    """History's empirical distribution, for many series at once.

    Attributes:
        values: history sorted along time, shape (S, N), NaN (missing) last.
        scores: normal score of each sorted value, shape (S, N), NaN where missing.
        own: the scores at history's own places, shape (S, N), NaN where missing.
        counts: observed values, shape (S,).
        commonest: share of the commonest value among the observed ones, shape (S,); NaN for an empty history.
    """

    values: Floats
    scores: Floats
    own: Floats
    counts: Ints
    commonest: Floats

    def of(self, x: Floats) -> Floats:
        """Normal scores of new values.

        A value that history holds gets the score it has there, one between two of history's gets the interpolated
        score, one beyond history's extremes the score of the extreme.

        Args:
            x: shape (S, n), NaN is missing and stays NaN. Infinite values lie beyond the extremes.
        """
        if not self.values.shape[1]:
            return np.full(x.shape, np.nan)
        return _interpolate(x, self.values, self.scores, self.counts)

    @cached_property
    def unit(self) -> QuantileGrid:
        """The way back from a score to the unit, through a compact grid."""
        series, length = self.values.shape
        if not length:
            return QuantileGrid(np.full((series, 1), np.nan), np.full((series, 1), np.nan))
        last = np.maximum(self.counts - 1, 0)[:, None]
        lowest, highest = self.scores[:, :1], np.take_along_axis(self.scores, last, axis=1)
        steps = np.linspace(0.0, 1.0, min(GRID, max(2, length)))
        scores = np.where(steps == 1.0, highest, lowest + (highest - lowest) * steps)
        return QuantileGrid(scores, _interpolate(scores, self.scores, self.values, self.counts))


@dataclass(frozen=True)
class QuantileGrid:
    """Increasing map from a (mean) normal score to the value that has it in history.

    Piecewise linear through the grid; beyond history's extremes it goes on at the average slope, so that a limit that
    no value of history reached is told as such.

    Attributes:
        scores: equally spaced from history's lowest to its highest score, shape (S, K).
        values: their values, shape (S, K).
    """

    scores: Floats
    values: Floats

    def __call__(self, score: Floats) -> Floats:
        """Values of ``score``, shape (S, L) to (S, L); NaN stays NaN."""
        lowest, highest = self.scores[:, :1], self.scores[:, -1:]
        pieces = self.scores.shape[1] - 1
        width = highest - lowest
        with np.errstate(divide="ignore", invalid="ignore"):
            place = np.clip((score - lowest) / width * pieces, 0.0, pieces)
            slope = np.where(width > 0, (self.values[:, -1:] - self.values[:, :1]) / width, 0.0)
        left = np.minimum(np.nan_to_num(place), max(pieces - 1, 0)).astype(np.int64)
        right = np.minimum(left + 1, pieces)
        at_left = np.take_along_axis(self.values, left, axis=1)
        part = np.where(width > 0, place - left, score * 0.0)
        value = at_left + part * (np.take_along_axis(self.values, right, axis=1) - at_left)
        return np.asarray(value + slope * (score - np.clip(score, lowest, highest)), dtype=np.float64)


def ranking(history: object, terms: Sequence[Floats] = ()) -> Ranking:
    """Order each series' history and give every value its normal score (van der Waerden 1952).

    z(v) = Φ⁻¹((values less than v + ½ values equal to v) / N): (i - ½)/N for the i-th of distinct values, the
    mid-rank at ties and for counts.

    Args:
        history: one series or shape (S, N); NaN is missing and takes no part.
        terms: what history is the sum or difference of, shape (S, N) each. Values that differ by no more than their
            rounding are ties; else the unit of the readings would decide which of them are.
    """
    history = as_series(history)
    series, length = history.shape
    counts = np.asarray((~np.isnan(history)).sum(axis=1), dtype=np.int64)
    if not length:
        empty = np.empty((series, 0))
        return Ranking(empty, empty, empty, counts, np.full(series, np.nan))
    order = np.argsort(history, axis=1, kind="stable")
    values = np.take_along_axis(history, order, axis=1)
    first, last = _ties(values, _apart(values, order, terms))
    last = np.minimum(last, np.maximum(counts - 1, 0)[:, None])
    scores = _score(first + last + 1, counts)
    scores[np.isnan(values)] = np.nan
    own = np.empty_like(scores)
    np.put_along_axis(own, order, scores, axis=1)
    with np.errstate(invalid="ignore", divide="ignore"):
        commonest = np.where(np.isnan(values), 0, last - first + 1).max(axis=1) / counts
    return Ranking(values, scores, own, counts, np.where(counts > 0, commonest, np.nan))


def commonest_share(history: object) -> Floats:
    """Share of the commonest value among the observed ones, as ``ranking`` tells it, without ordering every place.

    Args:
        history: one series or shape (S, N); NaN is missing and takes no part.

    Returns:
        Shape (S,); NaN for an empty history.
    """
    values = np.sort(as_series(history), axis=1)
    counts = (~np.isnan(values)).sum(axis=1)
    most = np.minimum(counts, 1)
    tied = np.flatnonzero((values[:, 1:] == values[:, :-1]).any(axis=1))
    if len(tied):
        first, last = _ties(values[tied], _apart(values[tied]))
        most[tied] = np.where(np.isnan(values[tied]), 0, last - first + 1).max(axis=1)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.where(counts > 0, most / counts, np.nan)


def normal_scores(x: object, history: object) -> Floats:
    """Normal scores of ``x`` in ``history``: see ``ranking`` and ``Ranking.of``; shapes (S, n) and (S, N)."""
    return ranking(history).of(as_series(x))


def _apart(values: Floats, order: Ints | None = None, terms: Sequence[Floats] = ()) -> Bools:
    """Where a sorted value is not the same as the one before it, but for the rounding of its terms; shape (S, N)."""
    new = np.ones(values.shape, dtype=bool)
    new[:, 1:] = values[:, 1:] != values[:, :-1]
    if order is None or not terms:
        return new
    largest = sum(np.max(np.abs(term), axis=1, where=~np.isnan(term), initial=0.0) for term in terms)
    with np.errstate(invalid="ignore", over="ignore"):
        close = values[:, 1:] - values[:, :-1] <= 2 * ROUNDING * np.asarray(largest)[:, None]
    row, place = np.nonzero(close & new[:, 1:])
    if len(row):  # few: only they are looked at with terms of their own
        here, before = order[row, place + 1], order[row, place]
        size = np.sum([np.abs(term[row, here]) + np.abs(term[row, before]) for term in terms], axis=0)
        new[row, place + 1] = values[row, place + 1] - values[row, place] > ROUNDING * size
    return new


def _ties(values: Floats, new: Bools) -> tuple[Ints, Ints]:
    """First and last place of the run of equal values that each sorted value lies in."""
    place = np.arange(values.shape[1])
    first = np.maximum.accumulate(np.where(new, place, 0), axis=1)
    ends = np.ones(values.shape, dtype=bool)
    ends[:, :-1] = new[:, 1:]
    last = np.minimum.accumulate(np.where(ends, place, values.shape[1])[:, ::-1], axis=1)[:, ::-1]
    return first, last


def _score(twice_rank: Ints, counts: Ints) -> Floats:
    """Φ⁻¹(mid-rank / N) from twice the mid-rank; one table serves when all series are as long."""
    if len(counts) and (counts == counts[0]).all():
        table = special.ndtri(np.arange(2 * twice_rank.shape[1] + 1) / (2 * max(int(counts[0]), 1)))
        return np.asarray(table[twice_rank], dtype=np.float64)
    return np.asarray(special.ndtri(twice_rank / (2 * np.maximum(counts, 1)[:, None])), dtype=np.float64)


def count_less(x: Floats, ordered: Floats, counts: Ints) -> Ints:
    """How many of a row's first ``counts`` ordered values are less than each x: bisection for all rows at once.

    Args:
        x: shape (S, n); NaN counts as larger than all.
        ordered: rows in increasing order, shape (S, N).
        counts: places of each row that are filled, shape (S,).
    """
    low = np.zeros(x.shape, dtype=np.int64)
    high = np.broadcast_to(counts[:, None], x.shape).copy()
    for _ in range(int(ordered.shape[1]).bit_length()):
        middle = (low + high) >> 1
        at = np.take_along_axis(ordered, np.minimum(middle, ordered.shape[1] - 1), axis=1)
        go = (low < high) & ~(at >= x)
        low = np.where(go, middle + 1, low)
        high = np.where(go, high, middle)
    return low


def _interpolate(x: Floats, knots: Floats, heights: Floats, counts: Ints) -> Floats:
    """Row by row piecewise linear interpolation through the first ``counts`` knots, flat beyond the ends."""
    last = np.maximum(counts - 1, 0)[:, None]
    right = np.minimum(count_less(x, knots, counts), last)
    left = np.maximum(right - 1, 0)
    a, b = np.take_along_axis(knots, left, axis=1), np.take_along_axis(knots, right, axis=1)
    with np.errstate(invalid="ignore", divide="ignore"):
        part = (x / 2 - a / 2) / (b / 2 - a / 2)  # halves: the difference of huge values stays finite
    part = np.where(x >= b, 1.0, np.where(x <= a, 0.0, part))
    low, high = np.take_along_axis(heights, left, axis=1), np.take_along_axis(heights, right, axis=1)
    return np.where(np.isnan(x), np.nan, low + part * (high - low))
