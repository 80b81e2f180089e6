"""An earlier stretch delivered again: the share of the window that was seen before.

Question: how much of the window was delivered before?

Null hypothesis (like history): stretches come again by chance as often as stretches of history recur in history.

Formula: a row was seen before when it lies in a stretch of `length` successive values of the window that equals an
earlier stretch (of history, or of the window itself, not overlapping), bit for bit. Stretches of one constant are
skipped: a stuck value is for `repeats`. Without `length` three values, or, for coarse values, the first of 4, 6, 8, 12
and 24 at which at most 2 % of history's rows recur. A literal bound is held against the share itself, which has no
sampling error. Like history, one-sided: with K of N rows of history in stretches that history holds twice and c the
length (the rows that one recurrence marks), π = (K + c/2)/(N + c), τ the variance of the counts in history's
stretches of the window's length over the binomial variance (at least c; at least 4 with 20 stretches or fewer),
M = (n − τ)/(τ − 1) between ½ and N + 1, p = P(BetaBin(n, πM, (1 − π)M) ≥ k).

Source: hashing of successive values (Karp and Rabin 1987); beta-binomial law (Skellam 1948).

Unit: share of the rows that can be compared, 0 to 1.

Missing values: break a stretch; rows that lie in no complete, varied stretch take no part.

Minimum size: `length` rows in the window; like history, 8 stretches of the window's length in history.

Example::

    - name: nothing is delivered twice
      measure: replay
      stays: {below: 0.3}
"""

from __future__ import annotations

import numpy as np
from pydantic import BaseModel, ConfigDict, Field

from sercheck.grid import Panel
from sercheck.measure import POWER, Measure, Measurement, Question, Reasons
from sercheck.measures._exact import exact
from sercheck.serial.recurrence import beta_binomial_share
from sercheck.serial.repeats import share_of
from sercheck.serial.replay import seen_before
from sercheck.serial.window_t import FEWEST_WINDOWS


class Fields(BaseModel):
    """How long a stretch must be."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    length: int | None = Field(default=None, ge=2, description="successive values that must agree")


class Replay(Measure):
    """Share of the window that was delivered before."""

    kinds = frozenset({"below", "like_history"})
    span = (0.0, 1.0)
    Fields = Fields

    def run(self, panel: Panel, question: Question) -> Measurement:
        assert isinstance(question.fields, Fields)
        length = question.fields.length
        seen = panel.remember(("seen before", length), lambda: seen_before(panel.values, panel.start, length))
        n = np.count_nonzero(~np.isnan(seen.batch), axis=1)
        n_missing = np.count_nonzero(np.isnan(panel.window), axis=1)
        reasons = Reasons((len(n), 1))
        reasons.add(
            (n == 0)[:, None],
            "no stretch of the window can be compared: it is too short, constant, or broken by missing values",
        )
        if question.stays.literal:
            unsure = Reasons(reasons.index.shape)
            unsure.add(panel.start == 0, "no history, so that nothing could be seen again: pass --history")
            return exact(
                question.stays, share_of(seen.batch), n, n_missing, reasons,
                span=self.span,
                method="rows in stretches that came before, counted (Karp and Rabin 1987)", unsure=unsure,
            )  # fmt: skip
        stretches = panel.start // panel.window.shape[1]
        law = beta_binomial_share(seen.history, seen.batch, POWER, seen.length)
        reasons.add(panel.start == 0, "no history: pass --history or learn a baseline")
        reasons.add(
            stretches < FEWEST_WINDOWS,
            f"history holds {stretches} stretches of the window's length, {FEWEST_WINDOWS} are needed",
        )
        reasons.add(law.past_rows == 0, "history has no stretch to compare with: pass a longer --history")
        reasons.add(
            np.isnan(law.limit("upper", np.asarray(question.risk))),
            f"history recurs by chance so much that no share would stand out at a risk of {question.risk:g}: "
            "ask for a greater length",
        )
        return Measurement(
            observed=share_of(seen.batch)[:, None],
            n=n[:, None],
            n_missing=n_missing[:, None],
            n_eff=law.rows / law.tau,
            upper=law,
            lower=None,
            undecided=reasons.index,
            reasons=tuple(reasons.texts),
            method="beta-binomial share of rows in stretches that came before (Karp and Rabin 1987; Skellam 1948)",
            assumes="chance recurrences scatter over batches as they did in history",
        )
