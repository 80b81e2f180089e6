"""Is the series as jagged as it was: not smoothed or interpolated, not shuffled, not noise?

Null hypothesis: the window's roughness is to the days before it as theirs was (recent past), or scatters as that of
history's stretches of the same length (stationary history).

Formula: R = mean square of the fourth differences over 35 times the mean square of the first, the season left in; 35 is
what independent values give. What is smooth, season and weather, is gone from the fourth differences: they hold the
noise, and smoothing takes most of it. With 56 stretches of the window's length in history (26 for windows of up to
seven rows) ln R is judged by a one-step forecast from those of the last ninety, two-sided, with tails from its own
misses, and together with the six before; on roots of counts, and on logarithms where the scatter grows with the level.
Else by window-t: T = (ln R - mean)/(sd √(1 + 1/m)) over history's m stretches, Student's t on m - 1 degrees of freedom.

Source: the mean square successive difference (von Neumann 1941), carried on; roots of counts (Anscombe 1948). On real
feeds it finds values smoothed over three rows two to four times as often as the autocorrelation of the differences.

Unit: none; 1 for independent values, below .001 for a smooth daily cycle of hours, 1.8 for values that go up and down.
Missing values: a difference that touches one takes no part; nothing is closed up.
Minimum: 24 rows with half of the differences, and 8 stretches of history (20 at a risk of .001 or less).

Example::

    name: as jagged as ever
    measure: roughness
    stays: {like: history}
"""

from __future__ import annotations

from typing import ClassVar

import numpy as np
from pydantic import BaseModel, ConfigDict

from sercheck.grid import Panel
from sercheck.measure import Measure, Measurement, Question, Reasons
from sercheck.measures._past import ask_history, ask_variety, cell, combined, measured, past, pivot_through
from sercheck.recent import enough, recent_measurement, recent_past
from sercheck.serial.batch_statistics import ROUGH_VARIANCE, rough_unit, roughness
from sercheck.serial.window_t import window_t


class RoughnessFields(BaseModel):
    """No fields of its own."""

    model_config = ConfigDict(extra="forbid", frozen=True)


class Roughness(Measure):
    """Fourth differences beside first ones."""

    kinds: ClassVar[frozenset[str]] = frozenset({"like_history"})
    span: ClassVar[tuple[float, float]] = (0.0, float("inf"))
    Fields: ClassVar[type[BaseModel]] = RoughnessFields

    def run(self, panel: Panel, question: Question) -> Measurement:
        return combined(
            enough(panel),
            lambda: recent_measurement(panel, recent_past(panel, logs=not question.together).roughness(question.rests)),
            lambda: _like_history(panel, question),
        )


def _like_history(panel: Panel, question: Question) -> Measurement:
    """By the stretches of a stationary history."""
    told, reasons = past(panel), Reasons((len(past(panel).n), 1))
    ask_history(reasons, told, question.risk, "a roughness")
    ask_variety(reasons, told, question.risk)
    steps = max(told.steps, 1)
    whole = panel.values.shape[1] // steps * steps
    logs = roughness(panel.values[:, panel.values.shape[1] - whole :] / told.scale[:, None], steps)
    at = logs[:, -1] if logs.shape[1] else np.full(len(told.n), np.nan)
    reasons.add(cell(np.isnan(at)) > 0, "the window does not vary, or less than half of its differences are there")
    centre, scale, df = window_t(logs[:, :-1], at)
    naive = np.sqrt(ROUGH_VARIANCE / np.maximum(told.n, 1))
    pivot = pivot_through(rough_unit, at, centre, scale, df, naive=naive)
    with np.errstate(invalid="ignore", divide="ignore"):
        n_eff = cell(told.n * (naive / scale) ** 2)
    return measured(
        panel,
        reasons,
        rough_unit(cell(at)),
        (pivot, pivot),
        n_eff=n_eff,
        method="log ratio of mean square differences, window-t (von Neumann 1941)",
        assumes="stationary history",
    )
