"""A judgement with its batch and records written to the ledger; depends on ``record``, ``rows`` and ``tables``."""

from __future__ import annotations

import json
from dataclasses import fields
from datetime import UTC, datetime
from itertools import count, islice
from typing import TYPE_CHECKING

from sercheck.errors import StoreError
from sercheck.record import Records, storable
from sercheck.store.queries import COUNT_OF
from sercheck.store.rows import BatchRow, Judgement, JudgementRow, later_than
from sercheck.store.tables import BATCH_COLUMNS, RECORD_COLUMNS, tables

if TYPE_CHECKING:
    from sqlalchemy import Connection

BLOCK = 5_000
"""Records sent to or fetched from the database at a time (a few megabytes)."""


def put_batch(connection: Connection, batch: BatchRow, place: str) -> None:
    """A new batch, or one more set of files that a known one was read from."""
    from sqlalchemy import insert, select, update

    batches = tables().batches
    received = [storable(path) for path in batch.received]
    row = connection.execute(select(*batches.c).where(batches.c.batch_id == batch.batch_id)).mappings().first()
    if row is None:
        values = {name: getattr(batch, name) for name in BATCH_COLUMNS}
        values |= {"feed": storable(batch.feed), "received": json.dumps(received, ensure_ascii=False)}
        connection.execute(insert(batches).values(values))
        return
    if row["fingerprint"] != batch.fingerprint:
        raise StoreError(place, f"batch {batch.batch_id} is there with other content", "one id for one content")
    known = json.loads(row["received"])
    if not set(received) <= set(known):
        merged = json.dumps(list(dict.fromkeys([*known, *received])), ensure_ascii=False)
        connection.execute(update(batches).where(batches.c.batch_id == batch.batch_id).values(received=merged))


def put_judgement(connection: Connection, judgement: JudgementRow, records: Records) -> Judgement:
    """A judgement, with the counts of its records and the time it is stored."""
    from sqlalchemy import func, insert, select

    given = {each.name: getattr(judgement, each.name) for each in fields(JudgementRow)}
    given["rules"] = storable(judgement.rules)
    kept = tables().judgements
    before = connection.execute(select(func.max(kept.c.stored_at)).where(kept.c.batch_id == judgement.batch_id))
    now = later_than(before.scalar(), datetime.now(UTC))
    stored = Judgement(**given, stored_at=now, counts=records.counts())
    counted = {COUNT_OF[outcome]: number for outcome, number in stored.counts.items()}
    values = {"judgement_id": judgement.judgement_id, **given, "stored_at": now, **counted}
    connection.execute(insert(tables().judgements).values(values))
    return stored


def put_records(connection: Connection, records: Records, sought: str) -> None:
    """The records of a judgement, block by block."""
    from sqlalchemy import insert

    statement = insert(tables().records)
    text = str(statement.compile(dialect=connection.dialect))
    rows = ((*values, sought, place) for values, place in zip(records.tuples(), count(), strict=False))
    while block := list(islice(rows, BLOCK)):
        if connection.dialect.positional:  # the driver takes our tuples as they are: half the time
            connection.exec_driver_sql(text, block)
        else:
            connection.execute(statement, [dict(zip(RECORD_COLUMNS, row, strict=True)) for row in block])
