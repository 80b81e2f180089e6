"""Measurements without sampling error: the observation itself is held against the author's number.

Depends on numpy, ``measure``, ``reference`` and ``serial.arrays``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sercheck.measure import Measurement, Reasons, Reference, Side, Stays, told_reasons
from sercheck.reference import Exact
from sercheck.serial.arrays import Floats, Ints


@dataclass(frozen=True)
class Counted(Exact):
    """What 'below' and 'above' say of a count: one gap is not below 1, and `above: 1` of all rows means all of them.

    Attributes:
        touch: the bound itself is allowed: it closes a `between`, or nothing could lie beyond it.
    """

    touch: bool = False

    def p_value(self, side: Side) -> Floats:
        beyond = self.observed > self.bound if side == "upper" else self.observed < self.bound
        broken = beyond | (self.observed == self.bound) if not self.touch else beyond
        return np.where(np.isnan(self.observed), np.nan, np.where(broken, 0.0, 1.0))


def sides(stays: Stays, upper: Reference, lower: Reference) -> tuple[Reference | None, Reference | None]:
    """The references that a rule looks at: upper and lower, None for a side that it leaves open."""
    looks_up = stays.kind in ("below", "between", "like_history")
    looks_down = stays.kind in ("above", "between", "like_history")
    return upper if looks_up else None, lower if looks_down else None


def exact(
    stays: Stays,
    observed: Floats,
    n: Ints,
    n_missing: Ints,
    reasons: Reasons,
    *,
    span: tuple[float, float],
    method: str,
    assumes: str = "nothing",
    integer: bool = False,
    unsure: Reasons | None = None,
) -> Measurement:
    """Hold ``observed`` against the literal bounds; all arrays have shape (S,), those of the reasons (S, 1).

    ``span`` holds the smallest and the largest value that can be observed.
    """
    column = observed[:, None]

    def bound(number: float | None, unreachable: float) -> Counted:
        touch = stays.kind == "between" or number == unreachable
        return Counted(column, np.full(column.shape, np.nan if number is None else number), touch=touch)

    upper, lower = sides(stays, bound(stays.high, span[0]), bound(stays.low, span[1]))
    texts, unsure_at = told_reasons(reasons, unsure)
    return Measurement(
        observed=column,
        n=n[:, None],
        n_missing=n_missing[:, None],
        n_eff=np.full(column.shape, np.nan),
        upper=upper,
        lower=lower,
        undecided=reasons.index,
        reasons=texts,
        method=method,
        assumes=assumes,
        exact=True,
        integer=integer,
        unsure=unsure_at,
    )
