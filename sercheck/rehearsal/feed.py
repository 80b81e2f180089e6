"""The history of a feed read once: its values on one axis, cut into the batches that were delivered.

Depends on ``intake``, ``grid``, ``history`` and the compiled rules. What is counted about the rows of a batch is
counted by the intake itself, as ``gate`` would.
"""

from __future__ import annotations

from collections.abc import Collection, Mapping
from dataclasses import dataclass, fields, replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from sercheck.errors import BatchError, UsageError
from sercheck.grid import Axis, Grid, Tally
from sercheck.history import local_midnight, teaches_from
from sercheck.intake.assemble import planned_grids
from sercheck.intake.axis import build_axis
from sercheck.intake.calendar import Cadence
from sercheck.intake.layout import Layout
from sercheck.intake.rows import Rows
from sercheck.intake.stream import feed_cadence, open_feed
from sercheck.intake.stretch import Extent, Plan, batch_stretch, plan
from sercheck.intake.zone import LATEST, NOT_A_STAMP
from sercheck.recent import BATCHES, FEWEST, FEWEST_WEEKS
from sercheck.record import utc_text
from sercheck.rulebook.compiled import Rulebook
from sercheck.rulebook.lengths import mean_seconds, seconds
from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.verdict import layout_of

if TYPE_CHECKING:
    from sercheck.verdict import Rows as GivenRows

EVERYTHING = 1 << 62
"""Cells of a block: more than any memory holds, so that all series come in one."""
LEAST_LEFT = 28
"""Batches that are left to judge where the first ninety only teach (ours: four weeks of days); with fewer left the
rehearsal begins as soon as the rules can say something."""


@dataclass(frozen=True)
class Counts:
    """Tallies of all batches, one array of shape (batches, S) for each thing that is counted."""

    plain: Mapping[str, Ints]
    unreadable: Mapping[str, Ints]
    infinite: Mapping[str, Ints]

    def tally(self, batch: int, series: Bools) -> Tally:
        """The tally of one batch for some of its series."""
        return Tally(
            **{name: counts[batch, series] for name, counts in self.plain.items()},
            unreadable={name: counts[batch, series] for name, counts in self.unreadable.items()},
            infinite={name: counts[batch, series] for name, counts in self.infinite.items()},
        )


COUNTED = tuple(each.name for each in fields(Tally) if each.name not in ("unreadable", "infinite"))


@dataclass(frozen=True)
class Feed:
    """A history cut into batches.

    Attributes:
        book: the rule file.
        layout: the feed's columns and clocks.
        cadence: the anchored cadence.
        keys: names of all series, shape (S,).
        axis: the time axis of all rows, length T.
        values: for each value column float64 of shape (S, T).
        delivered: shape (S, T).
        edges: first step and last step (exclusive) of every batch, shape (B, 2).
        counts: what was counted about the rows of every batch.
        first: the first batch that is judged; those before only teach.
        unplaced: rows whose stamp cannot be read or lies far from all others, which belong to no batch.
    """

    book: Rulebook
    layout: Layout
    cadence: Cadence
    keys: np.ndarray
    axis: Axis
    values: Mapping[str, Floats]
    delivered: Bools
    edges: Ints
    counts: Counts
    first: int
    unplaced: int

    @property
    def judged(self) -> range:
        """The batches that are judged."""
        return range(self.first, len(self.edges))

    def began(self, batch: int) -> str:
        """The first step of a batch, UTC, RFC 3339."""
        return str(utc_text(int(self.axis.stamps[self.edges[batch, 0]]))[0])

    def due(self, batch: int) -> int:
        """The moment at which a batch is complete: when its last step is over, nanoseconds UTC."""
        end = int(self.edges[batch, 1])
        if end < len(self.axis):
            return int(self.axis.stamps[end])
        return int(self.axis.stamps[-1]) + self.cadence.step

    def reach(self, batch: int) -> int:
        """The first step of history that a batch is judged against: as much as ``gate`` reads from its archive."""
        begin, end = self.edges[batch].tolist()
        stamps = self.axis.stamps
        stretch = Extent(int(stamps[begin]), int(stamps[end - 1]), 0, 0, 0.0)
        low = int(np.searchsorted(stamps, teaches_from(self.book, self.cadence, stretch, default=True)))
        some = np.flatnonzero(self.delivered[:, low:begin].any(axis=0))
        return low + int(some[0]) if len(some) else begin

    def series(self, batch: int) -> Bools:
        """The series that history or the batch has a row of, shape (S,)."""
        low, end = self.reach(batch), int(self.edges[batch, 1])
        return np.asarray(self.delivered[:, low:end].any(axis=1) | (self.counts.plain["rows"][batch] > 0))

    def grid(self, batch: int, held: Collection[int] = ()) -> Grid:
        """A batch with the history before it; the steps of the batches ``held`` are marked, as a ledger would."""
        low, (begin, end) = self.reach(batch), self.edges[batch].tolist()
        axis = self.axis.cut(low, end)
        marks = np.zeros(end - low, dtype=bool)
        for one in held:
            first, last = self.edges[one].tolist()
            marks[max(first - low, 0) : max(min(last, begin) - low, 0)] = True
        if marks.any():
            axis = replace(axis, held=marks)
        some = self.series(batch)
        rows: Bools | slice = slice(None) if some.all() else some
        return Grid(
            self.keys[some],
            axis,
            begin - low,
            {name: column[rows, low:end] for name, column in self.values.items()},
            self.delivered[rows, low:end],
            self.counts.tally(batch, some),
        )

    def save(self, folder: Path) -> Feed:
        """Write the large arrays to a folder; the feed that is returned names them and is small to hand on."""
        for name, column in self.values.items():
            np.save(folder / f"values-{list(self.values).index(name)}.npy", column)
        np.save(folder / "delivered.npy", self.delivered)
        return replace(self, values=dict.fromkeys(self.values, np.empty((0, 0))), delivered=np.empty((0, 0), bool))

    def load(self, folder: Path) -> Feed:
        """The feed with the arrays of a folder, shared with all who read them."""
        values = {
            name: np.load(folder / f"values-{place}.npy", mmap_mode="r") for place, name in enumerate(self.values)
        }
        return replace(self, values=values, delivered=np.load(folder / "delivered.npy", mmap_mode="r"))


def read_feed(book: Rulebook, history: GivenRows, begins: str | None = None) -> Feed:
    """Read a history and cut it into batches.

    Args:
        book: the rule file.
        history: rows that were let in: files, a glob or a DataFrame.
        begins: local date from which batches are judged; by default the rows before teach ninety batches, or the least
            that the rules need where too few batches would be left.

    Raises:
        BatchError: the history cannot be read.
        UsageError: no batch can be cut or judged.
    """
    layout = layout_of(book)
    if layout.every == "irregular":
        raise UsageError(
            "rehearse", "the feed is irregular: nothing says which of its rows came in one batch", "a feed with `every`"
        )
    layout = replace(layout, batch_every=_batch_length(book))
    source = open_feed(history, layout)
    cadence = feed_cadence(source, None, layout)
    whole = source.extent(cadence)
    laid = plan(whole, None, cadence, replace(layout, batch_every=None), None)
    rows = source.rows().by_series()
    (grid,) = planned_grids(rows, None, laid, EVERYTHING)
    _must_have_numbers(rows, grid)
    edges, last = _cut(whole, cadence, layout)
    first = int(laid.axis.index[0])
    if last > first + len(laid.axis):  # the last batch ends after its last row
        longer = build_axis(cadence, layout, first, last)
        more = last - first - len(laid.axis)
        wider = ((0, 0), (0, more))
        values = {name: np.pad(column, wider, constant_values=np.nan) for name, column in grid.values.items()}
        grid = replace(grid, axis=longer, values=values, delivered=np.pad(grid.delivered, wider))
    edges = edges - first
    edges[:, 0] = np.maximum(edges[:, 0], 0)
    tallies, some = _counted(rows, grid, edges, cadence)
    edges, counts = edges[some], _of_batches(tallies, some)
    feed = Feed(
        book, layout, cadence, grid.keys, grid.axis, grid.values, grid.delivered, edges, counts, 0,
        len(rows) - int(counts.plain["rows"].sum()),
    )  # fmt: skip
    return replace(feed, first=_first(feed, begins))


def _must_have_numbers(rows: Rows, grid: Grid) -> None:
    if any(np.isfinite(column).any() for column in grid.values.values()):
        return
    garbled = any(int(counts.sum()) for counts in grid.tally.unreadable.values())
    raise BatchError(
        "the history", f"not one of its {len(rows):,} rows holds a number in {', '.join(grid.values)}",
        "a point as the decimal mark, no mark of thousands, no units" if garbled else "at least one value",
        "" if garbled else "Is it the right column?",
    )  # fmt: skip


def _batch_length(book: Rulebook) -> str | int:
    """How long a batch is: what the file says, else its shortest window."""
    if book.batch_every is not None:
        return book.batch_every
    windows = [rule.window for rule in book.rules if rule.window != "batch"]
    if not windows:
        raise UsageError(
            "rehearse", "the rule file does not say how often a batch comes", "batch_every: 1D", "Add it to the file."
        )
    whole = [window for window in windows if isinstance(window, int)]
    return min(whole) if whole else min((str(window) for window in windows), key=seconds)


def _cut(whole: Extent, cadence: Cadence, layout: Layout) -> tuple[Ints, int]:
    """Edges of the batches as steps of the cadence, shape (B, 2), and the end of the last one.

    Each batch is the stretch that ``gate`` would take for one with a row at its beginning, after a history that ends
    right before.
    """
    end = int(cadence.index_of(np.array([whole.last]))[0][0])
    edges: list[tuple[int, int]] = []
    stamp, before = whole.first, None
    while True:
        here = replace(whole, first=stamp, last=stamp)
        begin, after = batch_stretch(here, before, cadence, layout)
        if edges:
            begin = max(begin, edges[-1][1])
        after = max(after, begin + 1)
        edges.append((begin, after))
        if after > end:
            return np.array(edges, dtype=np.int64), after
        newest, stamp = (int(each) for each in cadence.stamp_of(np.array([after - 1, after])))
        before = replace(whole, last=newest)


def _counted(rows: Rows, grid: Grid, edges: Ints, cadence: Cadence) -> tuple[list[Tally], Bools]:
    """What the intake counts about the rows of each batch, and which batches have any."""
    stamps = grid.axis.stamps
    starts = np.append(stamps[edges[:, 0]], stamps[-1] + cadence.step)
    batch = np.where(rows.stamps == NOT_A_STAMP, -1, np.searchsorted(starts, rows.stamps, side="right") - 1)
    batch[batch == len(edges)] = -1
    order = np.argsort(batch, kind="stable")
    ordered = rows.take(order)
    bounds = np.searchsorted(batch[order], np.arange(len(edges) + 1))
    tallies = []
    for place, (begin, end) in enumerate(edges.tolist()):
        part = ordered.take(slice(int(bounds[place]), int(bounds[place + 1])))
        axis = grid.axis.cut(begin, end)
        laid = Plan(cadence, axis, 0, int(np.iinfo(np.int64).min) + 1, LATEST)
        (one,) = planned_grids(part.by_series(), None, laid, EVERYTHING)
        tallies.append(one.tally)
    return tallies, np.diff(bounds) > 0


def _of_batches(tallies: list[Tally], some: Bools) -> Counts:
    chosen = [tally for tally, wanted in zip(tallies, some.tolist(), strict=True) if wanted]
    columns = list(chosen[0].unreadable)
    return Counts(
        {name: np.stack([getattr(tally, name) for tally in chosen]) for name in COUNTED},
        {name: np.stack([tally.unreadable[name] for tally in chosen]) for name in columns},
        {name: np.stack([tally.infinite[name] for tally in chosen]) for name in columns},
    )


def _first(feed: Feed, begins: str | None) -> int:
    """The first batch that is judged."""
    stamps = feed.axis.stamps[feed.edges[:, 0]]
    if begins is not None:
        first = int(np.searchsorted(stamps, _moment(begins, feed.cadence)))
        if not 0 < first < len(stamps):
            raise UsageError(
                "--from", f"{begins} leaves no batch to judge, or no history before it",
                f"a date between {feed.began(1)[:10] if len(stamps) > 1 else feed.began(0)[:10]} and "
                f"{feed.began(len(stamps) - 1)[:10]}",
            )  # fmt: skip
        return first
    longest = int(np.median(feed.edges[:, 1] - feed.edges[:, 0]))
    least = FEWEST_WEEKS if longest <= 7 else FEWEST
    begin = BATCHES if len(stamps) >= BATCHES + LEAST_LEFT else least
    if begin >= len(stamps):
        raise UsageError(
            "rehearse", f"the history holds {len(stamps)} batches, of which the first {least} only teach",
            f"more than {least}", "Give a longer history, or --from DATE to judge with less.",
        )  # fmt: skip
    return begin


def _moment(date: str, cadence: Cadence) -> int:
    try:
        np.datetime64(date, "D")
        return local_midnight(date[:10], cadence)
    except ValueError as trouble:
        raise UsageError("--from", f"'{date}' is no date", "a date such as 2026-01-12") from trouble


def batches_in(feed: Feed, period: str) -> float:
    """How many batches come in a length of time, on average."""
    own = feed.layout.batch_every
    apart = mean_seconds(own) if isinstance(own, str) else None
    if apart is None:
        stamps = feed.axis.stamps[feed.edges[:, 0]]
        apart = float(np.median(np.diff(stamps))) / 1e9 if len(stamps) > 1 else float(feed.cadence.step) / 1e9
    return seconds(period) / apart
