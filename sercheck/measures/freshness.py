"""Age of the newest row when the batch is judged.

Question: is the newest row young enough?

Null hypothesis: none; an age is not an estimate and is held against the bound as it is.

Formula: the time of judging (`--as-of`, else now) less the stamp of the newest row of each series. A series without a
row in the batch is as old as its newest row in history. A row from the future has a negative age: `between: [0s, 3h]`
refuses it.

Source: counting.

Unit: a length in time; records tell seconds.

Missing values: a row counts by its stamp, whatever its cells hold.

Minimum size: one row. Undecided for a series of which no row is known.

Example::

    - name: the newest row is young
      measure: freshness
      stays: {below: 3h}
"""

from __future__ import annotations

import numpy as np
from pydantic import BaseModel, ConfigDict

from sercheck.grid import Panel
from sercheck.measure import Clock, Measure, Measurement, Question, Reasons
from sercheck.measures._exact import exact
from sercheck.serial.arrays import Ints

NEVER = int(np.iinfo(np.int64).min)
"""What the tally holds for a series without a row."""

NANOSECONDS = 1e9


class Fields(BaseModel):
    """None."""

    model_config = ConfigDict(extra="forbid", frozen=True)


class Freshness(Measure):
    """Age of the newest row, in seconds."""

    kinds = frozenset({"below", "above", "between"})
    of_values = False
    exact = True
    bounds_in = "time"
    Fields = Fields

    def run(self, panel: Panel, question: Question) -> Measurement:
        assert question.clock is not None
        newest = _newest(panel, question.clock)
        known = newest > NEVER
        age = np.where(known, (question.clock.as_of - np.where(known, newest, 0)) / NANOSECONDS, np.nan)
        reasons = Reasons((len(newest), 1))
        reasons.add(~known[:, None], "no row of the series is known, neither in the batch nor in history")
        n = question.clock.grid.tally.rows
        return exact(
            question.stays, age, n, np.zeros(len(n), dtype=np.int64), reasons,
            span=self.span,
            method="time of judging less the newest stamp", assumes="stamps and the judging clock agree",
        )  # fmt: skip


def _newest(panel: Panel, clock: Clock) -> Ints:
    newest = clock.grid.tally.newest
    if clock.grid.irregular or not len(panel.axis):
        return newest  # the axis of an irregular feed carries the stamps of one series only
    last = panel.delivered.shape[1] - 1 - np.argmax(panel.delivered[:, ::-1], axis=1)
    on_axis = np.where(panel.delivered.any(axis=1), panel.axis.stamps[last], NEVER)
    return np.asarray(np.where(newest == NEVER, on_axis, newest), dtype=np.int64)
