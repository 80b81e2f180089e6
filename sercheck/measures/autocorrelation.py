"""How strongly do rows a fixed lag apart resemble each other?

Null hypothesis: the autocorrelation at the lag equals the bound; with ``like: history``, that of history.

r_k = Σ (x_t - m)(x_{t+k} - m) / Σ (x_t - m)², m the mean of the window (divisor n at every lag).

Literal bound b: an autoregression (Burg 1975; order by AICc, at most 16), times one echo at a lag up to a third of the
window where its innovations show one (a cycle that evolves), is fitted to the window and bent so that its own
autocorrelation at the lag is b. It gives the variance V of r_k (Bartlett 1946) and the bias β (Kendall 1954; Marriott
and Pope 1954); the innovations give the robust variance V_h (after Taylor 1984). With s² = max(V, V_h) and g = 1 - b²,
Z = [atanh r_k - atanh b - β/g - b s²/g²] g/s is standard normal.

``like: history``: cycles that history holds at least four times are taken out. The same quantities from history's own
autoregression give the law of the difference of atanh r_k. Where that model does not describe how r_k scattered in
history's windows of the batch's length (or κ = V_h/V exceeds 2, or a root .98), those windows alone give the law:
Student's t on m - 1 degrees of freedom. It is taken for granted that the feed's history is stationary.

Unit: none, between -1 and 1.
Missing values: the sum runs over complete pairs, divided by their number plus k (as R does with na.pass); gaps widen
the error (Parzen 1963) and nothing is closed up.
Minimum: max(48, 4k) rows for a bound within ±.6, max(168, 7k) above; against history max(24, 4k) rows, and 8 windows
of history (20 at a risk of .001 or less) where the windows decide. Undecided too when the limit lies beyond ±(1 - k/n),
when the largest root of a literal test exceeds .98 (difference first), and when one value makes up more than 80 % of
the rows (50 % at a risk of .001 or less).
A season left in makes the literal test worthless: take it out by ``after``. Where the window's own means are taken out
for want of history, variance and bias allow for them (n less the steps of the cycle is what is left to tell).

Example::

    name: hourly steps keep little memory
    measure: autocorrelation
    lag: 1
    after: [difference, {without_season: day}]
    stays: {below: 0.4}
"""

from __future__ import annotations

from typing import ClassVar

import numpy as np
from pydantic import BaseModel

from sercheck.baseline import remembered, residual
from sercheck.grid import Panel
from sercheck.measure import Measure, Measurement, Picture, Question, Reasons, Reference, Stays
from sercheck.measures._lags import (
    FEWEST_BY_WINDOWS,
    LINEAR,
    NO_HISTORY,
    LagFields,
    ask_rows,
    ask_variety,
    correlation_reference,
    held_to_bounds,
    no_level,
    seasons_left,
    window_counts,
)
from sercheck.measures._past import combined
from sercheck.measures._window_models import own_models
from sercheck.recent import enough, recent_measurement, recent_past
from sercheck.serial.arrays import Floats, Ints
from sercheck.serial.autocovariances import autocorrelation as sample
from sercheck.serial.lag_law import history_law, lagged_alone
from sercheck.serial.window_t import fewest_windows


class Autocorrelation(Measure):
    """Autocorrelation at one or several lags."""

    kinds: ClassVar[frozenset[str]] = frozenset({"below", "above", "between", "like_history"})
    span: ClassVar[tuple[float, float]] = (-1.0, 1.0)
    Fields: ClassVar[type[LagFields]] = LagFields

    def picture(self, fields: BaseModel, stays: Stays) -> Picture:
        return "correlogram"

    def run(self, panel: Panel, question: Question) -> Measurement:
        fields = question.fields
        assert isinstance(fields, LagFields)  # the engine hands over what ``Fields`` validated
        if question.stays.literal:
            return _against_bounds(panel, question, fields.chosen)
        raw = panel.before
        if raw is None or panel.after != "difference" or fields.chosen != (1,):
            return _against_history(panel, question, fields.chosen)
        return combined(
            enough(raw),
            lambda: recent_measurement(
                raw, recent_past(raw, logs=not question.together).difference_autocorrelation(question.rests), lag=1
            ),
            lambda: _against_history(panel, question, fields.chosen),
        )


def _against_bounds(panel: Panel, question: Question, lags: tuple[int, ...]) -> Measurement:
    steps: Ints = np.array(lags, dtype=np.int64)
    seen = panel.remember(
        ("lagged", lags), lambda: lagged_alone(panel.window, steps, panel.own_cycle, own_models(panel))
    )
    return held_to_bounds(
        panel,
        question,
        seen,
        flat="the window varies by no more than the rounding of its numbers",
        wanders=seen.wanders,
        advice=no_level(panel),
        method="atanh r, variance and bias of an autoregression with the bound imposed "
        "(Bartlett 1946; Kendall 1954; Taylor 1984)",
        assumes=LINEAR + seasons_left(panel),
    )


def _against_history(panel: Panel, question: Question, lags: tuple[int, ...]) -> Measurement:
    steps: Ints = np.array(lags, dtype=np.int64)
    n, n_missing = window_counts(panel, lags)
    reasons = Reasons(n.shape)
    if not panel.start:
        r = sample(panel.window, steps)
        reasons.add(where=True, text=NO_HISTORY)
        quiet = np.full(n.shape, np.nan)
        return _told(r, quiet, n, n_missing, None, reasons, lags, "")
    without = residual(panel)
    history = remembered(panel, without.values[:, : panel.start])
    past = history_law(history, without.values[:, panel.start :], steps)
    reasons.add(np.count_nonzero(~np.isnan(history), axis=1, keepdims=True) == 0, NO_HISTORY)
    ask_variety(reasons, panel, past.batch, question.risk)
    ask_rows(reasons, n, past.rows, lags, lambda lag: max(FEWEST_BY_WINDOWS, 4 * lag))
    reasons.add(np.isnan(past.batch), "the window varies by no more than the rounding of its numbers")
    reasons.add(np.isnan(past.r), "history does not vary, or has too many gaps: nothing to compare with")
    need = fewest_windows(question.risk)
    reasons.add(
        past.by_windows & (past.windows < need),
        f"no model of history can be relied on here, and it holds fewer than {need} windows of "
        f"{panel.window.shape[1]} steps: {need} are needed at a risk of {question.risk:g}",
    )
    reasons.add(past.by_windows & past.thin, "the window has many more gaps than those of history")
    with np.errstate(divide="ignore", invalid="ignore"):  # no rows, or windows that are all alike
        naive = np.sqrt(1 / past.rows + 1 / past.past_rows)
        n_eff = np.where(past.by_windows & (past.windows < need), np.nan, n * (naive / past.law.error) ** 2)
    reference = correlation_reference(past.batch, past.law, past.r, naive)
    cycles = f", cycles of {', '.join(without.seasons)} taken out" if without.seasons else ""
    return _told(past.batch, n_eff, n, n_missing, reference, reasons, lags, cycles)


def _told(
    r: Floats,
    n_eff: Floats,
    n: Ints,
    n_missing: Ints,
    reference: Reference | None,
    reasons: Reasons,
    lags: tuple[int, ...],
    cycles: str,
) -> Measurement:
    return Measurement(
        observed=r,
        n=n,
        n_missing=n_missing,
        n_eff=n_eff,
        upper=reference,
        lower=reference,
        undecided=reasons.index,
        reasons=tuple(reasons.texts),
        method="difference of atanh r, variance and bias of history's autoregression (Bartlett 1946; Kendall 1954; "
        "Taylor 1984); where that does not describe history, Student's t over its windows",
        assumes="stationary history" + cycles,
        lags=lags,
    )
