"""How much does a row still tell about the one a lag later, once the rows between are known?

Null hypothesis: the partial autocorrelation at the lag equals the bound; with ``like: history``, that of history.

``observed`` is the last Yule-Walker coefficient of order k (Durbin 1960), as R's pacf gives it. What is tested is
Burg's (1975) estimate k̂ of the same, which has less bias, and ``limit`` is moved by the difference of the two.

Literal bound b: an autoregression fitted to the window (order by AICc, at most 16; times one echo at a lag up to a
third of the window where its innovations show one, a cycle that evolves), with b as its reflection coefficient at the
lag, gives the weights with which the innovations' autocorrelations move k̂ (from Bartlett 1946), hence its variance V,
and with the innovations the robust V_h (after Taylor 1984). With s² = max(V, V_h), g = 1 - b² and the bias
β = -(a + (k + 2) b)/n, a = 1 at odd and 2 at even lags (Shaman and Stine 1988), corrected for orders beyond the lag,
Z = [atanh k̂ - atanh b - β/g - b s²/g²] g/s is standard normal.

``like: history``: cycles that history holds at least four times are taken out, and atanh k̂ of the window is compared
with that of history's m windows of the same length by Student's t on m - 1 degrees of freedom. It is taken for granted
that the feed's history is stationary.

Unit: none, between -1 and 1.
Missing values: Burg's sums run over complete stretches of k + 1 rows; ``observed`` uses complete pairs (as R does with
na.pass). Nothing is closed up.
Minimum: max(96, 7k) rows for a bound; against history max(24, 4k) rows and 8 windows of history (20 at a risk of .001
or less). Undecided too when the limit lies beyond ±1, when the largest root of a literal test exceeds .98 (difference
first), and when one value makes up more than 80 % of the rows (50 % at a risk of .001 or less).
A season left in makes the literal test worthless: take it out by ``after``. Where the window's own means are taken out
for want of history, variance and bias allow for them. Known weak cell: rows that are no linear process, such as the
exponential of an autoregression: .10/.030/.006 fail at a risk of .05/.01/.001 at lag 2 (take logarithms by ``after``).

Example::

    name: no second-order memory
    measure: partial_autocorrelation
    lag: 2
    after: difference
    stays: {between: [-0.3, 0.3]}
"""

from __future__ import annotations

from collections.abc import Callable
from typing import ClassVar

import numpy as np
from pydantic import BaseModel

from sercheck.baseline import remembered, residual
from sercheck.grid import Panel
from sercheck.measure import Measure, Measurement, Picture, Question, Reasons, Reference, Side, Stays
from sercheck.measures._lags import (
    FEWEST_BY_WINDOWS,
    LINEAR,
    NO_HISTORY,
    LagFields,
    ask_rows,
    ask_variety,
    literal_bounds,
    no_level,
    seasons_left,
    window_counts,
)
from sercheck.measures._window_models import own_models
from sercheck.reference import Pivot, same
from sercheck.serial.arrays import Floats, Ints
from sercheck.serial.autocovariances import autocorrelation_of, step_down
from sercheck.serial.autocovariances import partial_autocorrelation as sample
from sercheck.serial.lag_law import forward
from sercheck.serial.partial_law import PartialLaws, reflections
from sercheck.serial.window_t import count_windows, fewest_windows, window_t, windows

BURG = "Burg's estimate on the scale of atanh, "


class PartialAutocorrelation(Measure):
    """Partial autocorrelation at one or several lags."""

    kinds: ClassVar[frozenset[str]] = frozenset({"below", "above", "between", "like_history"})
    span: ClassVar[tuple[float, float]] = (-1.0, 1.0)
    Fields: ClassVar[type[LagFields]] = LagFields

    def picture(self, fields: BaseModel, stays: Stays) -> Picture:
        return "partial"

    def run(self, panel: Panel, question: Question) -> Measurement:
        fields = question.fields
        assert isinstance(fields, LagFields)  # the engine hands over what ``Fields`` validated
        if question.stays.literal:
            return _against_bounds(panel, question, fields.chosen)
        return _against_history(panel, question, fields.chosen)


def _against_bounds(panel: Panel, question: Question, lags: tuple[int, ...]) -> Measurement:
    steps: Ints = np.array(lags, dtype=np.int64)
    n, n_missing = window_counts(panel, lags)
    models = own_models(panel)
    laws = panel.remember(
        ("partial laws", lags), lambda: PartialLaws(panel.window, steps, panel.own_cycle, models)
    )
    observed = step_down(autocorrelation_of(models.data, np.arange(1, max(lags) + 1)))[:, steps - 1]
    bounds = literal_bounds(question)
    reasons = Reasons(n.shape)
    ask_variety(reasons, panel, observed, question.risk)
    ask_rows(reasons, n, laws.estimate.rows, lags, lambda lag: max(96, 7 * lag))
    reasons.add(
        np.isnan(observed), "the window varies by no more than the rounding of its numbers, or has too many gaps"
    )
    reasons.add(
        laws.wanders[:, None],
        no_level(panel),
    )
    references: dict[Side, Reference] = {}
    error = np.full(n.shape, np.nan)
    apart = _apart(observed, laws.estimate.k)
    with np.errstate(divide="ignore"):
        naive = 1 / np.sqrt(n)
    for side, bound in bounds:
        if abs(bound) >= 1:
            reasons.add(
                where=True, text=f"a partial autocorrelation lies between -1 and 1: a bound of {bound:g} says nothing"
            )
            continue
        law = laws.under(bound)
        infinite = np.full(n.shape, np.inf)
        references[side] = Pivot(
            statistic=forward(laws.estimate.k),
            centre=law.centre,
            scale=law.scale,
            df=infinite,
            bound=np.full(n.shape, bound),
            standard_error=np.where(np.isnan(observed), np.nan, law.error),
            to_unit=apart,
            naive_scale=naive,
            naive_centre=np.full(n.shape, bound),
            naive_to_unit=same,
        )
        _ask_reach(reasons, references[side], side, question.risk / len(bounds))
        error = np.fmax(error, law.error)
    return Measurement(
        observed=observed,
        n=n,
        n_missing=n_missing,
        n_eff=np.where(np.isnan(observed), np.nan, 1 / error**2),
        upper=references.get("upper"),
        lower=references.get("lower"),
        undecided=reasons.index,
        reasons=tuple(reasons.texts),
        method=BURG
        + "variance and bias of an autoregression with the bound imposed (Quenouille 1949; Shaman and Stine "
        "1988; Taylor 1984)",
        assumes=LINEAR + seasons_left(panel),
        lags=lags,
    )


def _apart(observed: Floats, k: Floats) -> Callable[[Floats], Floats]:
    """From the scale of atanh to that of ``observed``, which differs from Burg's estimate by its own bias."""
    moved = np.nan_to_num(observed - k)
    return lambda z: np.asarray(np.tanh(z) + moved, dtype=np.float64)


def _ask_reach(reasons: Reasons, reference: Reference, side: Side, risk: float) -> None:
    limit = reference.limit(side, np.full(reasons.index.shape, risk))
    with np.errstate(invalid="ignore"):
        reasons.add(
            limit >= 1 if side == "upper" else limit <= -1,
            "the limit lies beyond what a partial autocorrelation can reach: a longer window is needed",
        )


def _against_history(panel: Panel, question: Question, lags: tuple[int, ...]) -> Measurement:
    steps: Ints = np.array(lags, dtype=np.int64)
    n, n_missing = window_counts(panel, lags)
    shape = n.shape
    without = residual(panel)
    batch, history = without.values[:, panel.start :], remembered(panel, without.values[:, : panel.start])
    observed = sample(batch, steps)
    now = reflections(batch, steps)
    stretches = windows(history, max(batch.shape[1], 1))
    series, m, length = stretches.shape
    then = reflections(stretches.reshape(series * m, length), steps)
    rows = then.rows.reshape(series, m, len(lags))
    # a window with under half of the batch's rows scatters by a law of its own
    old = np.where(2 * rows >= now.rows[:, None, :], forward(then.k).reshape(series, m, len(lags)), np.nan)
    law, count = window_t(old, forward(now.k)), count_windows(old)
    usual = np.where(np.isnan(old), 0, rows).sum(axis=1) / np.maximum(count, 1)
    reasons = Reasons(shape)
    reasons.add(np.count_nonzero(~np.isnan(history), axis=1, keepdims=True) == 0, NO_HISTORY)
    ask_variety(reasons, panel, observed, question.risk)
    ask_rows(reasons, n, now.rows, lags, lambda lag: max(FEWEST_BY_WINDOWS, 4 * lag))
    reasons.add(
        np.isnan(observed), "the window varies by no more than the rounding of its numbers, or has too many gaps"
    )
    need = fewest_windows(question.risk)
    reasons.add(
        count < need,
        f"history holds fewer than {need} windows of {length} steps: {need} are needed at a risk of {question.risk:g}",
    )
    reasons.add(4 * now.rows < 3 * usual, "the window has many more gaps than those of history")
    apart = _apart(observed, now.k)
    bound = np.tanh(law.centre)
    error = law.scale * (1 - bound**2)
    with np.errstate(divide="ignore"):
        naive = np.sqrt((1 + 1 / np.maximum(count, 1)) / n)
    reference = Pivot(
        statistic=forward(now.k),
        centre=law.centre,
        scale=law.scale,
        df=law.df,
        bound=bound,
        standard_error=error,
        to_unit=apart,
        naive_scale=naive,
        naive_centre=bound,
        naive_to_unit=same,
    )
    cycles = f", cycles of {', '.join(without.seasons)} taken out" if without.seasons else ""
    with np.errstate(divide="ignore", invalid="ignore"):  # windows that are all alike have no error
        n_eff = np.where(count < need, np.nan, n * (naive / error) ** 2)
    return Measurement(
        observed=observed,
        n=n,
        n_missing=n_missing,
        n_eff=n_eff,
        upper=reference,
        lower=reference,
        undecided=reasons.index,
        reasons=tuple(reasons.texts),
        method=BURG + "Student's t over history's windows",
        assumes="stationary history" + cycles,
        lags=lags,
    )
