"""Does the series return to its level (or line), or does it wander off?

``like: history`` (prefer it). Null hypothesis: the window returns to its level as fast as history's stretches do. The
t-value of Dickey and Fuller (1979), with one lagged difference, of the rows' normal scores (van der Waerden 1952) in
history is compared with that of history's stretches of the window's length: Student's t on m - 1 degrees of freedom,
one-sided, a value nearer to 0 than usual being the fault. More lagged differences cost power and are not needed, since
history is measured in the same way. Fixed cycles are taken out.

``below: p``. Two tests of opposite null hypotheses, both about the window's level or line. The augmented Dickey-Fuller
test (Said and Dickey 1984; lags by Akaike's criterion, p-value by MacKinnon 1994) supposes a unit root; KPSS
(Kwiatkowski, Phillips, Schmidt and Shin 1992; lags by Hobijn, Franses and Ooms 2004) supposes that the series returns.
What is observed is the significance of the first. With both at the author's p: the rule is kept when the unit root is
rejected and the return is not, broken when the return is rejected and the unit root is not, undecided when they
disagree. A significance is compared as it is, without a further allowance; the rule's own risk plays no part.

Fields: ``around`` (``level``, default, or ``trend``).
Unit: against history the t-value; for a bound the significance of a unit root (0 to 1).
Missing values: a row takes part when all the rows before it that its regression needs are there; for KPSS a missing
value counts as lying on the level. Nothing is closed up.
Minimum: 24 rows and 8 stretches of history of the window's length (20 at a risk of .001 or less). For a bound 336
rows, or 96 where history shows memory that stays under .85; p from .01 to .10, since the table of KPSS ends there; no
more than a quarter missing. A season left in is invisible to both tests: take it out by ``after``.

Example::

    name: the level holds
    measure: stationarity
    around: level
    stays: {like: history}
"""

from __future__ import annotations

from typing import ClassVar, Literal

import numpy as np
from pydantic import BaseModel, ConfigDict, Field

from sercheck.baseline import remembered
from sercheck.grid import Panel
from sercheck.measure import Measure, Measurement, Question, Reasons
from sercheck.measures._exact import exact
from sercheck.measures._lags import seasons_left
from sercheck.measures._past import (
    ask_history,
    ask_rows,
    ask_variety,
    cell,
    counts,
    measured,
    past,
    scored,
    window_scores,
    without,
)
from sercheck.measures._witnesses import FEWEST_ALONE, FEWEST_STRONG
from sercheck.reference import Pivot
from sercheck.serial.arrays import Bools
from sercheck.serial.autoregression import burg, root_beyond
from sercheck.serial.lag_law import SLOW_ROOT
from sercheck.serial.unit_root import KPSS_RISKS, augmented_dickey_fuller, kpss
from sercheck.serial.window_t import window_t, windows

LAGS = 1
"""Lagged differences against history: beside 3, 12 and Akaike's choice the most power at the same size (simulated)."""
GAPPY = 0.25
"""Share of missing values above which neither test of a bound is of the feed (a plain quarter)."""


class StationarityFields(BaseModel):
    """``around``: what the series is to return to."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    around: Literal["level", "trend"] = Field(default="level", description="A level, or a straight line in time.")


class Stationarity(Measure):
    """Return to a level or a line."""

    kinds: ClassVar[frozenset[str]] = frozenset({"below", "like_history"})
    span: ClassVar[tuple[float, float]] = (0.0, 1.0)
    Fields: ClassVar[type[BaseModel]] = StationarityFields

    def run(self, panel: Panel, question: Question) -> Measurement:
        fields = question.fields
        assert isinstance(fields, StationarityFields)
        look = _significance if question.stays.literal else _like_history
        return look(panel, question, trend=fields.around == "trend")


def _like_history(panel: Panel, question: Question, *, trend: bool) -> Measurement:
    told, reasons = past(panel), Reasons((len(past(panel).n), 1))
    ask_history(reasons, told, question.risk, "a return to the level")
    ask_variety(reasons, told, question.risk)
    history = remembered(panel, scored(panel).own)
    stretches = windows(history, told.steps) if told.steps else np.empty((len(told.n), 0, 0))
    series, m, steps = stretches.shape
    few = (~np.isnan(stretches)).sum(axis=2) * 2 < steps
    then = augmented_dickey_fuller(stretches.reshape(series * m, steps), trend=trend, lags=LAGS).statistic
    now = augmented_dickey_fuller(window_scores(panel), trend=trend, lags=LAGS).statistic
    centre, scale, df = window_t(np.where(few, np.nan, then.reshape(series, m)), now)
    reasons.add(np.isnan(cell(now)), "the window does not vary, or gaps leave too few pairs of rows")
    with np.errstate(invalid="ignore"):
        reasons.add(~(cell(scale) > 0), "history does not vary, or has too many gaps: nothing to compare with")
    law = Pivot(cell(now), cell(centre), cell(scale), cell(df), cell(centre), cell(scale))
    return measured(
        panel,
        reasons,
        cell(now),
        (law, None),
        method="Dickey-Fuller t-value of normal scores against history's stretches, Student's t",
        assumes="stationary history" + without(told),
    )


def _significance(panel: Panel, question: Question, *, trend: bool) -> Measurement:
    told, reasons = past(panel), Reasons((len(past(panel).n), 1))
    p = question.stays.high
    assert p is not None  # the only literal kind is ``below``
    root, back = augmented_dickey_fuller(panel.window, trend=trend), kpss(panel.window, trend=trend)
    ask_rows(reasons, told, FEWEST_ALONE, "a test for a unit root")
    reasons.add(
        (cell(told.n) < FEWEST_STRONG) & cell(_slow(panel)).astype(bool),
        f"fewer than {FEWEST_STRONG} values in the window, and history does not show that memory is short: "
        f"{FEWEST_STRONG} are needed",
    )
    ask_variety(reasons, told, question.risk)
    reasons.add(cell(told.n) < (1 - GAPPY) * told.steps, "more than a quarter of the window is missing")
    reasons.add(
        not KPSS_RISKS[-1] <= p <= KPSS_RISKS[0],
        f"the table of KPSS reaches from {KPSS_RISKS[-1]:g} to {KPSS_RISKS[0]:g}: so must the bound",
    )
    reasons.add(np.isnan(cell(root.p_value + back.p_value)), "the window does not vary, or lies on its line")
    with np.errstate(invalid="ignore"):
        rejected, returns = root.p_value < p, back.p_value > p
    reasons.add(
        cell(rejected & ~returns).astype(bool),
        f"the tests disagree: both the unit root and the return to the {'line' if trend else 'level'} are rejected",
    )
    reasons.add(
        cell(~rejected & returns).astype(bool),
        f"the tests disagree: neither the unit root nor the return to the {'line' if trend else 'level'} is rejected",
    )
    n, n_missing = counts(panel)
    return exact(
        question.stays, root.p_value, n[:, 0], n_missing[:, 0], reasons,
        span=Stationarity.span,
        method="significance of a unit root (Said and Dickey 1984; MacKinnon 1994), confirmed by KPSS (Kwiatkowski, "
        "Phillips, Schmidt and Shin 1992)",
        assumes="no change of variance, no break" + seasons_left(panel),
    )  # fmt: skip


def _slow(panel: Panel) -> Bools:
    """Series whose memory may be long, for all that history tells (without history: all of them), shape (S,)."""
    told = past(panel)
    known = told.known >= FEWEST_STRONG
    if not known.any():
        return ~known
    return np.asarray(~known | root_beyond(burg(remembered(panel, told.history)), SLOW_ROOT))
