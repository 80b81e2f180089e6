"""Which steps a grid covers: the feed's extent without wild stamps, the batch's stretch, the history before it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sercheck.errors import BatchError
from sercheck.grid import Axis
from sercheck.intake.axis import build_axis
from sercheck.intake.calendar import Cadence, parse_length
from sercheck.intake.layout import Layout
from sercheck.intake.rows import Rows
from sercheck.intake.zone import NOT_A_STAMP
from sercheck.serial.arrays import Bools, Ints

FENCE = 20
"""Interquartile ranges beyond the quartiles at which a stamp is wild: fences as Tukey's (1977), drawn so wide that
rows spread evenly over a stretch have none within ten times its length."""
NEAREST_FENCE = 240
"""Steps within which a stamp is never wild (ours: ten days of hours)."""
ROOM, SPARSEST = 10_000, 1_000
"""Steps that any feed may span, and steps a row beyond that (ours): more is a wrong cadence or a wrong clock."""
SAMPLE = 1_000_000
"""Rows looked at for the quartiles of the stamps."""


@dataclass(frozen=True)
class Extent:
    """Where a feed lies in time.

    Attributes:
        first: nanoseconds UTC of the first stamp on the cadence that is not wild.
        last: the last one.
        low: stamps before are wild.
        high: stamps after are wild.
        per_series: rows of a series, on average.
        reach: nanoseconds within which a batch may lie from this history where that is more than the history is long.
    """

    first: int
    last: int
    low: int
    high: int
    per_series: float
    reach: int = 0


def fences(stamps: Ints, step: int) -> tuple[int, int]:
    """Stamps outside lie so far from all others that they cannot belong to the feed.

    Args:
        stamps: nanoseconds UTC; unreadable ones are left out.
        step: nanoseconds of one step.
    """
    readable = stamps[stamps != NOT_A_STAMP]
    sample = readable[:: 1 + len(readable) // SAMPLE]
    if sample.size == 0:
        return 0, 0
    places = (len(sample) // 4, len(sample) - 1 - len(sample) // 4)
    ordered = np.partition(sample, places)
    lower, upper = int(ordered[places[0]]), int(ordered[places[1]])
    reach = max(FENCE * (upper - lower), NEAREST_FENCE * step)
    least, most = np.iinfo(np.int64).min + 1, np.iinfo(np.int64).max
    return max(lower - reach, int(least)), min(upper + reach, int(most))


def extent(rows: Rows, cadence: Cadence, beside: Extent | None = None) -> Extent:
    """The extent of rows in memory; the cadence is anchored, ``beside`` is the extent of their history."""
    low, high = fences(rows.stamps, cadence.step)
    if beside is not None:
        reach = max(NEAREST_FENCE * cadence.step, beside.last - beside.first)
        near = max(low, beside.first - reach), min(high, beside.last + reach)
        if within(rows.stamps, *near).any():  # else all of them are far, which is no matter of a wild stamp
            low, high = near
    return span(rows.stamps, cadence, low, high, len(rows) / max(1, len(rows.keys)))


def span(stamps: Ints, cadence: Cadence, low: int, high: int, per_series: float) -> Extent:
    """First and last stamp between the fences, on the cadence if any is."""
    near = within(stamps, low, high)
    if not cadence.irregular:
        on_grid = cadence.index_of(stamps)[1] & near
        near = on_grid if on_grid.any() else near
    chosen = stamps if near.all() else stamps[near]
    if chosen.size == 0:
        return Extent(low, low, low, high, per_series)
    return Extent(int(chosen.min()), int(chosen.max()), low, high, per_series)


def within(stamps: Ints, low: int, high: int) -> Bools:
    """Readable stamps that are not wild."""
    near: Bools = (stamps >= low) & (stamps <= high) & (stamps != NOT_A_STAMP)
    return near


@dataclass(frozen=True)
class Plan:
    """The steps that every block of a feed's grid covers.

    Attributes:
        cadence: the anchored cadence.
        axis: history part, then batch.
        start: first step of the batch on the axis.
        low: batch stamps before are wild.
        high: batch stamps after are wild.
    """

    cadence: Cadence
    axis: Axis
    start: int
    low: int
    high: int


def plan(batch: Extent, history: Extent | None, cadence: Cadence, layout: Layout, need_steps: int | None) -> Plan:
    """Lay out the axis.

    Args:
        batch: extent of the batch.
        history: extent of the history, or None.
        cadence: the anchored cadence, not irregular.
        layout: the feed.
        need_steps: steps of history before the batch, at most; None for all there are.

    Raises:
        BatchError: the rows are spread so thinly that the cadence or a clock must be wrong.
    """
    begin, end = batch_stretch(batch, history, cadence, layout)
    _not_too_thin("the batch", end - begin, batch.per_series, cadence)
    first = begin
    if history is not None and (need_steps is None or need_steps > 0):
        first, last = (_index(cadence, stamp) for stamp in (history.first, history.last))
        _near(begin, end, first, last, cadence, history.reach)
        first = min(begin, first if need_steps is None else max(first, begin - need_steps))
        _not_too_thin("the history", begin - first, history.per_series, cadence)
    return Plan(cadence, build_axis(cadence, layout, first, end), begin - first, batch.low, batch.high)


def batch_stretch(batch: Extent, history: Extent | None, cadence: Cadence, layout: Layout) -> tuple[int, int]:
    """First and last step (exclusive) of the stretch that the batch stands for.

    From its first to its last stamp; with ``batch_every`` the stretch of that length that holds them all: the local
    day (or part of a day, or month) of the first stamp, else what follows history, else what follows the first stamp.
    For a length of several days or steps what follows history comes first, for then the day says nothing.
    """
    first, last = _index(cadence, batch.first), _index(cadence, batch.last)
    every = layout.batch_every
    if every is not None:
        tries = [cadence.period(every, batch.first, floor=True)] if isinstance(every, str) else []
        if history is not None:
            after = _index(cadence, history.last) + 1
            follows = cadence.period(every, int(cadence.stamp_of(np.array([after]))[0]), floor=False)
            if after <= first < follows[1]:
                own_calendar = bool(tries) and _has_own_calendar(every, cadence)
                tries = [*tries, follows] if own_calendar else [follows, *tries]
        tries.append(cadence.period(every, batch.first, floor=False))
        for begin, end in tries:
            if begin <= first and last < end:
                return begin, end
    return first, last + 1


def _has_own_calendar(every: str | int, cadence: Cadence) -> bool:
    """The length has a natural beginning (a day, an hour, a month) on this cadence."""
    length = parse_length(str(every))
    return length.kind == "months" or (not cadence.daily_or_longer and (length.kind == "fixed" or length.size == 1))


def _index(cadence: Cadence, stamp: int) -> int:
    return int(cadence.index_of(np.array([stamp]))[0][0])


def _not_too_thin(what: str, steps: int, rows: float, cadence: Cadence) -> None:
    if steps > ROOM + SPARSEST * rows:
        raise BatchError(
            what, f"its stamps span {steps:,} steps of {cadence.every} with {rows:.3g} rows a series",
            f"a row in {SPARSEST:,} steps at least", "Is `every` right, and is the clock of the source?",
        )  # fmt: skip


def _near(begin: int, end: int, first: int, last: int, cadence: Cadence, granted: int) -> None:
    """Refuse a batch farther from its history than that is long: no rule could look at the two together."""
    reach = max(NEAREST_FENCE, last - first + 1, granted // cadence.step)
    gap = max(begin - last, first - end)
    if gap > reach:
        raise BatchError(
            "the batch", f"it lies {gap:,} steps of {cadence.every} from the history",
            f"at most {reach:,}", "Is the year right, and is it the history of this feed?",
        )  # fmt: skip
