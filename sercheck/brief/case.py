"""All that is known of one judged batch, gathered for a brief; depends on the store and the records."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

from sercheck.record import Records
from sercheck.sketches import Sketch, from_text
from sercheck.store.rows import BatchRow, Filters, JudgedBatch, Judgement, Settlement

if TYPE_CHECKING:
    from sercheck.store.ledger import Ledger

LAST = 30
"""Batches shown before the judged one: a month of days."""
MOST_UNDECIDED = 5_000
"""Undecided records read; enough to know the rules they are of."""


@dataclass(frozen=True)
class Earlier:
    """A batch before the judged one, and on how many records each rule failed there."""

    judged: JudgedBatch
    failed: Mapping[str, int]


@dataclass(frozen=True)
class Case:
    """One batch with its judgement.

    Attributes:
        records: those that failed, and undecided ones.
        undecided: number of undecided records by rule.
        earlier: the batches before it, the newest first.
        store: the store's folder as it was named, where it must be named to settle the batch.
    """

    batch: BatchRow
    judgement: Judgement
    settlements: tuple[Settlement, ...]
    records: Records
    undecided: Mapping[str, int]
    sketches: tuple[Sketch, ...]
    notes: tuple[str, ...]
    earlier: tuple[Earlier, ...] = ()
    store: str = ""


def case_of(ledger: Ledger, batch: JudgedBatch, store: str = "") -> Case:
    """What the ledger knows of a batch."""
    judgement = batch.last
    sought, name = judgement.judgement_id, batch.batch.batch_id
    failed = ledger.records(Filters(batch_id=name, judgement_id=sought, outcome="fail"))
    silent = ledger.records(Filters(batch_id=name, judgement_id=sought, outcome="undecided", limit=MOST_UNDECIDED))
    sketches, notes = from_text(ledger.sketches(sought))
    return Case(
        batch.batch, judgement, batch.settlements, Records.concat([failed, silent]),
        ledger.rules_with([sought], "undecided").get(sought, {}), sketches, notes,
        earlier_of(ledger, batch.batch.feed, batch.batch.last_stamp, name), store,
    )  # fmt: skip


def earlier_of(ledger: Ledger, feed: str, last_stamp: str | None, but: str) -> tuple[Earlier, ...]:
    """The batches of a feed whose newest row came before that of one of them, the newest first."""
    found = ledger.batches(Filters(feed=feed, until=last_stamp, limit=LAST + 1))
    before = [each for each in found if each.batch.feed == feed and each.batch.batch_id != but][:LAST]
    failed = ledger.rules_with([each.last.judgement_id for each in before], "fail")
    return tuple(Earlier(each, failed.get(each.last.judgement_id, {})) for each in before)


def newest(ledger: Ledger) -> JudgedBatch | None:
    """The newest batch that is held and that nobody has settled, else the newest of all; None in an empty ledger."""
    held = [each for each in ledger.batches(Filters(decision="held", limit=LAST)) if each.settled is None]
    found = held[:1] or ledger.batches(Filters(limit=1))
    return found[0] if found else None
