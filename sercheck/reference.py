"""Reference distributions for the judge: a pivot with Student or normal law, and the more careful of two.

Depends only on ``serial`` and ``measure``. All arrays have shape (S, L) or broadcast to it.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from sercheck.measure import POWER, Reference, Side
from sercheck.serial.arrays import Floats
from sercheck.serial.risk import t_quantile, t_tail


def same(x: Floats) -> Floats:
    """The identity."""
    return x


def detectable_reach(risk: Floats, df: Floats) -> Floats:
    """Shift, in standard errors, that is found with probability ``POWER``: a quantile of the noncentral t.

    t (1 - 1/(4 df)) + z √(1 + t²/(2 df)), t the critical value (Johnson and Welch 1940): with few degrees of freedom
    the critical value is itself uncertain and t + z would promise too much.
    """
    df = np.where(np.asarray(df) > 0, df, np.nan)  # no history, no degrees of freedom: nothing can be promised
    t, power = t_quantile(1 - risk, df), t_quantile(POWER, np.inf)
    return np.asarray(t * (1 - 1 / (4 * df)) + power * np.sqrt(1 + t**2 / (2 * df)), dtype=np.float64)


@dataclass(frozen=True)
class Pivot:
    """T = (statistic - centre) / scale follows Student's t with ``df`` degrees of freedom (inf: normal).

    Attributes:
        statistic: the observed value on the scale on which it is nearly normal.
        centre: expectation of the statistic when the bound holds (bias included).
        scale: its standard error on that scale.
        df: degrees of freedom, inf for the normal law.
        bound: the bound in the observed unit.
        standard_error: standard error in the observed unit.
        to_unit: increasing map from the statistic's scale to the observed unit.
        naive_scale: standard error on the statistic's scale had the rows been independent (NaN: no meaning).
        naive_centre: centre for the naive limit on the statistic's scale (default: ``centre``).
        naive_to_unit: map for the naive limit where it differs (default: ``to_unit``).
    """

    statistic: Floats
    centre: Floats
    scale: Floats
    df: Floats
    bound: Floats
    standard_error: Floats
    to_unit: Callable[[Floats], Floats] = same
    naive_scale: Floats | None = None
    naive_centre: Floats | None = None
    naive_to_unit: Callable[[Floats], Floats] | None = None

    def p_value(self, side: Side) -> Floats:
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):  # there may be no scale, or next to none
            t = (self.statistic - self.centre) / self.scale
        return t_tail(t if side == "upper" else -t, self.df)

    def _at(self, side: Side, quantile: Floats) -> Floats:
        return self.to_unit(self.centre + (quantile if side == "upper" else -quantile) * self.scale)

    def limit(self, side: Side, risk: Floats) -> Floats:
        return self._at(side, t_quantile(1 - risk, self.df))

    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        if self.naive_scale is None:
            return np.full(np.broadcast(self.centre, risk).shape, np.nan)
        step = t_quantile(1 - risk, np.inf) * self.naive_scale
        centre = self.centre if self.naive_centre is None else self.naive_centre
        return (self.naive_to_unit or self.to_unit)(centre + (step if side == "upper" else -step))

    def detectable(self, side: Side, risk: Floats) -> Floats:
        return np.abs(self._at(side, detectable_reach(risk, self.df)) - self.bound)


@dataclass(frozen=True)
class Larger:
    """Two witnesses: the larger p-value counts, so the farther limit does."""

    first: Reference
    second: Reference

    @property
    def bound(self) -> Floats:
        return self.first.bound

    @property
    def standard_error(self) -> Floats:
        return np.fmax(self.first.standard_error, self.second.standard_error)

    def p_value(self, side: Side) -> Floats:
        return np.maximum(self.first.p_value(side), self.second.p_value(side))

    def limit(self, side: Side, risk: Floats) -> Floats:
        farther = np.maximum if side == "upper" else np.minimum
        return farther(self.first.limit(side, risk), self.second.limit(side, risk))

    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        return self.first.naive_limit(side, risk)

    def detectable(self, side: Side, risk: Floats) -> Floats:
        return np.maximum(self.first.detectable(side, risk), self.second.detectable(side, risk))


@dataclass(frozen=True)
class Exact:
    """No sampling error: the observation itself is compared with the bound."""

    observed: Floats
    bound: Floats

    @property
    def standard_error(self) -> Floats:
        return np.full(self.observed.shape, np.nan)

    def p_value(self, side: Side) -> Floats:
        broken = self.observed > self.bound if side == "upper" else self.observed < self.bound
        return np.where(np.isnan(self.observed), np.nan, np.where(broken, 0.0, 1.0))

    def limit(self, side: Side, risk: Floats) -> Floats:
        return np.broadcast_to(self.bound, self.observed.shape)

    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        return np.full(self.observed.shape, np.nan)

    def detectable(self, side: Side, risk: Floats) -> Floats:
        return np.full(self.observed.shape, np.nan)
