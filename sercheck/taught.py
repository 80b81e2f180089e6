"""``learn`` from files to a stored baseline and a filled archive; depends on ``history``, ``learn``, the rule files."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING

from sercheck.archived import keep_history
from sercheck.blocks import Workers
from sercheck.engines import workers_of
from sercheck.errors import BatchError
from sercheck.history import Memory, open_memory, regime, regime_note, teaches_from
from sercheck.intake.calendar import Cadence
from sercheck.intake.since import cut
from sercheck.intake.stream import Source, open_feed
from sercheck.intake.stretch import Extent
from sercheck.intake.zone import DAY, EARLIEST
from sercheck.learn import Lack, Lessons, lacking, learn
from sercheck.rulebook import load_rules
from sercheck.rulebook.compiled import Rulebook
from sercheck.store.ledger import open_ledger
from sercheck.verdict import layout_of

if TYPE_CHECKING:
    import pandas as pd

    from sercheck.intake.databases import DatabaseRows

    Given = str | Path | Sequence[str | Path] | pd.DataFrame | DatabaseRows


@dataclass(frozen=True)
class Taught:
    """What a history taught a feed.

    Attributes:
        lessons: the baseline with its facts and findings.
        lacks: the rules that will be undecided.
        archived: rows that the archive took.
        there_before: rows of this history that it had.
        notes: what the reader should know.
    """

    lessons: Lessons
    lacks: tuple[Lack, ...]
    archived: int
    there_before: int
    notes: tuple[str, ...]


def teach(
    rules: Rulebook | str | Path,
    history: Given,
    store: str | Path,
    *,
    ledger: str | None = None,
    keep: bool = True,
    engine: str = "local",
    scheduler: str | None = None,
) -> Taught:
    """Fill the archive from history and learn the baseline from its newest part.

    All rows are archived. What teaches are those that ``gate`` would read for a batch that comes next (``baseline:
    from``, else what the rules need). The same history again changes nothing.

    Args:
        rules: a compiled rule file or its path.
        history: files, a glob or a DataFrame.
        store: folder of ledger and archive.
        ledger: SQLAlchemy URL of the ledger, where it is not in the store.
        keep: write to ledger and archive.
        engine: ``local`` or ``dask``, as for ``gate``.
        scheduler: address of a running Dask scheduler; default as many processes here as there are cores.

    Raises:
        SercheckError: rule file, history or store cannot be used.
    """
    book = rules if isinstance(rules, Rulebook) else load_rules(rules)
    layout = layout_of(book)
    with open_ledger(str(store), ledger) as kept_in, workers_of(engine, scheduler) as workers:
        memory = open_memory(book, layout, kept_in, store, writes=keep)
        if keep:
            kept_in.prepare()
            memory.prepare()
        source = open_feed(history, layout)
        cadence = Cadence(layout.every, layout.timezone).anchored(source.sample())
        return _taught(memory, source, cadence, workers)


def _taught(memory: Memory, source: Source, cadence: Cadence, workers: Workers) -> Taught:
    book, layout = memory.book, memory.layout
    extent = source.extent(cadence)
    since = regime(memory)
    wanted = teaches_from(book, cadence, _next_batch(extent, cadence), default=True)
    first = max(wanted, since or EARLIEST)
    teaching = cut(source, cadence, first)
    if teaching is None:
        raise BatchError("the history", "no row of the time that teaches", "newer rows", "Look at `baseline: from`.")
    learned_at = datetime.now(UTC).strftime("%Y-%m-%dT%H:%M:%SZ")
    lessons = learn(teaching, book, layout, cadence, learned_at, workers.learned(teaching, layout, book, cadence))
    lacks = tuple(lacking(teaching, book, layout, cadence))
    archived = there = 0
    if memory.writes:
        archived, there = keep_history(memory.archive, source, cadence, memory.log, (extent.first, extent.last))
        memory.ledger.add_baseline(lessons.baseline)
    return Taught(lessons, lacks, archived, there, (*regime_note(since), *_short(extent, wanted), *_unsaid(book)))


def _next_batch(extent: Extent, cadence: Cadence) -> Extent:
    after = extent.last + max(cadence.step, 1)
    return replace(extent, first=after, last=after)


def _unsaid(book: Rulebook) -> tuple[str, ...]:
    """A note where the length of a batch had to be guessed."""
    if book.batch_every is not None or book.every == "irregular":
        return ()
    return ("the rule file does not say `batch_every`: the rules were tried on a batch of a day or of one step",)


def _short(extent: Extent, wanted: int) -> tuple[str, ...]:
    """A note where the history is shorter than what is read of it."""
    asked, there = (extent.last - wanted) / DAY, (extent.last - extent.first) / DAY
    if wanted <= EARLIEST or there >= asked - 1:
        return ()
    return (f"the history holds {there:.0f} of the {asked:.0f} days that the rules read",)
