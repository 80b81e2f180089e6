"""A block of series to what is kept of it once its rows are gone: the same function wherever the block is.

The gate calls ``look`` on one block after another, the workers of a distributed run on blocks of their own;
``Gathered`` puts the pieces together in the order of the blocks. Depends on ``engine``, ``counted``, ``sketching`` and
``history``.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Protocol

from sercheck import stopwatch
from sercheck.counted import Counted
from sercheck.engine import Run, measure_block
from sercheck.grid import Grid
from sercheck.history import Past
from sercheck.intake.calendar import Cadence
from sercheck.intake.layout import Layout
from sercheck.intake.stream import Source, feed_grids, open_feed
from sercheck.judge import Seen
from sercheck.learn import Learned, of_block
from sercheck.rulebook.compiled import Rulebook
from sercheck.sketching import Clearest, Sketcher

if TYPE_CHECKING:
    from sercheck.intake.stream import Given


@dataclass(frozen=True)
class Looked:
    """What is kept of a block. It can be sent from one process to another, and holds no row of history.

    Attributes:
        seen: every rule's measurements; ``engine.decide`` makes outcomes of those of all blocks.
        counted: the block in numbers.
        clearest: the series to draw for each rule and column.
        notes: what the reader should know.
    """

    seen: list[Seen]
    counted: Counted
    clearest: dict[tuple[int, str | None], Clearest] = field(default_factory=dict)
    notes: tuple[str, ...] = ()


def look(grid: Grid, past: Past, run: Run) -> Looked:
    """Measure a block, count its rows and keep what may be drawn of it. Pure.

    Args:
        grid: all rows of some series, history before the batch (``intake.stream.feed_grids``).
        past: which stretches a person let in (its rows are not read; they are in the grid).
        run: what is the same for all blocks.
    """
    counted, sketcher = Counted(), Sketcher(run.book)
    counted.add(grid)
    seen, notes = measure_block(past.marked(grid), run)
    stopwatch.begin("keep")
    sketcher.watch(grid, seen)
    return Looked(seen, counted, sketcher.kept, tuple(notes))


class Gathered:
    """What was kept of all blocks, in their order."""

    def __init__(self, run: Run, blocks: Iterable[Looked]) -> None:
        self.seen: list[Seen] = []
        self.counted = Counted()
        self.sketcher = Sketcher(run.book)
        self.notes: list[str] = []
        for block in blocks:
            self.seen += block.seen
            self.counted.join(block.counted)
            self.sketcher.join(block.clearest)
            self.notes += block.notes


class Workers(Protocol):
    """Where blocks are looked at."""

    def open(self, given: Given, layout: Layout) -> Source:
        """Open the batch."""

    def learned(self, history: Source, layout: Layout, book: Rulebook, cadence: Cadence) -> Iterator[Learned]:
        """What all blocks of a history teach, in their order."""

    def looked(self, batch: Source, past: Past, layout: Layout, run: Run) -> Iterator[Looked]:
        """Look at all blocks of the batch beside its history, in their order."""


class Here:
    """One process, one block after another."""

    def open(self, given: Given, layout: Layout) -> Source:
        return open_feed(given, layout)

    def learned(self, history: Source, layout: Layout, book: Rulebook, cadence: Cadence) -> Iterator[Learned]:
        return (of_block(grid, book, cadence) for grid in feed_grids(history, None, layout))

    def looked(self, batch: Source, past: Past, layout: Layout, run: Run) -> Iterator[Looked]:
        stopwatch.begin("read")
        for grid in feed_grids(batch, past.source, layout):
            yield look(grid, past, run)
            stopwatch.begin("read")
