"""Are the values distributed as history's are?

Null hypothesis: window and history have the same distribution, rows depending on each other as those of history do.

D = max_x |F_window(x) - F_history(x)| (two-sample Kolmogorov-Smirnov), judged with effective sizes n/τ and N/τ: λ =
(√m + .12 + .11/√m) D (Stephens 1970), m = (n/τ)(N/τ)/(n/τ + N/τ). τ is the largest factor by which dependence lengthens
the marks 1(x ≤ q) at history's quantiles q of .05, .1, .25, .5, .75, .9 and .95, each from an autoregression fitted to
history's marks (Burg 1975, order by AICc).

Fixed cycles (``seasons``) are taken out first.

Unit: largest distance of the two distribution functions, 0 to 1.
Missing values take no part; gaps are never closed up in the fits.
Minimum: 24 rows and 8 stretches of history of the window's length (20 at a risk of .001 or less). Not for long memory:
false alarms at a risk of .001 then come to .012.

Example::

    name: values distributed as ever
    measure: distribution
    stays: {like: history}
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from pydantic import BaseModel, ConfigDict
from scipy import special

from sercheck.grid import Panel
from sercheck.measure import POWER, Measure, Measurement, Question, Reasons, Side
from sercheck.measures._past import ask_history, cell, measured, past, scored, without
from sercheck.serial.arrays import Floats
from sercheck.serial.autoregression import burg
from sercheck.serial.quantiles import in_order, quantile
from sercheck.serial.risk import t_quantile
from sercheck.serial.scores import Ranking, count_less

QUANTILES = (0.05, 0.1, 0.25, 0.5, 0.75, 0.9, 0.95)
"""Where the dependence of the marks is measured (chosen by simulation)."""


class DistributionFields(BaseModel):
    """No fields of its own."""

    model_config = ConfigDict(extra="forbid", frozen=True)


class Distribution(Measure):
    """Largest distance between the window's and history's distribution functions."""

    kinds: ClassVar[frozenset[str]] = frozenset({"like_history"})
    span: ClassVar[tuple[float, float]] = (0.0, 1.0)
    Fields: ClassVar[type[BaseModel]] = DistributionFields

    def run(self, panel: Panel, question: Question) -> Measurement:
        told, reasons = past(panel), Reasons((len(past(panel).n), 1))
        ask_history(reasons, told, question.risk, "a distribution")
        observed = cell(distance(told.window, scored(panel)))
        tau = cell(longest(told.history, scored(panel)))
        law = Stephens(observed, cell(told.n) / tau, cell(told.known) / tau, tau)
        return measured(
            panel,
            reasons,
            observed,
            (law, None),
            n_eff=cell(told.n) / tau,
            method="Kolmogorov-Smirnov on effective sizes (Stephens 1970)",
            assumes="stationary history, short memory" + without(told),
        )


@dataclass(frozen=True)
class Stephens:
    """Kolmogorov's law with Stephens' (1970) correction on effective sizes; all arrays have shape (S, 1)."""

    observed: Floats
    rows: Floats
    known: Floats
    tau: Floats

    def _factor(self, tau: Floats | float) -> Floats:
        with np.errstate(divide="ignore", invalid="ignore"):
            root = np.sqrt(self.rows * self.known / (self.rows + self.known) * self.tau / tau)
            return np.asarray(root + 0.12 + 0.11 / root, dtype=np.float64)

    @property
    def bound(self) -> Floats:
        """History's own distance from history."""
        return np.zeros(self.observed.shape)

    @property
    def standard_error(self) -> Floats:
        return np.full(self.observed.shape, np.nan)

    def p_value(self, side: Side) -> Floats:
        del side
        scaled = self._factor(self.tau) * self.observed
        known = ~np.isnan(scaled)
        return np.where(known, special.kolmogorov(np.where(known, scaled, 0.0)), np.nan)

    def limit(self, side: Side, risk: Floats) -> Floats:
        del side
        return np.asarray(special.kolmogi(risk) / self._factor(self.tau), dtype=np.float64)

    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        del side
        return np.asarray(special.kolmogi(risk) / self._factor(1.0), dtype=np.float64)

    def detectable(self, side: Side, risk: Floats) -> Floats:
        """A shift of the share below some value: its own scatter, at most .5/√m, is added to the limit."""
        scatter = t_quantile(POWER, np.inf) * MIDDLE / self._factor(self.tau)
        return np.asarray(self.limit(side, risk) + scatter, dtype=np.float64)


MIDDLE = 0.5
"""Largest standard deviation of an empirical distribution function, in units of 1/√m."""


def distance(window: Floats, past_values: Ranking) -> Floats:
    """Two-sample Kolmogorov-Smirnov distance of each row from its history, shape (S,)."""
    if not window.shape[1] or not past_values.values.shape[1]:
        return np.full(len(window), np.nan)
    ordered = in_order(window)
    n = (~np.isnan(window)).sum(axis=1, keepdims=True)
    place = np.arange(window.shape[1])
    seen = place < n
    known = np.maximum(past_values.counts, 1)[:, None]
    below = count_less(ordered, past_values.values, past_values.counts) / known
    upto = count_less(np.nextafter(ordered, np.inf), past_values.values, past_values.counts) / known
    rows = np.maximum(n, 1)
    over, under = (place + 1) / rows - upto, below - place / rows
    largest = np.where(seen, np.maximum(over, under), 0.0).max(axis=1)
    return np.where((n[:, 0] > 0) & (past_values.counts > 0), largest, np.nan)


def longest(history: Floats, past_values: Ranking) -> Floats:
    """Largest factor by which dependence lengthens the marks 1(x ≤ q), at least 1, shape (S,)."""
    tau = np.ones(len(history))
    if history.shape[1] < 2:
        return tau
    held = past_values.counts[:, None].astype(np.float64)
    for q in QUANTILES:
        mark = quantile(past_values.values, held, np.full(held.shape, q))
        model = burg(np.where(np.isnan(history), np.nan, history <= mark))
        # long-run variance over variance of an autoregression in terms of its reflection coefficients
        with np.errstate(divide="ignore"):  # a share that never forgets: no number of rows would do
            tau = np.maximum(tau, np.exp(2 * np.arctanh(model.reflection).sum(axis=1)))
    return np.asarray(tau, dtype=np.float64)
