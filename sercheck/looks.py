"""The reference of a batch that is looked at twice: the sooner of two looks; depends on ``serial``, ``measure``."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sercheck.measure import Reference, Side
from sercheck.serial.arrays import Floats


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
