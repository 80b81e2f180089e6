"""Do as many rows arrive in a period as should?

Null hypothesis: rows per period have the bound as their level, and scatter as those of history do. Counts are never
taken for Poisson: rows of a feed come and fail together.

Rows are counted in whole periods from the window's first step on. Against history (``like: history``) a window of at
least 24 periods is judged as ``level`` judges values: mean of mid-rank normal scores (van der Waerden 1952) with the
variance of history's cosine powers (Meketon and Schmeiser 1984). A shorter window, and every literal bound with
history: the mean count c against stretches of history of the window's length by window-t, on two scales of which the
more careful counts: √(c + 3/8) (Anscombe 1948), and -ln(m + ½) of the m rows that a period lacks, which evens out that
rows fail in bursts. Tails are as heavy as those of history's stretches. A literal bound without history needs 96
periods and is judged as ``level`` does.

Fixed cycles (``seasons``) that are whole numbers of periods are taken out before a comparison with history. Periods on
closed days are not compared.

Unit: rows per period. A row that is not there is not counted; nothing is ever missing.
Minimum: 8 stretches of history of the window's length (20 at a risk of .001 or less). Undecided for an irregular feed,
whose steps have no length, and against a history whose count hardly ever changes (use ``completeness`` there).

Example::

    name: rows per day as usual
    measure: count
    per: 1D
    stays: {like: history}
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from pydantic import BaseModel, ConfigDict, field_validator

from sercheck.grid import Axis, Panel
from sercheck.measure import Measure, Measurement, Question, Reasons, Reference
from sercheck.measures._location import location_with_history
from sercheck.measures._past import (
    FEWEST_ROWS,
    NO_HISTORY,
    TIED,
    TIED_SMALL_RISK,
    cell,
    combined,
    counts,
    mean,
    measured,
    past,
    pivot_through,
    without,
)
from sercheck.measures._witnesses import mean_alone, sides
from sercheck.reference import Larger, Pivot
from sercheck.serial.arrays import Floats, Ints
from sercheck.serial.window_t import SMALL_RISK, fewest_windows, window_t, windows

UNITS = {"s": 1, "min": 60, "h": 3600, "D": 86_400, "W": 604_800}
"""Seconds of the units that a period may be written in."""
WHOLE = 0.9
"""Share of a period's steps from which it is whole (a day of 23 hours is)."""
ANSCOMBE = 3 / 8
"""Added to a count before the root so that its variance hardly depends on its mean (Anscombe 1948)."""
LEAST = 1e-9
"""Standard error of a root where history's counts never change: a literal bound is then compared as it is."""


class CountFields(BaseModel):
    """``per``: the period, a length in time or a number of steps."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    per: str | int

    @field_validator("per")
    @classmethod
    def _readable(cls, per: str | int) -> str | int:
        if isinstance(per, int):
            if per < 1:
                raise ValueError("a period is at least 1 step")
        elif _seconds(per) is None:
            raise ValueError(f"a period is a length in time such as 1D, 6h or 15min, not {per!r}")
        return per


def _seconds(length: str) -> int | None:
    found = re.fullmatch(r"([1-9][0-9]{0,6})?\s*(s|min|h|D|W)", length)
    return None if found is None else int(found[1] or 1) * UNITS[found[2]]


class Count(Measure):
    """Rows per period."""

    kinds: ClassVar[frozenset[str]] = frozenset({"below", "above", "between", "like_history"})
    of_values: ClassVar[bool] = False
    span: ClassVar[tuple[float, float]] = (0.0, float("inf"))
    Fields: ClassVar[type[BaseModel]] = CountFields

    def run(self, panel: Panel, question: Question) -> Measurement:
        assert isinstance(question.fields, CountFields)
        if question.clock is not None and question.clock.grid.irregular:
            return _mute(panel, "the feed is irregular: its steps have no length to count in")
        size = _steps(question.fields.per, question)
        if size is None:
            return _mute(panel, f"a period of {question.fields.per} is not a whole number of steps of the feed")
        rows = _per_period(panel, size)
        if rows.values.shape[1] == rows.start:
            return _mute(panel, f"the window holds no whole period of {size} steps")
        return _judged(rows, question, size)


def _steps(per: str | int, question: Question) -> int | None:
    """Steps of a period, or None when it is not a whole number of them."""
    if isinstance(per, int):
        return per
    seconds = _seconds(per)
    if seconds is None or question.clock is None or (seconds * 10**9) % question.clock.step:
        return None
    return seconds * 10**9 // question.clock.step


def _mute(panel: Panel, reason: str) -> Measurement:
    """Everything undecided for one reason."""
    n, n_missing = counts(panel)
    unknown = np.full(n.shape, np.nan)
    return Measurement(
        unknown, n, n_missing, unknown, None, None, np.zeros(n.shape, dtype=np.int64), (reason,), "none", "nothing"
    )


def _per_period(panel: Panel, size: int) -> Panel:
    """Rows of each whole period as a panel of its own; NaN before a series' first row and on closed days of history."""
    steps = panel.values.shape[1]
    period = (np.arange(steps) - panel.start) // size
    firsts = np.flatnonzero(np.diff(period, prepend=period[0] - 1))
    sizes = np.diff(firsts, append=steps)
    rows = np.add.reduceat(panel.delivered, firsts, axis=1, dtype=np.int64).astype(np.float64)
    begun = np.logical_or.accumulate(panel.delivered, axis=1)[:, firsts]
    old = period[firsts] < 0
    closed = np.logical_and.reduceat(panel.axis.closed, firsts)
    rows[:, old] = np.where(begun[:, old] & ~closed[old], rows[:, old], np.nan)
    whole = sizes >= WHOLE * size
    axis = _axis(panel.axis, firsts[whole], size, closed[whole])
    return Panel(rows[:, whole], int((whole & old).sum()), axis, np.ones(rows[:, whole].shape, dtype=bool))


def _axis(axis: Axis, firsts: Ints, size: int, closed: np.ndarray) -> Axis:
    """The axis of the periods; seasons that are whole numbers of periods stay."""
    kept = {name: n // size for name, n in axis.lengths.items() if n % size == 0 and n // size > 1}
    phases = {name: axis.phases[name][firsts] // size for name in kept}
    return Axis(axis.stamps[firsts], axis.index[firsts], kept, phases, closed, axis.expected[firsts])


def _judged(rows: Panel, question: Question, size: int) -> Measurement:
    told = past(rows)
    enough = told.stretches >= fewest_windows(question.risk)
    if question.stays.literal:
        long = told.steps >= FEWEST_ROWS * 4
        return combined(
            enough | (not long),
            lambda: _by_windows(rows, question, size),
            lambda: mean_alone(rows, question),
        )
    if told.steps >= FEWEST_ROWS:
        return location_with_history(rows, question, raw=False)
    return _by_windows(rows, question, size)


@dataclass(frozen=True)
class _Root:
    """√(c + 3/8), told below 0 as -√ so that it increases everywhere, and the way back."""

    def at(self, rows: Floats) -> Floats:
        return np.asarray(np.sqrt(np.maximum(rows, 0.0) + ANSCOMBE), dtype=np.float64)

    def __call__(self, x: Floats) -> Floats:
        return np.asarray(x * np.abs(x) - ANSCOMBE, dtype=np.float64)


@dataclass(frozen=True)
class _Lack:
    """-ln(size - c + ½), and the way back."""

    size: int

    def at(self, rows: Floats) -> Floats:
        return np.asarray(-np.log(np.maximum(self.size - rows, 0.0) + 0.5), dtype=np.float64)

    def __call__(self, x: Floats) -> Floats:
        with np.errstate(over="ignore"):
            return np.asarray(self.size + 0.5 - np.exp(-x), dtype=np.float64)


def _tails(then: Floats, df: Floats) -> tuple[Floats, Floats]:
    """Degrees of freedom of tails as heavy as history's, and by what the scale shrinks so that the variance stays.

    Student's t with ν degrees of freedom has the excess kurtosis 6/(ν - 4): ν = min(df, 4 + 6/γ), γ that of history's
    stretches.
    """
    apart = then - mean(then)[:, None]
    with np.errstate(divide="ignore", invalid="ignore"):
        excess = mean(apart**4) / mean(apart**2) ** 2 - 3
        tail = np.where(excess > 0, np.minimum(df, 4 + 6 / excess), df)
        heavier = np.sqrt(tail / (tail - 2)) / np.sqrt(df / (df - 2))
    usable = np.isfinite(heavier) & (df > 4)
    return np.where(usable, tail, df), np.where(usable, np.maximum(heavier, 1.0), 1.0)


def _by_windows(rows: Panel, question: Question, size: int) -> Measurement:
    """Mean count against history's stretches of as many periods, on two scales."""
    told, stays, reasons = past(rows), question.stays, Reasons((len(rows.values), 1))
    reasons.add(cell(told.known) == 0, NO_HISTORY)
    fewest = fewest_windows(question.risk)
    reasons.add(
        cell(told.stretches) < fewest,
        f"history holds fewer than {fewest} stretches of the window's {told.steps} periods, which a risk of "
        f"{question.risk:g} needs",
    )
    observed = (mean(told.window) + told.offset) * told.scale
    cut = windows(told.history, told.steps)
    then = mean(cut.reshape(-1, told.steps)).reshape(cut.shape[:2])
    then[np.isnan(cut).sum(axis=2) * 2 > told.steps] = np.nan
    then = (then + told.offset[:, None]) * told.scale[:, None]

    def against(bound: float | None) -> Reference:
        return Larger(*(_pivot(unit, observed, then, bound) for unit in (_Root(), _Lack(size))))

    upper: Reference | None
    lower: Reference | None
    if stays.literal:
        upper, lower = sides(question, against)
    else:
        share = TIED_SMALL_RISK if question.risk <= SMALL_RISK else TIED
        upper = lower = law = against(None)
        with np.errstate(invalid="ignore"):
            tied = (cell(told.commonest) > share) | ~(law.standard_error > 0)
        reasons.add(tied, "the count of history hardly ever changes: use the measure completeness for it")
    return measured(
        rows,
        reasons,
        cell(observed),
        (upper, lower),
        method="mean count on two scales, window-t (Anscombe 1948)",
        assumes="stationary history" + without(told),
    )


def _pivot(unit: _Root | _Lack, observed: Floats, then: Floats, bound: float | None) -> Pivot:
    """One scale's pivot; about history for ``bound`` None, else about the author's number with history's scatter."""
    at, before = unit.at(observed), unit.at(then)
    centre, wide, df = window_t(before, at)
    df, heavier = _tails(before, df)
    if bound is None:
        return pivot_through(unit, at, centre, wide / heavier, df)
    step = np.maximum(wide / np.sqrt(1 + 1 / (df + 1)) / heavier, LEAST)
    return pivot_through(unit, at, unit.at(np.full(len(at), bound)), step, df, bound=np.full((len(at), 1), bound))
