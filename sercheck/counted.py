"""A batch in numbers, added up block by block, and what is odd about its rows; depends on ``grid`` and ``errors``."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from sercheck.errors import BatchError
from sercheck.grid import Grid
from sercheck.judge import Seen
from sercheck.record import utc_text


@dataclass(frozen=True)
class Facts:
    """The batch in numbers.

    Attributes:
        first: first step of the batch, UTC, RFC 3339.
        last: last step.
        rows: rows delivered.
        series: number of series.
    """

    first: str
    last: str
    rows: int
    series: int


class Counted:
    """What the blocks of a batch were, added up."""

    def __init__(self) -> None:
        self._stretch: tuple[int, int] | None = None
        self._rows = self._series = self._placed = self._past = 0
        self._numbers: Counter[str] = Counter()
        self._text: Counter[str] = Counter()
        self._odd: Counter[str] = Counter()

    def add(self, grid: Grid) -> None:
        """Count a block."""
        tally = grid.tally
        self._stretch = (int(grid.axis.stamps[grid.start]), int(grid.axis.stamps[-1]))
        self._rows += int(tally.rows.sum())
        self._series += len(grid.keys)
        self._placed += int(np.count_nonzero(grid.delivered[:, grid.start :]))
        self._past += grid.start
        for name, values in grid.values.items():
            self._numbers[name] += int(np.count_nonzero(np.isfinite(values[:, grid.start :])))
            self._text[name] += int(tally.unreadable[name].sum())
        self._odd["could not be placed in time (off the cadence, unreadable or far away)"] += int(tally.off_grid.sum())
        self._odd["stand in for an earlier row with the same stamp and other values"] += int(tally.differing.sum())
        self._odd["repeat an earlier row"] += int(tally.doubles.sum())
        for kind, columns in (("text in place of a number", tally.unreadable), ("an infinite value", tally.infinite)):
            for name, counts in columns.items():
                self._odd[f"hold {kind} in {name} (taken as missing)"] += int(counts.sum())

    def join(self, other: Counted) -> None:
        """Count what was counted elsewhere."""
        self._stretch = other._stretch or self._stretch
        self._rows += other._rows
        self._series += other._series
        self._placed += other._placed
        self._past += other._past
        for mine, theirs in ((self._numbers, other._numbers), (self._text, other._text), (self._odd, other._odd)):
            for name, number in theirs.items():
                mine[name] += number

    def facts(self) -> Facts:
        """The batch in numbers."""
        if self._stretch is None:
            raise BatchError("the batch", "it has no series", "rows with stamps", "Look at the file.")
        first, last = utc_text(np.array(self._stretch)).tolist()
        return Facts(first, last, self._rows, self._series)

    def notes(self, compared: bool) -> tuple[str, ...]:
        """What is odd about the rows, whether or not a rule asks; ``compared`` tells that there is a history."""
        told = [f"{number} of {self._rows} rows {what}" for what, number in self._odd.items() if number]
        told += [f"no row has a value in {name}" for name, number in self._numbers.items() if not number]
        if compared and not self._past:
            told.append("no row of the history lies before the batch: nothing was compared with it")
        return tuple(told)

    def must_say_something(self, seen: Sequence[Seen]) -> None:
        """Refuse to release a batch of which nothing could be read or judged.

        Rules that cannot judge leave a batch undecided and do not hold it; a batch without one number would pass.

        Raises:
            BatchError: no rule looked at any series, no row has a place in time, or no cell that a rule looks at (or
                no cell of a column that holds text) is a number.
        """
        if not seen:
            raise BatchError(
                "the batch", f"not one rule judged any of its {self._series} series", "series that a rule is for",
                "Do the keys still match the `only` of the rules?",
            )  # fmt: skip
        if not self._placed:
            raise BatchError(
                "the batch", f"not one of its {self._rows} rows could be placed in time", "stamps on the cadence",
                "Is `every` right, and is the clock of the source?",
            )  # fmt: skip
        columns = {part.column for part in seen if part.column}
        empty = {name for name in columns if not self._numbers[name]}
        garbled = {name for name in empty if self._text[name]}
        refused = sorted(garbled or (empty if empty == columns else ()))
        if refused:
            came = f"not one of its {self._rows} rows holds a number in {', '.join(refused)}"
            if garbled:
                raise BatchError("the batch", came, "a point as the decimal mark, no mark of thousands, no units")
            raise BatchError("the batch", came, "at least one value", "Look at the source of the feed.")
