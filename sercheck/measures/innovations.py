"""Is what nobody could foresee still without memory, and as large as it was?

``look: whiteness`` (default). Null hypothesis: the innovations of the window are not correlated.

``look: variance``. Null hypothesis: they are as large as history's, or in the ratio that the rule states.

Innovations e are what history's autoregression (Burg 1975, order by AICc) leaves of the rows, fixed cycles taken out.

Whiteness: t_k = Σ e_t e_{t-k}/√(Σ e_t² e_{t-k}²) (Taylor 1984), k = 1 .. ``lags``, and Q = t' R⁻¹ t, R the correlation
of the products e_t e_{t-k} with what is within two standard errors of 0 taken for 0 (Dalla, Giraitis and Phillips
2022), which allows for changing variance.

Whiteness, ``like: history``: Q over 1 + (min(p, lags)/lags) n/N, p the order and N the rows of history, follows χ² with
``lags`` degrees of freedom; it is judged at half the risk, since it exceeds its law a little. For a window of seven
batches (or days) with ninety of them in history, ln Σ t_k² is compared with that of earlier windows instead:
Student's t on it less its mean over the windows that ended 7 to 34 batches earlier. One-sided.

Whiteness, literal bound: Q of a column of forecast residuals, or of the rows as they are, follows χ² with ``lags`` -
``fitted`` degrees of freedom. No history is asked. What is observed is its significance, and it is compared with the
author's number itself: no allowance is added, since a significance is one already. So with ``above: 0.01`` a healthy
series breaks the rule in one batch of a hundred, whatever the rule's own risk.
The sum of Ljung and Box (1978) decides nothing here: under changing variance it is too large three times too often.

Variance, ``like: history``: the mean square of the innovations' normal scores (van der Waerden 1952) in history's,
against a forecast from the last ninety batches, by itself and together with the six before. Where history is shorter,
ln of it against history's windows, Student's t on m - 1 degrees of freedom. A literal bound is a ratio of the variances
themselves, ln of which scatters as in history's windows; of innovations with heavy tails, or whose variance changes,
.03 then fail for too much of it at a risk of .01. Smoothing brings the variance down, noise and shuffled rows
up.

Fields: ``lags`` (10), ``fitted`` (parameters already fitted, for a column of residuals), ``look``.
Unit: whiteness is told as the sum Q against history and as significance (0 to 1) for a literal bound; the variance as
its ratio to history's.
Missing values: an innovation needs all the rows before it that the model uses; pairs with a missing one are left out;
nothing is closed up.
Minimum: 48 rows (and four for each lag) for whiteness, with three windows of history; 24 rows and 8 windows of
history (20 at a risk of .001 or less) for the variance. Never a window of one day of hours for whiteness.

Example::

    name: nothing smooths the readings
    measure: innovations
    look: variance
    stays: {like: history}
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Annotated, ClassVar, Literal

import numpy as np
from pydantic import BaseModel, ConfigDict, Field, model_validator
from scipy import special

from sercheck.baseline import remembered
from sercheck.grid import Panel
from sercheck.measure import POWER, Measure, Measurement, Picture, Question, Reasons, Reference, Side, Stays
from sercheck.measures._exact import exact
from sercheck.measures._past import (
    NO_HISTORY,
    ask_history,
    ask_rows,
    ask_variety,
    cell,
    combined,
    counts,
    measured,
    past,
    without,
)
from sercheck.measures._witnesses import sides
from sercheck.recent import day_steps, enough, recent_measurement, recent_past
from sercheck.reference import Pivot
from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.autoregression import burg
from sercheck.serial.autoregression import innovations as unforeseen
from sercheck.serial.portmanteau import Portmanteau, cumulative, learned_portmanteau
from sercheck.serial.scores import ranking
from sercheck.serial.window_t import window_t, windows

FEWEST = 48
"""Rows of a window that a sum over lags needs (found by simulation)."""
ROWS_A_LAG = 4
"""Rows for each lag: at fewer, the farthest lags have too few pairs to be normal."""
PAST_WINDOWS = 3
"""Windows of history that its model needs, so that its own errors stay smaller than the window's (simulated)."""
SHARE = 2
"""Whiteness against history is judged at the risk over this: it runs at .05 to .08 where .05 was meant (simulated)."""
OVERLAP = 7
"""Batches in a window whose whiteness is compared with its own recent past (simulated for a week of days)."""
RECENT = 90
"""Batches of history from which on that is done: 56 windows, as for a day, beyond the 34 batches before each."""


class InnovationsFields(BaseModel):
    """``lags`` in the sum, ``fitted`` parameters of a residual column, and what to look at."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    lags: Annotated[int, Field(ge=1, strict=True)] = Field(default=10, description="Correlations in the sum.")
    fitted: Annotated[int, Field(ge=0, strict=True)] = Field(
        default=0, description="Parameters that were fitted to have these residuals."
    )
    look: Literal["whiteness", "variance"] = Field(default="whiteness", description="Memory, or size.")

    @model_validator(mode="after")
    def _some_left(self) -> InnovationsFields:
        if self.fitted >= self.lags:
            raise ValueError("'fitted' below 'lags' (10 where it is not written)")
        return self


class Innovations(Measure):
    """Whiteness or variance of the innovations."""

    kinds: ClassVar[frozenset[str]] = frozenset({"below", "above", "between", "like_history"})
    span: ClassVar[tuple[float, float]] = (0.0, float("inf"))
    Fields: ClassVar[type[BaseModel]] = InnovationsFields

    def picture(self, fields: BaseModel, stays: Stays) -> Picture:
        assert isinstance(fields, InnovationsFields)
        return "innovations" if fields.look == "whiteness" else "stretch"

    def run(self, panel: Panel, question: Question) -> Measurement:
        fields = question.fields
        assert isinstance(fields, InnovationsFields)
        literal = question.stays.literal
        if fields.look == "variance":
            if literal:
                return _ratio(panel, question, scored=False)
            return combined(
                enough(panel),
                lambda: recent_measurement(
                    panel, recent_past(panel, logs=not question.together).innovations_variance(question.rests)
                ),
                lambda: _ratio(panel, question, scored=True),
            )
        if literal:
            return _significance(panel, question, fields)
        stride = _stride(panel, question)
        return combined(
            _weeks(panel, stride, fields.lags),
            lambda: replace(
                recent_measurement(panel, recent_past(panel).whiteness(stride, fields.lags)), lower=None, scores=None
            ),
            lambda: _white_by_model(panel, question, fields),
        )


@dataclass(frozen=True)
class Innovation:
    """What history's model does not foresee.

    Attributes:
        e: innovations of history and window, shape (S, T), in units of ``Past.scale``.
        order: of the model, shape (S,).
        inflation: ln of what the window's mean square exceeds history's by when nothing has changed (the final
            prediction error, Akaike 1969), shape (S,).
    """

    e: Floats
    order: Ints
    inflation: Floats


def _innovation(panel: Panel) -> Innovation:
    return panel.remember("innovations", lambda: _learned(panel))


def _learned(panel: Panel) -> Innovation:
    told = past(panel)
    model = burg(remembered(panel, told.history))
    e = unforeseen(np.concatenate([told.history, told.window], axis=1), model)
    known = np.maximum(told.known, 1)
    share = np.minimum(model.order / known, 0.5)
    return Innovation(e, model.order, np.log1p(share) - np.log1p(-share))


# -- whiteness --------------------------------------------------------------------------------------------------------


def _stride(panel: Panel, question: Question) -> int:
    """Steps of one of the seven batches (or days) that the window spans, 0 where it is no such window."""
    n = panel.window.shape[1]
    grid = question.clock.grid if question.clock else None
    batch = len(grid.axis) - grid.start if grid else 0
    return next((size for size in (batch, round(day_steps(panel.axis))) if size > 0 and n == OVERLAP * size), 0)


def _weeks(panel: Panel, stride: int, lags: int) -> Bools:
    """Series with history enough to compare the whiteness of a window with that of earlier ones, shape (S,)."""
    n = panel.window.shape[1]
    if not stride or n < max(FEWEST, ROWS_A_LAG * lags) or panel.start < RECENT * stride:
        return np.zeros(len(panel.values), dtype=bool)
    return np.asarray((~np.isnan(panel.history)).sum(axis=1) * 2 >= RECENT * stride)


@dataclass(frozen=True)
class Sum:
    """A χ² sum judged at a part of the risk; only too large a sum says something.

    Attributes:
        told: the sum and its law.
        share: what the risk is divided by.
    """

    told: Portmanteau
    share: int

    @property
    def bound(self) -> Floats:
        return np.where(np.isnan(self.told.statistic), np.nan, float(self.told.df))[:, None]

    @property
    def standard_error(self) -> Floats:
        return np.sqrt(2 * self.bound)

    def p_value(self, side: Side) -> Floats:
        p = cell(self.told.p_value)
        return np.minimum(1.0, self.share * p) if side == "upper" else 1 - p

    def limit(self, side: Side, risk: Floats) -> Floats:
        part = np.asarray(risk, dtype=np.float64) / self.share
        limit = special.chdtri(self.told.df, part if side == "upper" else 1 - part)
        return np.asarray(np.broadcast_to(limit, self.bound.shape))

    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        return np.full(self.bound.shape, np.nan)

    def detectable(self, side: Side, risk: Floats) -> Floats:
        """The noncentrality that is found with probability ``POWER``: by so much the sum grows on average."""
        limit, inverse = np.unique(self.limit(side, risk), return_inverse=True)
        return np.asarray(special.chndtrinc(limit, float(self.told.df), 1 - POWER))[inverse].reshape(self.bound.shape)


def _white_by_model(panel: Panel, question: Question, fields: InnovationsFields) -> Measurement:
    told, n_lags = past(panel), fields.lags
    reasons = Reasons((len(told.n), 1))
    reasons.add(cell(told.known) == 0, NO_HISTORY)
    seen = _innovation(panel)
    e = seen.e[:, panel.start :]
    count = (~np.isnan(e)).sum(axis=1)
    _ask_whiteness(reasons, panel, question, n_lags, count)
    reasons.add(
        cell(told.known) < PAST_WINDOWS * told.steps,
        f"history holds fewer than {PAST_WINDOWS} windows: {PAST_WINDOWS * told.steps} steps are needed",
    )
    law = learned_portmanteau(e, n_lags, seen.order, count / np.maximum(told.known, 1))
    reasons.add(np.isnan(cell(law.statistic)), "history or window does not vary, so nothing is left to look at")
    return measured(
        panel,
        reasons,
        cell(law.statistic),
        (Sum(law, SHARE), None),
        method="robust sum over lags of the innovations of history's autoregression, χ² (Taylor 1984; Dalla, Giraitis "
        "and Phillips 2022)",
        assumes="stationary history" + without(told),
    )


def _ask_whiteness(reasons: Reasons, panel: Panel, question: Question, lags: int, count: Ints) -> None:
    least = max(FEWEST, ROWS_A_LAG * lags)
    ask_rows(reasons, past(panel), least, f"whiteness over {lags} lags")
    ask_variety(reasons, past(panel), question.risk)
    reasons.add(cell(count) < least, f"gaps leave fewer than {least} innovations: {least} are needed")


def _significance(panel: Panel, question: Question, fields: InnovationsFields) -> Measurement:
    reasons = Reasons((len(panel.values), 1))
    n, n_missing = counts(panel)
    _ask_whiteness(reasons, panel, question, fields.lags, n[:, 0])
    law = cumulative(panel.window, fields.lags, fields.fitted)
    reasons.add(np.isnan(cell(law.p_value)), "the window does not vary, or a lag has no pair of rows")
    bounds = [bound for bound in (question.stays.low, question.stays.high) if bound is not None]
    reasons.add(any(bound > 1 for bound in bounds), "a significance lies between 0 and 1: so must the bound")
    return exact(
        question.stays, law.p_value, n[:, 0], n_missing[:, 0], reasons,
        span=(0.0, 1.0),
        method="significance of the robust cumulative statistic (Dalla, Giraitis and Phillips 2022), compared as it is",
        assumes=f"rows that are white when healthy, {fields.fitted} parameters fitted to them",
    )  # fmt: skip


# -- variance ---------------------------------------------------------------------------------------------------------


def _exp(x: Floats) -> Floats:
    with np.errstate(over="ignore"):
        return np.asarray(np.exp(x))


def _ratio(panel: Panel, question: Question, *, scored: bool) -> Measurement:
    """The variance of the innovations (or of their normal scores) over history's, by history's windows."""
    told, reasons = past(panel), Reasons((len(past(panel).n), 1))
    ask_history(reasons, told, question.risk, "a variance of innovations")
    ask_variety(reasons, told, question.risk)
    seen = _innovation(panel)
    before, after = seen.e[:, : panel.start], seen.e[:, panel.start :]
    if scored:
        order = ranking(before)
        before, after = order.own, order.of(after)
    with np.errstate(invalid="ignore", divide="ignore"):
        usual = np.log(_power(before, least=1)) + seen.inflation
        then = np.log(_power(windows(before, told.steps))) + (seen.inflation - usual)[:, None]
        now = np.log(_power(after)) - usual
    then, now = (np.where(np.isfinite(part), part, np.nan) for part in (then, now))
    reasons.add(np.isnan(cell(now)), "history or window does not vary, or gaps leave less than half the innovations")
    centre, scale, df = window_t(then, now)
    rows = np.maximum((~np.isnan(after)).sum(axis=1), 2)
    naive = np.sqrt(2 / (rows - 1))

    def pivot(shift: float, bound: Floats) -> Reference:
        return Pivot(
            statistic=cell(now),
            centre=cell(centre + shift),
            scale=cell(scale),
            df=cell(df),
            bound=bound,
            standard_error=bound * np.sinh(cell(scale)),
            to_unit=_exp,
            naive_scale=cell(naive),
        )

    if question.stays.literal:
        upper, lower = sides(question, lambda bound: pivot(_log(bound), np.full((len(now), 1), bound)))
    else:
        upper = lower = pivot(0.0, _exp(cell(centre)))
    with np.errstate(divide="ignore", invalid="ignore"):
        n_eff = cell(rows * (naive / scale) ** 2)
    return measured(
        panel,
        reasons,
        _exp(cell(now)),
        (upper, lower),
        n_eff=n_eff,
        method="log variance of the innovations against history's windows, Student's t",
        assumes="stationary history" + ("" if scored else ", light tails") + without(told),
    )


def _log(bound: float) -> float:
    """Logarithm of a bound; a bound of 0 lies below every ratio."""
    return float(np.log(bound)) if bound > 0 else -np.inf


def _power(e: Floats, least: int = 0) -> Floats:
    """Mean square of what is there along the last axis; NaN where less than half is (or fewer than ``least``)."""
    seen = ~np.isnan(e)
    count = seen.sum(axis=-1)
    total = np.where(seen, e, 0.0) ** 2
    enough_there = count >= max(least or e.shape[-1] / 2, 1)
    return np.where(enough_there, total.sum(axis=-1) / np.maximum(count, 1), np.nan)
