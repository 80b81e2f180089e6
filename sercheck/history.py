"""Which history a batch is judged against, and what the feed keeps of it: archive, ledger and rule file together.

Depends on ``intake``, ``store``, ``archived``, ``learn`` and the compiled rules.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from sercheck.archived import SILENT, Remembered, archived, keep
from sercheck.errors import BatchError
from sercheck.grid import Grid
from sercheck.intake.calendar import Cadence
from sercheck.intake.layout import Layout
from sercheck.intake.since import both, compact, window
from sercheck.intake.stream import Source
from sercheck.intake.stretch import Extent
from sercheck.intake.zone import DAY, EARLIEST, LATEST, NOT_A_STAMP
from sercheck.record import utc_text
from sercheck.rulebook.compiled import Rulebook
from sercheck.rulebook.lengths import mean_seconds, seconds
from sercheck.serial.arrays import Ints
from sercheck.store.archive import Archive, Entry, Log, What
from sercheck.store.where import archive_place

if TYPE_CHECKING:
    import pandas as pd

    from sercheck.intake.databases import DatabaseRows
    from sercheck.store.ledger import Ledger
    from sercheck.store.rows import BaselineRow, Settlement

    Given = str | Path | Sequence[str | Path] | pd.DataFrame | DatabaseRows

USUAL_DAYS = USUAL_BATCHES = 112
"""Days or batches of history, whichever is longer: ninety batches to compare with, and three weeks before them that
teach the profile."""
WINDOWS = 21
"""Windows of a rule that looks farther back than the batch: its own and twenty of history, what small risks need."""
REFRESH = "7D"
"""Length of newer history from which a baseline is learned anew where the rule file names none: the week is the longest
cycle that profiles are learned of."""
LEFT = 0.5
"""Share of a stretch that must have been let in for it to teach: with less, what was learned before stays."""
SECOND = 1_000_000_000


LOOK = 7
"""Batches over which a rule's longer look rests after it held one: those that the look takes together."""


@dataclass(frozen=True)
class Past:
    """The history of one judgement.

    Attributes:
        source: its rows, or None.
        baseline: the baseline that its records name, where the ledger has one or will have.
        held: first and last stamp of the batches that were held and then let in by a person.
        notes: what the reader should know.
        rests: rules that held one of the last seven batches.
    """

    source: Source | None
    baseline: BaselineRow | None = None
    held: tuple[tuple[int, int], ...] = ()
    notes: tuple[str, ...] = ()
    rests: frozenset[str] = frozenset()

    @property
    def baseline_id(self) -> str | None:
        """Id of the baseline; the content of the history where it was given and not learned."""
        if self.baseline is not None:
            return self.baseline.baseline_id
        return None if self.source is None else self.source.fingerprint

    def marked(self, grid: Grid) -> Grid:
        """The grid with the steps marked that lie in batches let in by a person."""
        if not self.held or grid.start == 0:
            return grid
        stamps = grid.axis.stamps
        held = np.zeros(len(stamps), dtype=bool)
        for first, last in self.held:
            held |= (stamps >= first) & (stamps <= last)
        held[grid.start :] = False
        return replace(grid, axis=replace(grid.axis, held=held)) if held.any() else grid


class Memory:
    """What a store knows of one feed."""

    def __init__(self, book: Rulebook, layout: Layout, ledger: Ledger, at: Path | str, *, writes: bool = True) -> None:
        self.book, self.layout, self.ledger, self.writes = book, layout, ledger, writes
        self.archive = Archive(at, book.feed)
        self.log: Log = self.archive.log()

    def prepare(self) -> None:
        """Tell an unusable archive before the work."""
        if self.writes:
            self.archive.prepare()

    def archived(self, first: int, before: int) -> Source | None:
        """The archive's rows in a stretch."""
        return archived(self.archive, self.layout, first, before, self.log)

    def keep(self, batch_id: str, source: Source, cadence: Cadence, decision: str, said: Settlement | None) -> None:
        """Make the archive agree with the decision; what is there already is left as it is.

        What a person said about the batch counts before what rules decided.
        """
        if not self.writes:
            return
        by_rules: What = "released" if decision == "released" else "held"
        what: What = by_rules if said is None else "settled" if said.what == "released" else "discarded"
        known = self.archive.log().states.get(batch_id)
        if known is None:
            extent = source.extent(cadence)
            between = (max(extent.low, EARLIEST), extent.high)
            keep(self.archive, batch_id, source.fingerprint, source.blocks(), cadence, what, between)
        elif said is not None or known.what == "held":
            self.archive.mark(known, what)

    def held_by(self, before: int, reach: int) -> frozenset[str]:
        """The rules that held a batch of this feed whose newest row lies in the stretch of ``reach`` before a stamp."""
        from sercheck.store.rows import Filters

        first, last = (_text(max(stamp, EARLIEST)) for stamp in (before - reach, before - 1))
        held = Filters(feed=self.book.feed, since=first, until=last, decision="held")
        names: set[str] = set()
        for batch in self.ledger.batches(held):
            table = self.ledger.records(Filters(batch_id=batch.batch.batch_id, outcome="fail"))
            names.update(table["rule"][table["action"] == "hold"].tolist())
        return frozenset(names)

    def learned(self, source: Source, cadence: Cadence, learned_at: str) -> BaselineRow:
        """Learn from the rows and keep it in the ledger."""
        from sercheck.learn import identity, learn

        if not self.writes:
            return identity(source, self.book, cadence, learned_at)
        lessons = learn(source, self.book, self.layout, cadence, learned_at)
        self.ledger.add_baseline(lessons.baseline)
        return lessons.baseline


def open_memory(
    book: Rulebook, layout: Layout, ledger: Ledger, store: str | Path | None, *, writes: bool = True
) -> Memory:
    """The memory of a feed in a store: its ledger, and its archive in the store's folder or at its URL."""
    return Memory(book, layout, ledger, archive_place(store), writes=writes)


def find_past(
    book: Rulebook, layout: Layout, batch: Source, given: Given | None, memory: Memory | None, judged_at: str
) -> Past:
    """The history of a batch, with what was decided about the batches just before it."""
    past = _found(book, layout, batch, given, memory, judged_at)
    if memory is None:
        return past
    cadence = Cadence(layout.every, layout.timezone).anchored(batch.sample())
    extent = batch.extent(cadence)
    rests = memory.held_by(extent.first, LOOK * _batch_length(book, cadence, extent))
    return replace(past, rests=rests, notes=(*past.notes, *_released_before(memory.log, batch, cadence, extent)))


def _released_before(log: Log, batch: Source, cadence: Cadence, extent: Extent) -> tuple[str, ...]:
    """What the reader should know of stamps that another batch brought before.

    Told by the log alone, which knows where a batch lies and not which series have a row there.
    """
    first, last = _as_kept(np.array([extent.first, extent.last]), cadence)[[0, -1]]
    near = [entry for entry in log.history if entry.first <= last and entry.last >= first]
    if not near:
        return ()
    stamps = np.unique(np.concatenate([_as_kept(rows.stamps, cadence) for rows in batch.blocks()]))
    others = [entry for entry in near if entry.fingerprint != batch.fingerprint]  # known of a stream once it was read
    shared = np.zeros(len(stamps), dtype=bool)
    for entry in others:
        shared |= (stamps >= entry.first) & (stamps <= entry.last)
    if not shared.any():
        return ()
    more = f" and {len(others) - 1} more" if len(others) > 1 else ""
    before = f"{np.count_nonzero(shared)} of its stamps were released before by batch {others[-1].batch_id}{more}"
    return (f"{before}; where both have a row the newest release wins",)


def _as_kept(stamps: Ints, cadence: Cadence) -> Ints:
    """Stamps as the archive has them, each once in order: from daily feeds on those of the steps."""
    if cadence.daily_or_longer:
        index, on_grid = cadence.index_of(stamps)
        stamps = cadence.stamp_of(index[on_grid])
    return np.unique(stamps)


def _found(
    book: Rulebook, layout: Layout, batch: Source, given: Given | None, memory: Memory | None, judged_at: str
) -> Past:
    """The history of a batch: what was given, else the archive, before its first row what the rule file names.

    Never a row at or after the batch's first stamp. With ``baseline: from`` or after a person declared a new regime no
    row before that; from the archive no more than the rules need.
    """
    cadence = Cadence(layout.every, layout.timezone).anchored(batch.sample())
    extent = batch.extent(cadence)
    since = regime(memory)
    if given is not None or memory is None:
        named = given if given is not None else list(book.history) or None
        first = max(teaches_from(book, cadence, extent, default=given is None), since or EARLIEST)
        before = extent.first if given is None else LATEST
        source = None if named is None else window(named, layout, cadence, first, before)
        return Past(source, held=_held(memory), notes=regime_note(since))
    return _remembered(memory, cadence, extent, since, judged_at)


def _remembered(memory: Memory, cadence: Cadence, extent: Extent, since: int | None, judged_at: str) -> Past:
    book = memory.book
    first = max(teaches_from(book, cadence, extent, default=True), since or EARLIEST)
    start = _text(extent.first)
    known = memory.ledger.baseline(book.feed, book.fingerprint, start, None if since is None else _text(since))
    notes = list(regime_note(since))
    locked = known is not None and _mostly_left_out(memory.log, first, extent.first)
    if known is not None and locked:
        first = min(first, _stamp(known.first_stamp))
        notes.append(
            f"less than half of the rows since {_text(max(first, EARLIEST))} were let in: the baseline of "
            f"{known.first_stamp} to {known.last_stamp} is kept"
        )
    source = _joined(memory, memory.archived(first, extent.first), cadence, (first, extent.first))
    _not_another_year(memory.log, extent)
    if source is None:
        return Past(None, notes=tuple(notes))
    refresh = round(seconds(book.baseline.get("refresh", REFRESH)) * SECOND)
    newer = 0 if known is None else source.extent(cadence).last - _stamp(known.last_stamp)
    if known is None or (newer >= refresh and not locked):
        before = known
        known = memory.learned(source, cadence, judged_at)
        if before is not None:
            notes.append(
                f"the baseline was learned anew from {known.first_stamp} to {known.last_stamp}: the one before ended "
                f"{before.last_stamp}"
            )
    return Past(source, known, _held(memory), tuple(notes))


def _not_another_year(log: Log, extent: Extent) -> None:
    """Refuse a batch that begins more than a year after the newest row let in, and longer after it than all that was
    ever let in is long.

    Raises:
        BatchError: it does.
    """
    before = [entry for entry in log.history if entry.first < extent.first]
    if not before:
        return
    newest = min(max(entry.last for entry in before), extent.first)
    if extent.first - newest > max(SILENT, newest - min(entry.first for entry in before)):
        raise BatchError(
            "the batch", f"it begins {_text(extent.first)}, the newest row let in before it is of {_text(newest)}",
            "at most a year between", "Is the year right? A feed that was silent so long begins in a new store.",
        )  # fmt: skip


def _joined(memory: Memory, kept: Source | None, cadence: Cadence, between: tuple[int, int]) -> Source | None:
    """The archive's rows, and before their first one what the rule file names."""
    book, layout = memory.book, memory.layout
    if not book.history:
        return kept
    begins = None if kept is None else kept.extent(cadence).first
    if begins is not None and begins <= between[0] + DAY:
        return kept
    older = window(list(book.history), layout, cadence, *between)
    if older is None or kept is None or begins is None:
        return older or kept
    rows = older.rows()
    early = compact(rows.take((rows.stamps < begins) & (rows.stamps != NOT_A_STAMP)))
    return Remembered(both(early, kept.rows()), layout, older.paths) if len(early) else kept


def _mostly_left_out(log: Log, first: int, before: int) -> bool:
    """Batches that wait or were discarded have more rows in the stretch than those that were let in."""

    def rows(entries: tuple[Entry, ...]) -> float:
        return sum(entry.rows * _overlap(entry, first, before) for entry in entries)

    lost, left = rows(log.left_out), rows(log.history)
    return lost > 0 and left < LEFT * (left + lost)


def _overlap(entry: Entry, first: int, before: int) -> float:
    """Share of a batch's stretch that lies in another."""
    inside = min(entry.last + 1, before) - max(entry.first, first)
    return max(0.0, inside / (entry.last + 1 - entry.first))


def teaches_from(book: Rulebook, cadence: Cadence, extent: Extent, *, default: bool) -> int:
    """First moment of history that is read, nanoseconds UTC."""
    asked = book.baseline.get("from")
    if asked is not None and re.match(r"^[0-9]{4}-", asked):
        return local_midnight(asked, cadence)
    if asked is not None:
        return max(extent.first - round(seconds(asked) * SECOND), EARLIEST)
    if not default or cadence.irregular:
        return EARLIEST
    windows = [_length(rule.window, cadence) for rule in book.rules if rule.window != "batch"]
    longest = max(
        [USUAL_DAYS * DAY, USUAL_BATCHES * _batch_length(book, cadence, extent), *(WINDOWS * w for w in windows)]
    )
    return max(extent.first - longest, EARLIEST)


def _length(length: str | int, cadence: Cadence) -> int:
    return length * cadence.step if isinstance(length, int) else round(seconds(length) * SECOND)


def _batch_length(book: Rulebook, cadence: Cadence, extent: Extent) -> int:
    usual = None if book.batch_every is None else mean_seconds(book.batch_every)
    return extent.last - extent.first + cadence.step if usual is None else round(usual * SECOND)


def local_midnight(date: str, cadence: Cadence) -> int:
    """The instant at which a local day such as 2026-01-12 begins, nanoseconds UTC."""
    day = int(np.datetime64(date, "D").astype(np.int64))
    return int(cadence.zone.utc(np.array([day * DAY]))[0])


def regime(memory: Memory | None) -> int | None:
    """The moment before which history no longer teaches, nanoseconds UTC; None where nobody said so."""
    said = None if memory is None else memory.ledger.relearn_from(memory.book.feed)
    return None if said is None else _stamp(said)


def regime_note(since: int | None) -> tuple[str, ...]:
    """What the reader should know of it."""
    said = "no longer teaches: a person declared a new regime"
    return () if since is None else (f"history before {_text(since)} {said}",)


def _held(memory: Memory | None) -> tuple[tuple[int, int], ...]:
    return () if memory is None else tuple((entry.first, entry.last) for entry in memory.log.settled)


def _text(stamp: int) -> str:
    return str(utc_text(stamp)[0])


def _stamp(text: str) -> int:
    moment = datetime.fromisoformat(text)
    return int(np.datetime64(moment.astimezone(UTC).replace(tzinfo=None), "ns").astype(np.int64))
