"""All that is known of one judged batch, gathered for a brief; depends on the store and the records."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from sercheck.record import Records
from sercheck.sketches import Sketch, from_text
from sercheck.store.episodes import RuleHistory, history_of
from sercheck.store.rows import BatchRow, Filters, JudgedBatch, Judgement, Settlement

if TYPE_CHECKING:
    from sercheck.store.ledger import Ledger

LAST = 30
"""Batches shown before the judged one: a month of days."""
FEWEST = 4
"""Earlier batches that a course needs."""
MOST_RULES = 60
"""Failed rules whose history is looked up."""
MOST_UNDECIDED = 5_000
"""Undecided records read; enough to know the rules they are of."""


@dataclass(frozen=True)
class Case:
    """One batch with its judgement.

    Attributes:
        records: those that failed, and undecided ones.
        undecided: number of undecided records by rule.
        histories: for each rule that failed since when it fails and how often it did before.
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
    earlier: tuple[JudgedBatch, ...] = ()
    histories: Mapping[str, RuleHistory] = field(default_factory=dict)
    store: str = ""


def case_of(
    ledger: Ledger, batch: JudgedBatch, store: str = "", earlier: tuple[JudgedBatch, ...] | None = None
) -> Case:
    """What the ledger knows of a batch; ``earlier`` is looked up where it is not given."""
    judgement = batch.last
    sought, name = judgement.judgement_id, batch.batch.batch_id
    failed = ledger.records(Filters(batch_id=name, judgement_id=sought, outcome="fail"))
    silent = ledger.records(Filters(batch_id=name, judgement_id=sought, outcome="undecided", limit=MOST_UNDECIDED))
    sketches, notes = from_text(ledger.sketches(sought))
    sketches = tuple(_with_course(ledger, batch.batch, sketch) for sketch in sketches[:MOST_RULES])
    feed, last = batch.batch.feed, batch.batch.last_stamp
    rules = list(dict.fromkeys(failed["rule"].tolist()))[:MOST_RULES]
    return Case(
        batch.batch, judgement, batch.settlements, Records.concat([failed, silent]),
        ledger.rules_with([sought], "undecided").get(sought, {}), sketches, notes,
        earlier_of(ledger, feed, last, name) if earlier is None else earlier,
        {rule: history_of(ledger, feed, rule, last) for rule in rules}, store,
    )  # fmt: skip


def _with_course(ledger: Ledger, batch: BatchRow, sketch: Sketch) -> Sketch:
    """The measure over the last batches in place of the sketch, where that says more and the ledger has some."""
    if not sketch.course_first or sketch.kind == "course":
        return sketch
    wanted = Filters(feed=batch.feed, rule=sketch.rule, series=sketch.series, until=batch.last_stamp, limit=2 * LAST)
    rows = [each for each in ledger.records(wanted).rows() if each["column"] == sketch.column]
    mine = (batch.feed, sketch.rule, sketch.series)
    rows = [each for each in rows if (each["feed"], each["rule"], each["series"]) == mine]
    last = {each["batch_id"]: each for each in rows if each["batch_id"] != batch.batch_id}
    own = next((each for each in rows if each["batch_id"] == batch.batch_id), None)
    if own is None or len(last) < FEWEST:
        return sketch
    y = (*(each["observed"] for each in reversed(list(last.values())[:LAST])), own["observed"])
    of = f"{own['measure'].replace('_', ' ')}{' of ' + sketch.column if sketch.column else ''}"
    x = tuple(float(place) for place in range(1 - len(y), 1))
    limit = own["limit"] if own["limit"] is not None else own["bound"]
    return Sketch("course", sketch.rule, sketch.column, sketch.series, x, y, of=of, limit=limit, course_first=True)


def earlier_of(ledger: Ledger, feed: str, last_stamp: str | None, but: str) -> tuple[JudgedBatch, ...]:
    """The batches of a feed whose newest row came before that of one of them, the newest first."""
    found = ledger.batches(Filters(feed=feed, until=last_stamp, limit=LAST + 1))
    return tuple(each for each in found if each.batch.feed == feed and each.batch.batch_id != but)[:LAST]


def newest(ledger: Ledger) -> JudgedBatch | None:
    """The newest batch that is held and that nobody has settled, else the newest of all; None in an empty ledger."""
    held = [each for each in ledger.batches(Filters(decision="held", limit=LAST)) if each.settled is None]
    found = held[:1] or ledger.batches(Filters(limit=1))
    return found[0] if found else None
