"""Seasons told from harmonics, with their shares of the variance; depends on numpy and ``serial`` only.

A cycle of 12 steps in a feed with one of 24 is its second harmonic; a day within a week is a season of its own.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.autocovariances import autocorrelation
from sercheck.serial.lines import WITHIN, Lines, first_order, lines

OWN_SHARE, OWN_DENSITY = 0.5, 4.0
"""A cycle within a longer one, which has at least ``lines.WITHIN`` of it, is a season of its own when it holds half of
their power; one that the calendar names when its lines are four times as strong on average as the others (ours)."""
DIRECTED = np.log(0.01)
"""Logarithm of the risk at which a found cycle is called the harmonic of a calendar length that holds it a few times:
one question, asked of series that have a cycle for certain (common practice)."""


class Seasons(NamedTuple):
    """The seasons of each series, strongest first; every array has shape (S, Q), Q the most that a series has.

    Attributes:
        steps: length of the season, 0 where there is none.
        p_value: chance of such lines anywhere among all lengths that were looked at, without a season; NaN for none.
        share: share of the variance about a straight line in time that the season holds; what a longer season holds
            counts without the shorter ones inside it. NaN for none.
        r: autocorrelation at the season's lag when it was found, trend and clearer seasons taken out; NaN for none.
        harmonics: of each series the lengths found that are only harmonics, by the season that holds them.
    """

    steps: Ints
    p_value: Floats
    share: Floats
    r: Floats
    harmonics: tuple[dict[int, tuple[int, ...]], ...]


def sorted_out(rest: Floats, found: Ints, log_p: Floats, r: Floats, natural: tuple[int, ...]) -> Seasons:
    """Tell seasons from harmonics, give their shares, order them.

    Args:
        rest: series about their trend, missing ones NaN, shape (S, T).
        found: certified lengths in the order of finding, 0 for none, shape (S, Q).
        log_p: logarithms of their p-values.
        r: their autocorrelations.
        natural: lengths that the calendar names.
    """
    family = _Family(rest)
    found = _raised(family, found.copy(), natural)
    found, log_p, r = _with_inner(family, found, log_p, r, natural)
    share = family.shares(found)
    keep, holder = _own(found, share, natural)
    keep &= (found > 2) | np.isin(found, natural)  # values that take turns are no season
    share = _without_inner(found, keep, share)
    order = np.argsort(np.where(keep, -share, np.inf), axis=1, kind="stable")
    width = int(keep.sum(axis=1).max(initial=0))

    def put(values: np.ndarray, empty: float) -> np.ndarray:
        return np.take_along_axis(np.where(keep, values, empty), order, axis=1)[:, :width]

    return Seasons(
        put(found, 0), np.exp(put(log_p, np.nan)), put(np.clip(share, 0.0, 1.0), np.nan), put(r, np.nan),
        tuple(_harmonics(*pair) for pair in zip(found.tolist(), holder.tolist(), strict=True)),
    )  # fmt: skip


class _Family:
    """All lines of cycles in the series as they came, each length looked at once."""

    def __init__(self, rest: Floats) -> None:
        self.phi = first_order(rest)
        self.filled = np.nan_to_num(rest)
        self.seen = np.maximum((~np.isnan(rest)).mean(axis=1), 1e-9)
        self.steps = rest.shape[1]
        self.rest = rest

    def test(self, rows: Ints, s: int) -> Lines:
        return lines(self.filled[rows], s, self.phi[rows])

    def shares(self, found: Ints) -> Floats:
        """Share of the variance that all lines of each cycle hold, missing values made up for; NaN for none."""
        share = np.full(found.shape, np.nan)
        for s in np.unique(found[found > 0]).tolist():
            rows = np.flatnonzero((found == s).any(axis=1))
            whole = self.test(rows, s).share / self.seen[rows]
            share[rows] = np.where(found[rows] == s, whole[:, None], share[rows])
        return share


def _raised(family: _Family, found: Ints, natural: tuple[int, ...]) -> Ints:
    """Cycles that are half, a third or a quarter of a calendar length whose own lines are there too: that length."""
    for outer in sorted((s for s in natural if 4 * s <= family.steps), reverse=True):
        inner = (found > 0) & (found < outer) & (outer % np.maximum(found, 1) == 0) & (outer <= WITHIN * found)
        inner &= ~np.isin(found, natural) & ~(found == outer).any(axis=1, keepdims=True)
        rows = np.flatnonzero(inner.any(axis=1))
        if len(rows):
            rows = rows[family.test(rows, outer).log_p <= DIRECTED]
            first = inner[rows].argmax(axis=1)
            found[rows, first] = outer
    return found


def _with_inner(
    family: _Family, found: Ints, log_p: Floats, r: Floats, natural: tuple[int, ...]
) -> tuple[Ints, Floats, Floats]:
    """The found cycles and those that repeat within them and may be seasons of their own."""
    added: list[tuple[int, Ints, Floats, Floats]] = []
    for outer in np.unique(found[found > 0]).tolist():
        rows = np.flatnonzero((found == outer).any(axis=1))
        for s in _divisors(outer, natural):
            among = rows[~(found[rows] == s).any(axis=1)]
            if len(among):
                test = family.test(among, s)
                told = np.flatnonzero(test.sharp & (test.log_all <= DIRECTED))
                at_lag = autocorrelation(family.rest[among[told]], [s])[:, 0]
                added.append((s, among[told], test.log_all[told], at_lag))
    size = len(found), len(added)
    wide = [np.zeros(size, dtype=np.int64), np.full(size, np.nan), np.full(size, np.nan)]
    for place, (s, rows, log_all, lag_r) in enumerate(added):
        wide[0][rows, place], wide[1][rows, place], wide[2][rows, place] = s, log_all, lag_r
    same = _repeated(np.concatenate([found, wide[0]], axis=1))
    joined = [np.concatenate([a, b], axis=1) for a, b in zip((found, log_p, r), wide, strict=True)]
    return np.where(same, 0, joined[0]), joined[1], joined[2]


def _repeated(found: Ints) -> Bools:
    """Lengths that stand further to the left already."""
    same = np.zeros(found.shape, dtype=bool)
    for place in range(1, found.shape[1]):
        same[:, place] = (found[:, :place] == found[:, place : place + 1]).any(axis=1)
    return same


def _divisors(outer: int, natural: tuple[int, ...]) -> list[int]:
    """Cycles within a longer one that may be seasons of their own; within a calendar length only calendar lengths."""
    inside = [s for s in range(2, outer // 2 + 1) if outer % s == 0]
    return [s for s in inside if s in natural or (outer not in natural and outer >= WITHIN * s)]


def _own(found: Ints, share: Floats, natural: tuple[int, ...]) -> tuple[Bools, Ints]:
    """Which cycles are seasons of their own, and for harmonics the longest season that holds them."""
    keep = found > 0
    holder = np.zeros(found.shape, dtype=np.int64)
    count = np.maximum(found // 2, 1)
    for outer in range(found.shape[1]):
        size, whole = found[:, outer : outer + 1], share[:, outer : outer + 1]
        inside = (found > 0) & (size > found) & (size % np.maximum(found, 1) == 0)
        with np.errstate(invalid="ignore"):
            others = np.maximum(whole - share, 1e-12) / np.maximum(size // 2 - count, 1)
            dense = share / count >= OWN_DENSITY * others
            own = (size >= WITHIN * found) & (share >= OWN_SHARE * whole) & ~np.isin(size, natural)
            own |= np.isin(found, natural)
        harmonic = inside & ~(own & dense)
        keep &= ~harmonic
        holder = np.where(harmonic, np.maximum(holder, size), holder)
    return keep, holder


def _without_inner(found: Ints, keep: Bools, share: Floats) -> Floats:
    """Shares of kept seasons without the largest share of a kept one inside."""
    own = share.copy()
    for place in range(found.shape[1]):
        outer = found[:, place : place + 1]
        inside = keep & keep[:, place : place + 1] & (found < outer) & (outer % np.maximum(found, 1) == 0)
        own[:, place] -= np.where(inside, share, 0.0).max(axis=1, initial=0.0)
    return own


def _harmonics(found: list[int], holder: list[int]) -> dict[int, tuple[int, ...]]:
    """The harmonics of each season of one series."""
    told: dict[int, tuple[int, ...]] = {}
    for s, outer in zip(found, holder, strict=True):
        if outer:
            told[outer] = tuple(sorted({*told.get(outer, ()), s}, reverse=True))
    return told
