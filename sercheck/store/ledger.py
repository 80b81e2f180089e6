"""The ledger: every batch, what was decided about it and its records; depends on ``record`` and its own folder.

A judgement with its records is one transaction: there is all of it or nothing, whenever the process dies. Ids come
from content, so storing the same judgement again changes nothing and gives what was stored first, and of two processes
that judge the same batch at once one decides.
"""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import fields, replace
from types import TracebackType
from typing import TYPE_CHECKING, Any, Self

from sercheck.errors import StoreError
from sercheck.record import COLUMNS, INTEGERS, NUMBERS, Records
from sercheck.store.database import FILE, ConflictError, Database
from sercheck.store.ids import UnknownIdError, the_one, unknown
from sercheck.store.judgements import BLOCK, put_batch, put_judgement, put_records
from sercheck.store.memory import (
    facts_of,
    newest_baseline,
    put_baseline,
    put_settlement,
    put_sketches,
    relearn_from,
    settlements_of,
    sketches_of,
)
from sercheck.store.migrations import migrate
from sercheck.store.outbox import put_messages
from sercheck.store.queries import (
    COUNT_OF,
    batches_where,
    judgements_of,
    records_where,
    rules_with,
)
from sercheck.store.rows import (
    BaselineRow,
    BatchRow,
    Filters,
    JudgedBatch,
    Judgement,
    JudgementRow,
    Settlement,
    judgement_id,
)
from sercheck.store.standings import catch_up, put_standings
from sercheck.store.tables import BATCH_COLUMNS, tables
from sercheck.store.where import ledger_place

if TYPE_CHECKING:
    from sqlalchemy import Connection, Result, RowMapping

__all__ = ["Ledger", "UnknownIdError", "open_ledger"]

ASKED = 500
"""Ids asked for in one query (databases allow 999 parameters and more)."""
_REPEATING = frozenset(COLUMNS) - INTEGERS - NUMBERS - {"record_id"}


class Ledger:
    """The ledger of one store; a context manager. Nothing is made or opened before it is needed.

    Looking things up where no file of a ledger is finds nothing and makes nothing. Every method raises ``StoreError``
    when the database cannot be read or written.
    """

    def __init__(self, database: Database) -> None:
        self._database = database
        self._ready = False

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    @property
    def place(self) -> str:
        """Where the ledger lies, without passwords."""
        return self._database.place

    def close(self) -> None:
        """Let go of the database."""
        self._database.close()

    def prepare(self) -> None:
        """Make the ledger if there is none and bring it up to date; ``add`` does so by itself.

        Call it before long work, to learn of an unusable store first.
        """
        if not self._ready:
            self._database.create()
            migrate(self._database)
            catch_up(self._database)
            self._ready = True

    def find(self, batch_id: str, rules_fingerprint: str, baseline_id: str | None) -> Judgement | None:
        """The judgement of this batch by these rules against this baseline, if there is one."""
        if not self._there():
            return None
        with self._database.reading() as connection:
            return _find(connection, judgement_id(batch_id, rules_fingerprint, baseline_id))

    def add(
        self,
        batch: BatchRow,
        judgement: JudgementRow,
        records: Records,
        sketches: str = "",
        tell: Mapping[str, Sequence[str]] | None = None,
    ) -> Judgement:
        """Store a judgement with its batch, records and sketches, all or nothing, and give it as stored.

        In the same transaction the feed's episodes are brought up to date, and a message waits for each desk that
        ``tell`` (desks by rule) names for a rule whose episode opened, got worse, spread or closed.

        The same judgement stored before, by this or another process, is left alone and returned: look at its decision.

        Raises:
            StoreError: the database fails; another batch has this id; two records have one id.
            ValueError: batch, judgement and records are not of one batch (an error of the program).
        """
        others = set(records["batch_id"].tolist()) | {judgement.batch_id}
        if others != {batch.batch_id}:
            raise ValueError(f"batch {batch.batch_id} got a judgement or records of {others - {batch.batch_id}}")
        self.prepare()
        try:
            return self._add(batch, judgement, records, sketches, tell or {})
        except ConflictError:  # another process stored the same batch meanwhile: now its rows are seen
            try:
                return self._add(batch, judgement, records, sketches, tell or {})
            except ConflictError as conflict:
                raise StoreError(
                    self.place, f"two records of batch {batch.batch_id} have one id; nothing was stored",
                    "one id for one rule, column, series and lag", "Please report it.",
                ) from conflict  # fmt: skip

    def _add(
        self,
        batch: BatchRow,
        judgement: JudgementRow,
        records: Records,
        sketches: str,
        tell: Mapping[str, Sequence[str]],
    ) -> Judgement:
        with self._database.writing() as connection:
            stored = _find(connection, judgement.judgement_id)
            if stored is None:
                put_batch(connection, batch, self.place)
                stored = put_judgement(connection, judgement, records)
                put_records(connection, records, judgement.judgement_id)
                put_sketches(connection, judgement.judgement_id, sketches)
                changes = put_standings(connection, batch, stored, records)
                put_messages(connection, batch, stored, changes, tell)
        return stored

    def records(self, wanted: str | Filters) -> Records:
        """The records of a batch (its whole id), or those that the filters let through; the newest batch first."""
        filters = Filters(batch_id=wanted) if isinstance(wanted, str) else wanted
        if not self._there():
            return Records.empty()
        with self._database.reading() as connection:
            return _gathered(connection.execute(records_where(filters)))

    def batches(self, wanted: Filters | None = None) -> tuple[JudgedBatch, ...]:
        """The batches that the filters let through, the newest first.

        Decision and outcome are asked of the judgement stored last.
        """
        if not self._there():
            return ()
        with self._database.reading() as connection:
            ids = list(connection.execute(batches_where(wanted or Filters())).scalars())
            found = _judged(connection, ids)
        return tuple(found[batch_id] for batch_id in dict.fromkeys(ids))

    def batch(self, batch_id: str) -> JudgedBatch:
        """The batch whose id is ``batch_id``, or whose id or fingerprint alone begins so.

        Raises:
            UnknownIdError: no batch is called so.
            UsageError: several are, or too few letters were given.
        """
        self._must_be_there(batch_id, "batch")
        with self._database.reading() as connection:
            whole = the_one(connection, "batch", batch_id)
            return _judged(connection, [whole])[whole]

    def record(self, record_id: str) -> Records:
        """The one record whose id is, or alone begins with, ``record_id``.

        Raises:
            UnknownIdError: no record is called so.
            UsageError: several are, or too few letters were given.
        """
        from sqlalchemy import select

        self._must_be_there(record_id, "record")
        with self._database.reading() as connection:
            whole = the_one(connection, "record", record_id)
            columns = [tables().records.c[name] for name in COLUMNS]
            return _gathered(connection.execute(select(*columns).where(columns[0] == whole)))

    def settle(self, settlement: Settlement) -> Settlement:
        """Add what a person said about a batch, and give it as stored; nothing is changed or erased by it."""
        self.prepare()
        with self._database.writing() as connection:
            return put_settlement(connection, settlement)

    def relearn_from(self, feed: str) -> str | None:
        """The moment (UTC, RFC 3339) before which history no longer teaches this feed, or None."""
        if not self._there():
            return None
        with self._database.reading() as connection:
            return relearn_from(connection, feed)

    def add_baseline(self, row: BaselineRow) -> None:
        """Keep what was learned; the same learned before stays as it is."""
        self.prepare()
        with self._database.writing() as connection:
            put_baseline(connection, row)

    def baseline(self, feed: str, rules_fingerprint: str, before: str, since: str | None = None) -> BaselineRow | None:
        """The newest baseline of rows before ``before`` (and none before ``since``), without its facts."""
        if not self._there():
            return None
        with self._database.reading() as connection:
            return newest_baseline(connection, feed, rules_fingerprint, before, since)

    def facts(self, baseline_id: str) -> bytes | None:
        """The facts of a baseline, a Parquet file; None where there is none of this id."""
        if not self._there():
            return None
        with self._database.reading() as connection:
            return facts_of(connection, baseline_id)

    def sketches(self, sought: str) -> str:
        """What was sketched of a judgement when it was made, as JSON; empty where nothing was."""
        if not self._there():
            return ""
        with self._database.reading() as connection:
            return sketches_of(connection, sought)

    def rules_with(self, judgement_ids: Sequence[str], outcome: str) -> dict[str, dict[str, int]]:
        """For each judgement the rules that have records of this outcome, and how many."""
        if not self._there():
            return {}
        found: dict[str, dict[str, int]] = {}
        with self._database.reading() as connection:
            for first in range(0, len(judgement_ids), ASKED):
                asked = list(judgement_ids[first : first + ASKED])
                for judgement, rule, number in connection.execute(rules_with(asked, outcome)):
                    found.setdefault(judgement, {})[rule] = number
        return found

    @contextmanager
    def looking(self) -> Iterator[Connection | None]:
        """A transaction that only looks, for the queries of this folder's other files; None where no ledger is."""
        if not self._there():
            yield None
            return
        with self._database.reading() as connection:
            yield connection

    @contextmanager
    def changing(self) -> Iterator[Connection]:
        """A transaction that writes, for the statements of this folder's other files."""
        self.prepare()
        with self._database.writing() as connection:
            yield connection

    def _there(self) -> bool:
        """A ledger exists; it is brought up to date at the first look."""
        if not self._database.exists:
            return False
        self.prepare()
        return True

    def _must_be_there(self, name: str, kind: str) -> None:
        if not self._there():
            raise unknown(kind, name)


def open_ledger(store: str | None = None, url: str | None = None) -> Ledger:
    """The ledger at ``url`` (any SQLAlchemy URL), else in the folder ``store`` (which may also be a URL).

    What is not given comes from ``SERCHECK_LEDGER`` (a URL) and ``SERCHECK_STORE`` (a folder, default ``.sercheck``).

    Raises:
        StoreError: the URL cannot be read; the store is a place for objects and no URL of a ledger is given.
    """
    return Ledger(Database(*ledger_place(store, url, FILE)))


def _find(connection: Connection, sought: str) -> Judgement | None:
    from sqlalchemy import select

    judgements = tables().judgements
    row = connection.execute(select(*judgements.c).where(judgements.c.judgement_id == sought)).mappings().first()
    return None if row is None else _judgement(row)


def _gathered(result: Result[Any]) -> Records:
    """Rows to columns, block by block; equal texts are kept once, so that memory stays small."""
    seen: dict[object, object] = {}
    parts = []
    while block := result.fetchmany(BLOCK):
        columns = zip(*block, strict=True)
        parts.append(Records({
            name: [seen.setdefault(cell, cell) for cell in column] if name in _REPEATING else list(column)
            for name, column in zip(COLUMNS, columns, strict=True)
        }))  # fmt: skip
    return Records.concat(parts)


def _judged(connection: Connection, ids: list[str]) -> dict[str, JudgedBatch]:
    found: dict[str, JudgedBatch] = {}
    for first in range(0, len(ids), ASKED):
        for row in connection.execute(judgements_of(ids[first : first + ASKED])).mappings():
            before = found.get(row["batch_id"]) or JudgedBatch(_batch(row), ())
            found[row["batch_id"]] = replace(before, judgements=(*before.judgements, _judgement(row)))
        for batch_id, settlements in settlements_of(connection, ids[first : first + ASKED]).items():
            found[batch_id] = replace(found[batch_id], settlements=settlements)
    return found


def _batch(row: RowMapping) -> BatchRow:
    values = {name: row[f"of_batch_{name}"] for name in BATCH_COLUMNS}
    return BatchRow(**{**values, "received": tuple(json.loads(values["received"]))})


def _judgement(row: RowMapping) -> Judgement:
    values = {each.name: row[each.name] for each in fields(Judgement) if each.name != "counts"}
    return Judgement(**values, counts={outcome: row[column] for outcome, column in COUNT_OF.items()})
