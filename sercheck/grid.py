"""Series of one feed on a shared time axis: what intake makes and every measure reads; depends only on ``serial``."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from typing import TypeVar

import numpy as np

from sercheck.serial.arrays import Bools, Floats, Ints

T = TypeVar("T")


@dataclass(frozen=True)
class Axis:
    """The time axis that the series of a grid share.

    Attributes:
        stamps: int64 nanoseconds since 1970 UTC of each step, shape (T,). For an irregular feed the stamps of the
            longest series, right-aligned (only for naming a window).
        index: number of each step counted on the cadence itself, shape (T,); consecutive, the same for every batch.
        lengths: steps in one cycle of each named season.
        phases: for each named season the place of every step in its cycle, 0 .. length - 1, shape (T,), on the feed's
            own wall clock.
        closed: steps that lie on a closed day, shape (T,).
        expected: steps at which a row is due (closed days of daily and longer cadences are not), shape (T,).
        groups: for lengths that ``after: {every: ...}`` asks for, the number of the group of every step, shape (T,).
        held: steps of batches that were held and then let in by a person, shape (T,); empty when there are none.
    """

    stamps: Ints
    index: Ints
    lengths: Mapping[str, int]
    phases: Mapping[str, Ints]
    closed: Bools
    expected: Bools
    groups: Mapping[str, Ints] = field(default_factory=dict)
    held: Bools = field(default_factory=lambda: np.zeros(0, dtype=bool))

    def __len__(self) -> int:
        return len(self.stamps)

    def cut(self, first: int, last: int) -> Axis:
        """The steps ``first`` to ``last`` (exclusive)."""
        part = slice(first, last)
        return Axis(
            self.stamps[part],
            self.index[part],
            self.lengths,
            {name: phase[part] for name, phase in self.phases.items()},
            self.closed[part],
            self.expected[part],
            {name: group[part] for name, group in self.groups.items()},
            self.held[part] if len(self.held) else self.held,
        )


@dataclass(frozen=True)
class Tally:
    """What intake counted for each series of the batch and could not say in the grid; every array has shape (S,).

    Attributes:
        rows: rows delivered.
        doubles: rows whose stamp came before with the same values.
        differing: rows whose stamp came before with other values (the last one delivered is kept).
        disorder: rows whose stamp is earlier than that of the row before.
        off_grid: rows that could not be placed: a stamp off the cadence, unreadable, not on the clock (a skipped
            hour), or so far from all others that it cannot belong to the batch.
        unreadable: for each value column, cells that hold text in place of a number.
        infinite: for each value column, infinite cells.
        newest: int64 nanoseconds since 1970 UTC of the newest row (minimum of int64 when there is none).
    """

    rows: Ints
    doubles: Ints
    differing: Ints
    disorder: Ints
    off_grid: Ints
    unreadable: Mapping[str, Ints]
    infinite: Mapping[str, Ints]
    newest: Ints


@dataclass(frozen=True)
class Grid:
    """A block of series of one feed, history and batch on one axis.

    Attributes:
        keys: names of the series, shape (S,) of str objects, sorted.
        axis: the shared time axis, length T.
        start: first step of the batch on the axis; the steps before are history (rows that were let in before).
        values: for each value column float64 of shape (S, T); NaN is missing.
        delivered: a row was delivered for this series and step, shape (S, T).
        tally: what was counted about the batch's rows.
        irregular: no cadence: each series is right-aligned by order of observation.
    """

    keys: np.ndarray
    axis: Axis
    start: int
    values: Mapping[str, Floats]
    delivered: Bools
    tally: Tally
    irregular: bool = False


@dataclass(frozen=True)
class Panel:
    """One value column of a grid, cut for one rule: the history that it may learn from and the window that is judged.

    Attributes:
        values: float64, shape (S, T), NaN is missing; columns before ``start`` are history, the rest the window.
        start: first step of the window.
        axis: the time axis, length T.
        delivered: a row was delivered, shape (S, T).
        column: name of the value column.
        before: the panel as it was before the rule's ``after``, or None where there was nothing to change.
        after: what ``after`` did, as the record tells it.
        unable: why a transform of ``after`` could not be carried out (every answer is then undecided), or empty.
        notes: what a transform had to leave out, for the reader.
        own_cycle: steps of the cycle whose means of the window itself were taken out, so that each cycle costs the
            window a share of what it can tell; 1 where none was.
        beside: panels of the further value columns that the rule names, cut and transformed alike.
        shared: memo for what several measures need from the same arrays (autocovariances, models).
    """

    values: Floats
    start: int
    axis: Axis
    delivered: Bools
    column: str = ""
    before: Panel | None = field(default=None, compare=False, repr=False)
    after: str = ""
    unable: str = ""
    notes: tuple[str, ...] = ()
    own_cycle: int = 1
    beside: Mapping[str, Panel] = field(default_factory=dict, compare=False, repr=False)
    shared: dict[object, object] = field(default_factory=dict, compare=False, repr=False)

    @property
    def window(self) -> Floats:
        """The stretch that is judged, shape (S, n)."""
        return self.values[:, self.start :]

    @property
    def history(self) -> Floats:
        """The stretch before the window, shape (S, N); N may be 0."""
        return self.values[:, : self.start]

    def phase(self, season: str) -> Ints:
        """The place in the cycle of every step, shape (T,)."""
        return self.axis.phases[season]

    def remember(self, key: object, make: Callable[[], T]) -> T:
        """Give what ``make`` gives, computed once for this panel."""
        if key not in self.shared:
            self.shared[key] = make()
        return self.shared[key]  # type: ignore[return-value]  # the key names the type

    def changed(self, values: Floats, **changes: object) -> Panel:
        """The same panel with other values; memo emptied."""
        return replace(self, values=values, shared={}, **changes)  # type: ignore[arg-type]  # fields of a panel
