"""What the measures of single lags share: their fields, their reasons, and the reference of a correlation.

Depends on pydantic, numpy, ``serial``, ``grid``, ``measure`` and ``reference``.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Annotated

import numpy as np
from pydantic import BaseModel, ConfigDict, Field, model_validator

from sercheck.grid import Panel
from sercheck.measure import Measurement, Question, Reasons, Reference, Side
from sercheck.reference import Larger, Pivot, same
from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.lag_law import Lagged, Law, bound_law, forward
from sercheck.serial.season import median
from sercheck.serial.window_t import SMALL_RISK

MODEST = 0.6
"""Size of a bound above which r scatters so unevenly that more rows are needed (found by simulation)."""
TIED, TIED_SMALL_RISK = 0.8, 0.5
"""Share of the commonest value above which moments say nothing, and the same at a risk of .001 or less (simulated)."""
FEWEST_BY_WINDOWS = 24
"""Rows of a batch below which nothing is compared with history's windows (found by simulation)."""
LINEAR = "a linear process that returns to its level, without a cycle longer than a third of the window"
"""What is taken for granted where a window is judged by itself."""
NO_HISTORY = "no history: pass --history or learn a baseline"

Lag = Annotated[int, Field(ge=1, strict=True)]


def must_be_one_of_both(lag: int | None, lags: tuple[int, ...] | None) -> None:
    """Refuse both or none of ``lag`` and ``lags``, and a lag that is there twice.

    Raises:
        ValueError: says what is wanted; several wishes stand on lines of their own.
    """
    wanted = ["exactly one of 'lag' and 'lags'"] if (lag is None) == (lags is None) else []
    wanted += ["each lag once in 'lags'"] if lags is not None and len(set(lags)) < len(lags) else []
    if wanted:
        raise ValueError("\n".join(wanted))


class LagFields(BaseModel):
    """Fields ``lag`` (one) or ``lags`` (several), in steps, from 1."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    lag: Lag | None = Field(default=None, description="Lag in steps, from 1.")
    lags: Annotated[tuple[Lag, ...], Field(min_length=1)] | None = Field(
        default=None, description="Several lags in steps; each is judged by itself."
    )

    @model_validator(mode="after")
    def _one_of_both(self) -> LagFields:
        must_be_one_of_both(self.lag, self.lags)
        return self

    @property
    def chosen(self) -> tuple[int, ...]:
        """The lags, one or several."""
        return (self.lag,) if self.lag is not None else self.lags or ()


def window_counts(panel: Panel, lags: tuple[int, ...]) -> tuple[Ints, Ints]:
    """Observed and missing values of the window, both of shape (S, L)."""
    n = (~np.isnan(panel.window)).sum(axis=1, dtype=np.int64)
    shape = (len(n), len(lags))
    return np.broadcast_to(n[:, None], shape), np.broadcast_to(panel.window.shape[1] - n[:, None], shape)


def ask_variety(reasons: Reasons, panel: Panel, observed: Floats, risk: float) -> None:
    """Undecided where the window is constant, or one value makes up most of its rows."""
    limit = TIED_SMALL_RISK if risk <= SMALL_RISK else TIED
    middle = panel.remember("window median", lambda: median(panel.window))
    n = np.maximum((~np.isnan(panel.window)).sum(axis=1), 1)
    # a value that more than half of the rows have is their median
    share = (panel.window == middle[:, None]).sum(axis=1) / n
    reasons.add(np.isnan(middle)[:, None], "no values in the window")
    reasons.add(
        (np.isnan(observed).all(axis=1) & (share >= 1))[:, None], "all values of the window are equal: nothing varies"
    )
    reasons.add(
        (share > limit)[:, None],
        f"one value makes up more than {limit:.0%} of the rows: use the measure rate or repeats for it",
    )


def ask_rows(reasons: Reasons, n: Ints, rows: Ints, lags: tuple[int, ...], fewest: Callable[[int], int]) -> None:
    """Undecided where a lag has too few rows, or too few that have a partner at that lag."""
    for column, lag in enumerate(lags):
        need = fewest(lag)
        here = np.arange(len(lags)) == column
        reasons.add((n < need) & here, f"fewer than {need} values in the window: lag {lag} needs {need}")
        reasons.add(
            (rows < need) & here,
            f"gaps leave fewer than {need - lag} complete stretches over lag {lag}: {need - lag} are needed",
        )


def fewest_for_bound(bounds: list[float], least: int, cycles: int) -> Callable[[int], int]:
    """Rows that a literal bound at a lag needs: more for one above ``MODEST``, from which r scatters unevenly."""
    steep = any(abs(b) > MODEST for b in bounds)
    return lambda lag: max(168, 7 * lag) if steep else max(least, cycles * lag)


def literal_bounds(question: Question) -> list[tuple[Side, float]]:
    """The sides that the rule looks at with the author's numbers."""
    sides: tuple[tuple[Side, float | None], ...] = (("upper", question.stays.high), ("lower", question.stays.low))
    return [(side, bound) for side, bound in sides if bound is not None]


def held_to_bounds(
    panel: Panel, question: Question, seen: Lagged, *,
    flat: str, wanders: Bools, advice: str, method: str, assumes: str, season: str | None = None,
) -> Measurement:  # fmt: skip
    """Autocorrelations against the author's numbers.

    ``flat`` says why there may be none; ``wanders``, shape (S,), where the series has no level, and ``advice`` what to
    do about it.
    """
    lags = tuple(int(lag) for lag in seen.lags)
    n, n_missing = window_counts(panel, lags)
    bounds = literal_bounds(question)
    reasons = Reasons(n.shape)
    ask_variety(reasons, panel, seen.r, question.risk)
    ask_rows(reasons, n, seen.rows, lags, fewest_for_bound([bound for _, bound in bounds], 48, 4))
    reasons.add(np.isnan(seen.r), flat)
    reasons.add(wanders[:, None], advice)
    references: dict[Side, Reference] = {}
    error = np.full(n.shape, np.nan)
    with np.errstate(divide="ignore"):
        naive, reach = 1 / np.sqrt(n), 1 - seen.lags / np.where(seen.rows > 0, seen.rows, np.nan)
    for side, bound in bounds:
        if abs(bound) >= 1:
            reasons.add(where=True, text=f"an autocorrelation lies between -1 and 1: a bound of {bound:g} says nothing")
            continue
        law = bound_law(seen, bound)
        references[side] = correlation_reference(seen.r, law, np.full(n.shape, bound), naive)
        ask_reach(reasons, references[side], side, reach, question.risk / len(bounds))
        error = np.fmax(error, law.error)
    return Measurement(
        observed=seen.r,
        n=n,
        n_missing=n_missing,
        n_eff=np.where(np.isnan(seen.r), np.nan, 1 / error**2),
        upper=references.get("upper"),
        lower=references.get("lower"),
        undecided=reasons.index,
        reasons=tuple(reasons.texts),
        method=method,
        assumes=assumes,
        lags=lags,
        season=season,
    )


def correlation_reference(
    r: Floats, law: Law, bound: Floats, naive_error: Floats, to_unit: Callable[[Floats], Floats] = np.tanh
) -> Reference:
    """The reference of a correlation: on the scale of atanh and, where the law is doubtful, on its own as well."""
    error = np.where(np.isnan(r), np.nan, law.error)
    first = Pivot(
        statistic=forward(r),
        centre=law.centre,
        scale=law.scale,
        df=law.df,
        bound=bound,
        standard_error=error,
        to_unit=to_unit,
        naive_scale=naive_error,
        naive_centre=bound,
        naive_to_unit=same,
    )
    doubt: Bools = np.asarray(law.doubtful)
    if not doubt.any():
        return first
    second = Pivot(
        statistic=np.where(doubt, r, first.statistic),
        centre=np.where(doubt, law.plain_centre, law.centre),
        scale=np.where(doubt, law.error, law.scale),
        df=law.df,
        bound=bound,
        standard_error=error,
        to_unit=lambda x: np.where(doubt, x, to_unit(x)),
    )
    return Larger(first, second)


def ask_reach(reasons: Reasons, reference: Reference, side: Side, reach: Floats, risk: float) -> None:
    """Undecided where the limit lies beyond what a correlation in the window can reach."""
    limit = reference.limit(side, np.full(reach.shape, risk))
    with np.errstate(invalid="ignore"):
        reasons.add(
            limit > reach if side == "upper" else limit < -reach,
            "the limit lies beyond what a correlation in this window can reach: a longer window is needed",
        )


def seasons_left(panel: Panel) -> str:
    """What ``assumes`` says about the seasons that a feed has, where the rule judges lags by the author's numbers."""
    named = ", ".join(f"{name} ({length} steps)" for name, length in sorted(panel.axis.lengths.items()))
    return f", and that the cycles of {named} are taken out by after (left in, they decide)" if named else ""


def no_level(panel: Panel) -> str:
    """Why a series has no level that it returns to, and what to do about it."""
    seasons = [name for name in sorted(panel.axis.lengths) if f"without_season {name}" not in panel.after]
    difference = "" if "difference" in panel.after else "difference first (after: difference)"
    cycle = f"take the cycle out (after: {{without_season: {seasons[0]}}})" if seasons else ""
    advice = " or ".join(part for part in (cycle, difference) if part) or "look at the feed by itself first"
    what = "follows a cycle or wanders" if seasons else "wanders"
    return f"the series {what} without a level to return to: {advice}"
