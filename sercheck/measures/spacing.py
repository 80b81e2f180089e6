"""Faults of the clock: gaps, doubles, disorder and rows off the grid, counted.

Question: how many gaps (or doubled, disordered, misplaced rows) has the window?

Null hypothesis: none; these are counts, not estimates, and are held against the bound as they are.

Formula:

- `look: gaps` (default): runs of due stamps of the window without a row, however long each is. A closed day on which
  no row is due neither makes nor splits a gap. The zone's skipped and doubled hours are due as the clock has them.
- `look: doubles`: rows of the batch whose stamp had come before, with the same or with other values.
- `look: disorder`: rows of the batch that are earlier than the row delivered before them.
- `look: off_grid`: rows of the batch that could not be placed: off the cadence, unreadable, not on the clock.

Source: counting.

Unit: number of gaps or rows.

Missing values: an empty cell in a delivered row is not a gap (see `rate` with `of_rows: missing`).

Minimum size: none. Gaps of a feed without cadence are undecided.

Example::

    - name: the stamps have no gap
      measure: spacing
      look: gaps
      stays: {below: 1}
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from pydantic import BaseModel, ConfigDict

from sercheck.grid import Panel, Tally
from sercheck.measure import Measure, Measurement, Question, Reasons
from sercheck.measures._exact import exact
from sercheck.serial.arrays import Bools, Ints

METHODS = {
    "gaps": "runs of due stamps without a row, counted",
    "doubles": "rows whose stamp came before, counted",
    "disorder": "rows earlier than the one before, counted",
    "off_grid": "rows that no stamp of the cadence fits, counted",
}


@dataclass(frozen=True)
class Gaps:
    """The gaps of each series; every array has shape (S,).

    Attributes:
        count: gaps.
        first: step at which the first gap begins, -1 without one.
        length: due stamps in the first gap, 0 without one.
        longest: due stamps in the longest gap.
    """

    count: Ints
    first: Ints
    length: Ints
    longest: Ints


def gaps(delivered: Bools, expected: Bools) -> Gaps:
    """Find the runs of expected steps without a row.

    Args:
        delivered: a row came, shape (S, n).
        expected: a row was due, shape (n,).
    """
    due = np.flatnonzero(expected)
    absent = ~delivered[:, due]
    steps = np.arange(1, len(due) + 1)
    run = steps - np.maximum.accumulate(np.where(absent, 0, steps), axis=1)  # absent in a row up to each step
    begins, some = run == 1, absent.any(axis=1)
    if not len(due):
        nothing = np.zeros(len(delivered), dtype=np.int64)
        return Gaps(nothing, nothing - 1, nothing, nothing)
    place = np.argmax(begins, axis=1)
    back = (steps > place[:, None]) & ~absent  # rows that came after the first gap began
    end = np.where(back.any(axis=1), np.argmax(back, axis=1), len(due))
    return Gaps(
        np.count_nonzero(begins, axis=1),
        np.where(some, due[place], -1),
        np.where(some, end - place, 0),
        run.max(axis=1),
    )


class Fields(BaseModel):
    """What is counted."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    look: Literal["gaps", "doubles", "disorder", "off_grid"] = "gaps"


class Spacing(Measure):
    """Gaps, doubles, disorder and rows off the grid."""

    kinds = frozenset({"below", "above", "between"})
    of_values = False
    exact = True
    span = (0.0, np.inf)
    Fields = Fields

    def run(self, panel: Panel, question: Question) -> Measurement:
        assert isinstance(question.fields, Fields)
        assert question.clock is not None
        look, grid = question.fields.look, question.clock.grid
        reasons = Reasons((len(panel.values), 1))
        if look == "gaps":
            due = panel.axis.expected[panel.start :]
            here = panel.delivered[:, panel.start :]
            count = gaps(here, due).count
            n = np.count_nonzero(here & due, axis=1)
            n_missing = np.count_nonzero(~here & due, axis=1)
            reasons.add(grid.irregular, "an irregular feed has no cadence that a gap could be seen by")
        else:
            count, n = _counted(grid.tally, look), grid.tally.rows
            n_missing = np.zeros(len(n), dtype=np.int64)
        observed = count.astype(np.float64)
        return exact(
            question.stays, observed, n, n_missing, reasons, span=self.span, method=METHODS[look], integer=True
        )


def _counted(tally: Tally, look: str) -> Ints:
    if look == "doubles":
        return tally.doubles + tally.differing
    return tally.disorder if look == "disorder" else tally.off_grid
