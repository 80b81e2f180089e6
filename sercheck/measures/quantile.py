"""Is a quantile of the values where it should be?

Null hypothesis: the q-quantile is the bound, and values beyond it come in clusters like those of history and window.

A literal bound b asks how many rows lie beyond it: the quantile stays below b when no more than a share 1 - q of the
rows lies above, which is judged exactly by the binomial law on effective sizes k/τ and n/τ (Clopper and Pearson 1934;
Korn and Graubard 1998), τ the size of the clusters in history and window together (as in ``rate``). The limit is
the bound moved by the distance from the observed quantile to its own confidence limit, the order statistic that the
binomial law gives: the observation is beyond the limit exactly when the rule fails.
Against history (``like: history``) the quantile of the window, as a normal score in the series' own history (van der
Waerden 1952), is compared with those of m non-overlapping stretches by window-t: T = (z - mean)/(sd √(1 + 1/m)).

Fixed cycles (``seasons``) are taken out before a comparison with history, unless the window is a whole number of them;
a literal bound is about the rows as they are.

Unit: the unit of the column; the quantile between two rows is interpolated.
Missing values take no part and are never closed up.
Minimum: against history 24 rows, three of them beyond the quantile, and 8 stretches of history of the window's length
(20 at a risk of .001 or less). With fewer than 3 effective rows expected beyond a literal bound a pass is undecided.

Example::

    name: nine readings in ten are below 80
    measure: quantile
    q: 0.9
    stays: {below: 80}
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import ClassVar

import numpy as np
from pydantic import BaseModel, ConfigDict, Field
from scipy import special

from sercheck.grid import Panel
from sercheck.measure import POWER, Measure, Measurement, Question, Reasons, Side, told_reasons
from sercheck.measures._cycle import clusters_assumed, shortest_cycle
from sercheck.measures._past import (
    MUTE,
    Past,
    ToUnit,
    ask_history,
    ask_variety,
    at_the_end,
    cell,
    counts,
    measured,
    out_of_reach,
    past,
    pivot_through,
    scored,
    without,
)
from sercheck.serial.arrays import Floats
from sercheck.serial.quantiles import in_order, order_statistic, quantile
from sercheck.serial.rates import AgainstShare, against_share
from sercheck.serial.scores import Ranking, ranking
from sercheck.serial.window_t import window_t, windows

FEWEST_BEYOND = 3.0
"""Rows beyond the quantile that a comparison with history needs, so that it is not an extreme value (simulated)."""


class QuantileFields(BaseModel):
    """``q``: which quantile, between 0 and 1."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    q: float = Field(gt=0, lt=1)


class Quantile(Measure):
    """One quantile of the window."""

    kinds: ClassVar[frozenset[str]] = frozenset({"below", "above", "between", "like_history"})
    Fields: ClassVar[type[BaseModel]] = QuantileFields

    def run(self, panel: Panel, question: Question) -> Measurement:
        assert isinstance(question.fields, QuantileFields)
        make = _literal if question.stays.literal else _like_history
        return make(panel, question, question.fields.q)


@dataclass(frozen=True)
class OrderStatistic:
    """The quantile against a number, through the share of rows beyond the number.

    Attributes:
        law: share of rows beyond, shape (S, 1).
        upper: beyond is above.
        observed: the window's quantile, shape (S, 1).
        bound: the author's number, shape (S, 1).
        rows: the window's values in order, missing last, shape (S, n).
        everything: history's and the window's values in order, shape (S, T), with their number in ``held``.
        q: which quantile.
    """

    law: AgainstShare
    upper: bool
    observed: Floats
    bound: Floats
    rows: Floats
    everything: Floats
    held: Floats
    q: float

    @property
    def standard_error(self) -> Floats:
        share = self.law.standard_error
        return (self._place(self.q + share) - self._place(self.q - share)) / 2

    def p_value(self, side: Side) -> Floats:
        del side  # the law is about this side's rows only
        return self.law.p_value("upper")

    def limit(self, side: Side, risk: Floats) -> Floats:
        del side
        return self._moved(self.law.limit("upper", risk))

    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        del side
        return self._moved(self.law.naive_limit("upper", risk))

    def detectable(self, side: Side, risk: Floats) -> Floats:
        """The shift that puts the detectable share of the distribution of history and window beyond the bound."""
        del side
        more = self.law.detectable("upper", risk)
        far = self.q - more if self.upper else self.q + more
        shift = np.abs(self._place(np.full(far.shape, self.q)) - self._place(far))
        return np.where((far > 0) & (far < 1), shift, np.nan)

    def _moved(self, share: Floats) -> Floats:
        """The bound moved by the distance from the observed quantile to the order statistic that would fail.

        Endless where not even all rows beyond the bound would.
        """
        beyond = np.rint(share * self.law.rows)
        place = self.law.rows - beyond if self.upper else beyond - 1
        moved = self.bound + (self.observed - order_statistic(self.rows, place))
        return np.where(np.isnan(share), np.inf if self.upper else -np.inf, moved)

    def _place(self, probability: Floats) -> Floats:
        return quantile(self.everything, self.held, np.clip(probability, 0.0, 1.0))


def _literal(panel: Panel, question: Question, q: float) -> Measurement:
    reasons, unsure = Reasons((len(panel.values), 1)), Reasons((len(panel.values), 1))
    n = counts(panel)[0]
    rows = in_order(panel.window)
    everything, held = in_order(panel.values), cell((~np.isnan(panel.values)).sum(axis=1))
    observed = quantile(rows, cell(n[:, 0]), np.full((len(rows), 1), q))
    reasons.add(n == 0, "no value in the window")
    tau = []

    def against(*, bound: float, upper: bool) -> OrderStatistic:
        beyond = panel.values > bound if upper else panel.values < bound
        marks = np.where(np.isnan(panel.values), np.nan, beyond)
        law = against_share(marks, panel.start, 1 - q if upper else q, POWER, season=shortest_cycle(panel))
        tau.append(law.tau)
        with np.errstate(invalid="ignore"):
            mute = law.too_few | law.blind.get("upper", False)
            mute = mute | np.isnan(law.limit("upper", np.full(law.tau.shape, question.risk)))
        unsure.add(mute, "too few effective rows are expected beyond the bound to tell: a longer window is needed")
        return OrderStatistic(law, upper, observed, np.full(law.tau.shape, bound), rows, everything, held, q)

    stays = question.stays
    upper = None if stays.high is None else against(bound=stays.high, upper=True)
    lower = None if stays.low is None else against(bound=stays.low, upper=False)
    seen = measured(
        panel,
        reasons,
        observed,
        (upper, lower),
        n_eff=n / np.max(tau, axis=0),
        method="binomial on effective sizes (Clopper and Pearson 1934; Korn and Graubard 1998; Geyer 1992)",
        assumes=clusters_assumed(panel, "clusters of rows beyond", "history and window"),
    )
    # a mute pass keeps its p-value: left out, it would leave its share of the risk to those that fail
    texts, unsure_at = told_reasons(reasons, unsure)
    return replace(seen, reasons=texts, unsure=unsure_at)


def _scale(panel: Panel, told: Past) -> tuple[Ranking, Floats, Floats, str]:
    """Ranking, the window's values, the offset to the unit, and what was taken out.

    A window of whole cycles is compared as it is: every stretch then holds the same places of the cycle.
    """
    lengths = [panel.axis.lengths[name] for name in told.seasons]
    if all(told.steps % length == 0 for length in lengths) and lengths:
        rank: Ranking = panel.remember("raw ranking", lambda: ranking(panel.history / told.scale[:, None]))
        return rank, panel.window / told.scale[:, None], np.zeros(len(told.n)), ", windows of whole cycles"
    return scored(panel), told.window, told.offset, without(told)


def _like_history(panel: Panel, question: Question, q: float) -> Measurement:
    told, reasons = past(panel), Reasons((len(past(panel).n), 1))
    ask_history(reasons, told, question.risk, "a quantile")
    ask_variety(reasons, told, question.risk)
    fewest = FEWEST_BEYOND / min(q, 1 - q)
    reasons.add(cell(told.n) < fewest, f"fewer than 3 rows lie beyond the quantile: {np.ceil(fewest):.0f} are needed")
    rank, values, offset, taken = _scale(panel, told)
    at = _quantile_of(rank.of(values), q)
    beyond = cell((_quantile_of(values, q) + offset) * told.scale)
    cut = windows(rank.own, told.steps)
    then = _quantile_of(cut.reshape(-1, told.steps), q, fewest=told.steps / 2).reshape(cut.shape[:2])
    centre, scale, df = window_t(then, at)
    unit = ToUnit(rank.unit, offset, told.scale)
    density = np.exp(-(special.ndtri(q) ** 2) / 2) / np.sqrt(2 * np.pi)
    naive = np.sqrt(q * (1 - q) / np.maximum(told.n, 1)) / density
    pivot = pivot_through(unit, at, centre, scale, df, naive=naive)
    reasons.add(
        ~(cell(scale) > 0), "history's stretches do not differ in this quantile: no sampling error to allow for"
    )
    reasons.add(out_of_reach(rank, centre, scale, df, question.risk)[:, None], MUTE)
    n = counts(panel)[0]
    with np.errstate(divide="ignore", invalid="ignore"):
        n_eff = n * cell(naive / scale) ** 2
    return measured(
        panel,
        reasons,
        np.where(at_the_end(rank, at)[:, None], beyond, unit(cell(at))),
        (pivot, pivot),
        n_eff=n_eff,
        method="quantile of normal scores, window-t (van der Waerden 1952)",
        assumes="stationary history" + taken,
    )


def _quantile_of(x: Floats, q: float, fewest: float = 1) -> Floats:
    """The quantile of each row; NaN where it has fewer than ``fewest`` values."""
    held = (~np.isnan(x)).sum(axis=1)
    found = quantile(in_order(x), cell(held), np.full((len(x), 1), q))[:, 0]
    return np.where(held >= fewest, found, np.nan)
