"""Do the rows rise or fall steadily?

Null hypothesis: the slope over the window is the bound (none, against history).

Against history (``like: history``): the least-squares slope b̂ = Σ c_t z_t, c_t = (t - t̄)/Σ(t - t̄)², of the window's
normal scores in the series' own history (van der Waerden 1952). Its variance V = Σc² Σ w_jΛ_j² / Σ w_j comes from the
cosine powers Λ_j² of history's scores, w_j = |Σ c_t exp(iω_j t)|², as overlapping slopes of history would give it:
T = b̂/√V on (Σw)²/Σw² degrees of freedom.
A literal bound asks two witnesses of the window alone, of whom the more careful counts: the residuals' mean square on
B = round(.41 n^(2/3)) cosines orthogonal to level and line (Sun 2011), t on B degrees of freedom, and a long-run
variance of a fitted autoregression (Burg 1975; Berk 1974) that knows the echo of a cycle which evolves, degrees of
freedom after Satterthwaite (1946).

Fixed cycles (``seasons``) are taken out first where history, or a window without history, holds at least four of them.

Unit: change per step, in the unit of the column. Against history a slope of scores is turned into the unit by history's
quartile distance.
Missing values take no part and are never closed up.
Minimum: against history 24 rows and 8 stretches of history of the window's length (20 at a risk of .001 or less); a
literal bound 96 rows, 168 where the rows depend strongly on each other. A literal bound assumes short memory.

Example::

    name: no drift within a week
    measure: trend
    window: 7D
    stays: {like: history}
"""

from __future__ import annotations

from typing import ClassVar

import numpy as np
from pydantic import BaseModel, ConfigDict

from sercheck.baseline import chosen_seasons
from sercheck.grid import Panel
from sercheck.measure import Measure, Measurement, Question, Reasons
from sercheck.measures._past import (
    ToUnit,
    ask_history,
    ask_variety,
    cell,
    counts,
    measured,
    past,
    quartile_scale,
    score_spectrum,
    taken_out,
    variance,
    window_scores,
    without,
)
from sercheck.measures._witnesses import ask_alone, sides, two_witnesses
from sercheck.reference import Pivot
from sercheck.serial.arrays import Floats
from sercheck.serial.echoed_run import echoed_long_run
from sercheck.serial.long_run import contrast_variance, trend_cosine_long_run
from sercheck.serial.own_models import OwnModels
from sercheck.serial.season import phase_means

FEWEST_STRONG = 168
"""Rows that a literal bound needs where lag-one memory may reach .9 (simulated)."""


class TrendFields(BaseModel):
    """No fields of its own."""

    model_config = ConfigDict(extra="forbid", frozen=True)


class Trend(Measure):
    """Least-squares slope over the window."""

    kinds: ClassVar[frozenset[str]] = frozenset({"below", "above", "between", "like_history"})
    Fields: ClassVar[type[BaseModel]] = TrendFields

    def run(self, panel: Panel, question: Question) -> Measurement:
        return _literal(panel, question) if question.stays.literal else _like_history(panel, question)


def slope_contrast(x: Floats) -> Floats:
    """c_t = (t - t̄)/Σ(t - t̄)² over the observed steps, 0 elsewhere; one row when all series are complete."""
    seen = ~np.isnan(x)
    t = np.arange(x.shape[1], dtype=np.float64)
    there = np.ones((1, len(t)), dtype=bool) if seen.all() else seen
    count = np.maximum(there.sum(axis=1, keepdims=True), 1)
    apart = np.where(there, t - np.where(there, t, 0.0).sum(axis=1, keepdims=True) / count, 0.0)
    squares = (apart**2).sum(axis=1, keepdims=True)
    return np.asarray(apart / np.where(squares > 0, squares, np.nan), dtype=np.float64)


def _slope(x: Floats, contrast: Floats) -> Floats:
    return np.asarray((np.where(np.isnan(x), 0.0, x) * contrast).sum(axis=1), dtype=np.float64)


def _like_history(panel: Panel, question: Question) -> Measurement:
    told, reasons = past(panel), Reasons((len(past(panel).n), 1))
    ask_history(reasons, told, question.risk, "a trend")
    ask_variety(reasons, told, question.risk)
    spectrum, contrast = score_spectrum(panel), slope_contrast(told.window)
    at = _slope(window_scores(panel), contrast)
    spread, df = contrast_variance(spectrum, contrast)
    reasons.add(~(cell(spread) > 0), "history does not vary: there is no sampling error to allow for")
    unit = ToUnit(None, np.zeros(len(at)), quartile_scale(panel))
    with np.errstate(divide="ignore", invalid="ignore"):
        scale, naive = np.sqrt(spread), np.sqrt(spectrum.variance * (contrast**2).sum(axis=1))
        worth = (naive / scale) ** 2
    pivot = Pivot(
        statistic=cell(at),
        centre=np.zeros((len(at), 1)),
        scale=cell(scale),
        df=cell(df),
        bound=np.zeros((len(at), 1)),
        standard_error=unit(cell(scale)),
        to_unit=unit,
        naive_scale=cell(naive),
    )
    return measured(
        panel,
        reasons,
        unit(cell(at)),
        (pivot, pivot),
        n_eff=counts(panel)[0] * cell(worth),
        method="slope of normal scores, overlapping slopes of history (van der Waerden 1952; Meketon and Schmeiser "
        "1984)",
        assumes="stationary history" + without(told),
    )


def _literal(panel: Panel, question: Question) -> Measurement:
    """Least-squares slope by two witnesses of the window alone."""
    told, reasons = past(panel), Reasons((len(past(panel).n), 1))
    values, taken = _without_cycles(panel)
    contrast = slope_contrast(values)
    at = _slope(values, contrast)
    left = _residuals(values, at)
    first, second = echoed_long_run(OwnModels(left), trend=True), trend_cosine_long_run(left)
    ask_alone(reasons, panel, question, first, "a trend", FEWEST_STRONG)
    squares = np.broadcast_to((contrast**2).sum(axis=1), at.shape)
    naive = np.sqrt(variance(left) * squares)
    unit = ToUnit(None, np.zeros(len(at)), told.scale)
    errors = np.sqrt(first.variance * squares), np.sqrt(second.variance * squares)
    against = two_witnesses(panel, at, errors, (first, second), naive)
    with np.errstate(divide="ignore", invalid="ignore"):
        worth = variance(left) / np.maximum(first.variance, second.variance)
    return measured(
        panel,
        reasons,
        unit(cell(at)),
        sides(question, against),
        n_eff=counts(panel)[0] * cell(worth),
        method="slope, two long-run variances (Sun 2011; Berk 1974)",
        assumes="short memory" + taken_out(taken),
    )


def _without_cycles(panel: Panel) -> tuple[Floats, tuple[str, ...]]:
    """The window, in units of ``Past.scale``, without the phase means of its own detrended rows."""
    values = panel.window / past(panel).scale[:, None]
    names = chosen_seasons(panel.axis, values.shape[1])
    for name in names:
        left = _residuals(values, _slope(values, slope_contrast(values)))
        phase = panel.phase(name)[panel.start :]
        values = values - phase_means(left, phase, panel.axis.lengths[name])[0][:, phase]
    return values, names


def _residuals(values: Floats, slope: Floats) -> Floats:
    """What least squares on a straight line leaves."""
    rest = values - slope[:, None] * np.arange(values.shape[1])
    count = np.maximum((~np.isnan(rest)).sum(axis=1, keepdims=True), 1)
    return np.asarray(rest - np.nansum(rest, axis=1, keepdims=True) / count, dtype=np.float64)
