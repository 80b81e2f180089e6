"""How many independent observations are the rows worth?

Null hypothesis: the effective size of the window for its mean, n times variance over long-run variance, is the bound.

n_eff = B/g, g the share of the sum of squares in the first B = round(.41 n^(2/3)) cosines (Müller 2007; Lazarus, Lewis,
Stock and Watson 2018). A fall means more memory: smoothed, filled or repeated readings; a rise means less: noise.
Against history (``like: history``): asin √g of the window against those of m non-overlapping stretches by window-t.
A literal bound b: ln n_eff of a fitted autoregression, ln n - 2 Σ atanh k_m of its reflection coefficients k_m (Burg
1975). Its error is the larger of Σ 4/((1 - k_m²) n) and 4/((1 - φ²) n), φ = (1 - b/n)/(1 + b/n). Too low: z of that
estimate. Too high: the larger p of z after correction of the estimate's bias and of χ²_B for the cosines.

Fixed cycles (``seasons``) are taken out first where history, or a window without history, holds at least four of them.
A literal bound takes short memory for granted, and that no cycle evolves: the echo of one is beyond the model's reach,
and nine windows of ten then look worth more than a true bound of 168 rows (``like: history`` holds its rate).

Unit: observations; it may exceed n where neighbours compensate each other.
Missing values take no part and are never closed up.
Minimum: against history 24 rows and 8 stretches of history of the window's length (20 at a risk of .001 or less); a
literal bound 168 rows, and a bound above 0 and not above n.

Example::

    name: a week of readings is worth forty
    measure: effective_size
    window: 14D
    stays: {above: 40}
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from pydantic import BaseModel, ConfigDict
from scipy import special

from sercheck.baseline import remembered
from sercheck.grid import Panel
from sercheck.measure import POWER, Measure, Measurement, Picture, Question, Reasons, Side, Stays
from sercheck.measures._past import (
    ask_history,
    ask_rows,
    ask_variety,
    cell,
    measured,
    past,
    pivot_through,
    taken_out,
    variance,
    without,
)
from sercheck.measures._witnesses import own_cycles_out
from sercheck.reference import Larger
from sercheck.serial.arrays import Floats
from sercheck.serial.autoregression import burg
from sercheck.serial.effective_sizes import low_frequency_share
from sercheck.serial.long_run import autoregressive_long_run
from sercheck.serial.risk import t_quantile, t_tail
from sercheck.serial.window_t import window_t, windows

FEWEST_LITERAL = 168
"""Rows that a literal bound needs (simulated)."""


class EffectiveSizeFields(BaseModel):
    """No fields of its own."""

    model_config = ConfigDict(extra="forbid", frozen=True)


class EffectiveSize(Measure):
    """Effective number of observations for the mean."""

    kinds: ClassVar[frozenset[str]] = frozenset({"below", "above", "between", "like_history"})
    span: ClassVar[tuple[float, float]] = (0.0, float("inf"))
    Fields: ClassVar[type[BaseModel]] = EffectiveSizeFields

    def picture(self, fields: BaseModel, stays: Stays) -> Picture:
        return "correlogram"

    def run(self, panel: Panel, question: Question) -> Measurement:
        return _literal(panel, question) if question.stays.literal else _like_history(panel, question)


@dataclass(frozen=True)
class _Size:
    """Way from -asin √g to B/g; an angle of 0 or more is no share: the size has no end there."""

    count: int

    def __call__(self, x: Floats) -> Floats:
        angle = np.clip(-x, 0.0, np.pi / 2)
        with np.errstate(divide="ignore"):
            return np.asarray(self.count / np.sin(angle) ** 2, dtype=np.float64)


def _like_history(panel: Panel, question: Question) -> Measurement:
    told, reasons = past(panel), Reasons((len(past(panel).n), 1))
    ask_history(reasons, told, question.risk, "an effective size")
    ask_variety(reasons, told, question.risk)
    share, count = low_frequency_share(told.window)
    cut = windows(remembered(panel, told.history), told.steps)
    then, _ = low_frequency_share(cut.reshape(-1, told.steps))
    full = (~np.isnan(cut)).sum(axis=2) * 2 >= told.steps
    at = -_angle(share)
    centre, scale, df = window_t(np.where(full, -_angle(then).reshape(full.shape), np.nan), at)
    unit = _Size(count)
    reasons.add(np.isnan(at)[:, None], "the window does not vary")
    pivot = pivot_through(unit, at, centre, scale, df)
    return measured(
        panel,
        reasons,
        unit(cell(at)),
        (pivot, pivot),
        n_eff=unit(cell(at)),
        method="share of the first cosines, window-t (Müller 2007; Lazarus, Lewis, Stock and Watson 2018)",
        assumes="stationary history" + without(told),
    )


def _angle(share: Floats) -> Floats:
    return np.asarray(np.arcsin(np.sqrt(np.clip(share, 0.0, 1.0))), dtype=np.float64)


@dataclass(frozen=True)
class _LogSize:
    """ln of an estimate is normal about ln of the bound; told in terms of the observed size, shape (S, 1) each.

    The estimate and the observed size differ, so the limit is the observed size moved as far as the estimate would
    have to move to reach its own.
    """

    estimate: Floats
    log_bound: Floats
    scale: Floats
    observed: Floats

    @property
    def bound(self) -> Floats:
        return np.exp(self.log_bound)

    @property
    def standard_error(self) -> Floats:
        return self.bound * self.scale

    def p_value(self, side: Side) -> Floats:
        z = (self.estimate - self.log_bound) / self.scale
        return t_tail(z if side == "upper" else -z, np.inf)

    def limit(self, side: Side, risk: Floats) -> Floats:
        step = t_quantile(1 - risk, np.inf) * self.scale
        with np.errstate(over="ignore"):
            at = self.log_bound + (step if side == "upper" else -step)
            return np.asarray(self.observed * np.exp(at - self.estimate), dtype=np.float64)

    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        del side
        return np.full(np.broadcast(self.estimate, risk).shape, np.nan)

    def detectable(self, side: Side, risk: Floats) -> Floats:
        reach = (t_quantile(1 - risk, np.inf) + t_quantile(POWER, np.inf)) * self.scale
        return np.asarray(np.abs(self.bound * np.expm1(reach if side == "upper" else -reach)), dtype=np.float64)


@dataclass(frozen=True)
class _Cosines:
    """B times bound over observed size follows χ² with B degrees of freedom (too large only), shape (S, 1) each."""

    observed: Floats
    bound: Floats
    count: int

    @property
    def standard_error(self) -> Floats:
        return np.asarray(self.bound * np.sqrt(2 / max(self.count, 1)), dtype=np.float64)

    def p_value(self, side: Side) -> Floats:
        del side
        return np.asarray(special.chdtr(self.count, self.count * self.bound / self.observed), dtype=np.float64)

    def limit(self, side: Side, risk: Floats) -> Floats:
        del side
        return np.asarray(self.count * self.bound / special.chdtri(self.count, 1 - risk), dtype=np.float64)

    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        del side
        return np.full(np.broadcast(self.observed, risk).shape, np.nan)

    def detectable(self, side: Side, risk: Floats) -> Floats:
        del side
        ratio = special.chdtri(self.count, 1 - POWER) / special.chdtri(self.count, 1 - risk)
        return np.asarray(self.bound * (ratio - 1), dtype=np.float64)


def _literal(panel: Panel, question: Question) -> Measurement:
    told, stays, reasons = past(panel), question.stays, Reasons((len(past(panel).n), 1))
    values, taken = (told.window, told.seasons) if told.seasons else own_cycles_out(panel)
    rows = cell(np.maximum(told.n, 1))
    share, count = low_frequency_share(values)
    with np.errstate(divide="ignore", invalid="ignore"):
        observed = cell(count / share)
        model = burg(values)
        plain = np.log(rows) - 2 * cell(np.arctanh(model.reflection).sum(axis=1))
        own_error = cell((4 / (1 - model.reflection**2) * (model.reflection != 0)).sum(axis=1)) / rows
        corrected = np.log(rows * cell(variance(values) / autoregressive_long_run(values).variance))
    ask_rows(reasons, told, FEWEST_LITERAL, "a literal effective size")
    ask_variety(reasons, told, question.risk)
    reasons.add(np.isnan(observed) | np.isnan(corrected), "the window does not vary")
    for bound in (stays.low, stays.high):
        if bound is not None:
            outside = ~((rows >= bound) & (bound > 0))
            reasons.add(outside, f"a bound of {bound:g} is not between 0 and the number of rows")

    def about(bound: float, estimate: Floats) -> _LogSize:
        ratio = min(max(bound, np.finfo(float).tiny), np.inf) / rows
        phi = (1 - ratio) / (1 + ratio)
        with np.errstate(divide="ignore"):
            scale = np.sqrt(np.maximum(own_error, 4 / ((1 - phi**2) * rows)))
        return _LogSize(estimate, np.full(rows.shape, np.log(max(bound, np.finfo(float).tiny))), scale, observed)

    upper = lower = None
    if stays.high is not None:
        chi = _Cosines(observed, np.full(rows.shape, stays.high), count)
        upper = Larger(about(stays.high, corrected), chi)
    if stays.low is not None:
        lower = about(stays.low, plain)
    return measured(
        panel,
        reasons,
        observed,
        (upper, lower),
        n_eff=observed,
        method="autoregression and first cosines (Burg 1975; Lazarus, Lewis, Stock and Watson 2018)",
        assumes="short memory, no cycle that evolves" + taken_out(taken),
    )
