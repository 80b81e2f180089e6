"""Laws that only the measures of a season need; depends on numpy, ``scipy.special``, ``measure`` and ``reference``."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import special

from sercheck.measure import Side
from sercheck.reference import Pivot
from sercheck.serial.arrays import Floats, Ints


@dataclass(frozen=True)
class ChiSquare:
    """A statistic that follows χ² when there is nothing to be seen; only its upper tail says something.

    Attributes:
        statistic: shape (S, 1).
        df: degrees of freedom.
    """

    statistic: Floats
    df: int

    @property
    def bound(self) -> Floats:
        return np.full(self.statistic.shape, np.nan)

    @property
    def standard_error(self) -> Floats:
        return np.full(self.statistic.shape, np.nan)

    def p_value(self, side: Side) -> Floats:
        p = special.chdtrc(self.df, self.statistic)
        return np.asarray(p if side == "upper" else 1 - p)

    def limit(self, side: Side, risk: Floats) -> Floats:
        risk = np.broadcast_to(risk, self.statistic.shape)
        return np.asarray(special.chdtri(self.df, risk if side == "upper" else 1 - risk))

    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        return np.full(self.statistic.shape, np.nan)

    def detectable(self, side: Side, risk: Floats) -> Floats:
        return np.full(self.statistic.shape, np.nan)


@dataclass(frozen=True)
class Best:
    """The best of several looks: each gets its share of the risk (Bonferroni).

    Attributes:
        look: the law of the look that is told.
        looks: how many there were, at least 1, shape (S, 1).
    """

    look: Pivot
    looks: Ints

    @property
    def bound(self) -> Floats:
        return self.look.bound

    @property
    def standard_error(self) -> Floats:
        return self.look.standard_error

    def p_value(self, side: Side) -> Floats:
        return np.minimum(1.0, self.looks * self.look.p_value(side))

    def limit(self, side: Side, risk: Floats) -> Floats:
        return self.look.limit(side, risk / self.looks)

    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        return self.look.naive_limit(side, risk / self.looks)

    def detectable(self, side: Side, risk: Floats) -> Floats:
        return self.look.detectable(side, risk / self.looks)
