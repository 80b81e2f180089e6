"""Share of the expected stamps that are there.

Question: did as many rows come as are due?

Null hypothesis (like history): stamps fail to come as often as in history, in clusters as history and window show.

Formula: delivered stamps over due stamps of the window. Due are the stamps of the cadence on the feed's own clock (23
or 25 on days of a clock change), without closed days. A literal bound is held against the share itself. Like history,
one-sided (only too few is a fault): mid-p of the conditional binomial on effective sizes, as in `rate`, on the stamps
that did not come.

Source: counting; Przyborowski and Wilenski 1940; Geyer 1992.

Unit: share of due stamps, 0 to 1.

Missing values: a delivered row counts, whatever its cells hold (empty ones are for `rate` with `of_rows: missing`).

Minimum size: one due stamp. Undecided for a feed without cadence.

Example::

    - name: nearly every hour is there
      measure: completeness
      stays: {above: 0.95}
"""

from __future__ import annotations

import numpy as np
from pydantic import BaseModel, ConfigDict

from sercheck.grid import Panel
from sercheck.measure import POWER, Measure, Measurement, Question, Reasons
from sercheck.measures._cycle import clusters_assumed, shortest_cycle
from sercheck.measures._exact import exact
from sercheck.serial.rates import against_past, quotient


class Fields(BaseModel):
    """None."""

    model_config = ConfigDict(extra="forbid", frozen=True)


class Completeness(Measure):
    """Share of due stamps with a row."""

    kinds = frozenset({"below", "above", "between", "like_history"})
    of_values = False
    span = (0.0, 1.0)
    Fields = Fields

    def run(self, panel: Panel, question: Question) -> Measurement:
        assert question.clock is not None
        due = panel.axis.expected
        here = panel.delivered & due
        n = np.full(len(here), np.count_nonzero(due[panel.start :]))
        came = np.count_nonzero(here[:, panel.start :], axis=1)
        share = quotient(came.astype(np.float64), n.astype(np.float64))
        reasons = Reasons((len(n), 1))
        reasons.add(question.clock.grid.irregular, "an irregular feed has no cadence by which a row is due")
        reasons.add((n == 0)[:, None], "no row is due in the window: all of it is closed")
        if question.stays.literal:
            return exact(
                question.stays, share, n, n - came, reasons, span=self.span, method="delivered over due stamps"
            )
        law = against_past(np.where(due, panel.delivered, np.nan), panel.start, POWER, season=shortest_cycle(panel))
        reasons.add(panel.start == 0, "no history: pass --history or learn a baseline")
        reasons.add(law.past_rows == 0, "no row was due in history: pass a longer --history")
        reasons.add(
            np.isnan(law.limit("lower", np.asarray(question.risk))),
            f"no share would be beyond chance at a risk of {question.risk:g}: judge a longer window",
        )
        return Measurement(
            observed=share[:, None],
            n=n[:, None],
            n_missing=(n - came)[:, None],
            n_eff=law.rows / law.tau,
            upper=None,
            lower=law,
            undecided=reasons.index,
            reasons=tuple(reasons.texts),
            method="mid-p of the conditional binomial on effective sizes (Przyborowski and Wilenski 1940; Geyer 1992)",
            assumes="stationary history; " + clusters_assumed(panel, "gaps", "history and window"),
        )
