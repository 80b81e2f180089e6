"""References for a batch that is looked at in more than one way: the sooner of two looks, the least likely of several
counts; depends on ``serial`` and ``measure``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sercheck.measure import Reference, Side
from sercheck.serial.arrays import Floats, Ints


@dataclass(frozen=True)
class Sooner:
    """Two looks at half the risk each: p = 2 min. A look that cannot be taken (NaN) leaves the other at its half."""

    first: Reference
    second: Reference

    @property
    def bound(self) -> Floats:
        return self.first.bound

    @property
    def standard_error(self) -> Floats:
        return self.first.standard_error

    def p_value(self, side: Side) -> Floats:
        either = np.fmin(self.first.p_value(side), self.second.p_value(side))
        return np.where(np.isnan(self.first.p_value(side)), np.nan, np.minimum(1.0, 2 * either))

    def by_second(self, side: Side, risk: Floats) -> Floats:
        """Whether the longer look fails at ``risk`` (it then rests for a week), shape (S, 1)."""
        with np.errstate(invalid="ignore"):
            return np.asarray(2 * self.second.p_value(side) <= risk)

    def limit(self, side: Side, risk: Floats) -> Floats:
        nearer = np.fmin if side == "upper" else np.fmax
        return nearer(self.first.limit(side, risk / 2), self.second.limit(side, risk / 2))

    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        return self.first.naive_limit(side, risk)

    def detectable(self, side: Side, risk: Floats) -> Floats:
        return np.fmin(self.first.detectable(side, risk / 2), self.second.detectable(side, risk / 2))


@dataclass(frozen=True)
class Shares:
    """A count with a known law, told as a share; only too many is ever a fault.

    Attributes:
        tails: P(count ≥ k) for k = 0 .. K, shape (S, K + 1), NaN where nothing is known.
        count: the observed count, shape (S, 1).
        step: what one more count adds to the share, shape (S, 1).
        bound: what history gives, shape (S, 1).
    """

    tails: Floats
    count: Ints
    step: Floats
    bound: Floats

    @property
    def observed(self) -> Floats:
        return np.asarray(self.count * self.step)

    @property
    def standard_error(self) -> Floats:
        return np.full(self.count.shape, np.nan)

    def p_value(self, side: Side) -> Floats:
        if side == "lower":
            return np.where(np.isnan(self.tails[:, :1]), np.nan, 1.0)
        return np.take_along_axis(self.tails, np.minimum(self.count, self.tails.shape[1] - 1), axis=1)

    def limit(self, side: Side, risk: Floats) -> Floats:
        if side == "lower":
            return np.full(self.count.shape, np.nan)
        with np.errstate(invalid="ignore"):
            above = self.tails > np.broadcast_to(risk, self.count.shape)
        return np.asarray(above.sum(axis=1, keepdims=True) * self.step)

    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        return np.full(np.broadcast(self.count, risk).shape, np.nan)

    def detectable(self, side: Side, risk: Floats) -> Floats:
        return np.asarray(self.limit(side, risk) - self.bound)


@dataclass(frozen=True)
class Least:
    """Several counts of the same batch at an equal part of the risk each: the least likely one is told."""

    parts: tuple[Shares, ...]

    def _pick(self, values: list[Floats]) -> Floats:
        p = np.stack([part.p_value("upper") for part in self.parts])
        best = np.argmin(np.where(np.isnan(p), np.inf, p), axis=0)
        return np.asarray(np.take_along_axis(np.stack(values), best[None], axis=0)[0])

    @property
    def observed(self) -> Floats:
        return self._pick([part.observed for part in self.parts])

    @property
    def bound(self) -> Floats:
        return self._pick([part.bound for part in self.parts])

    @property
    def standard_error(self) -> Floats:
        return self.parts[0].standard_error

    def p_value(self, side: Side) -> Floats:
        return np.minimum(1.0, len(self.parts) * self._pick([part.p_value(side) for part in self.parts]))

    def limit(self, side: Side, risk: Floats) -> Floats:
        return self._pick([part.limit(side, risk / len(self.parts)) for part in self.parts])

    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        return self.parts[0].naive_limit(side, risk)

    def detectable(self, side: Side, risk: Floats) -> Floats:
        return self._pick([part.detectable(side, risk / len(self.parts)) for part in self.parts])
