"""Baselines, settlements and sketches in the ledger: rows that are added, never changed; needs ``rows``, ``tables``."""

from __future__ import annotations

from dataclasses import fields, replace
from datetime import datetime
from typing import TYPE_CHECKING, Any

from sercheck.record import storable
from sercheck.store.rows import BaselineRow, Settlement, later_than
from sercheck.store.tables import BASELINE_COLUMNS, SETTLEMENT_COLUMNS, tables

if TYPE_CHECKING:
    from sqlalchemy import Connection, RowMapping


def put_baseline(connection: Connection, row: BaselineRow) -> None:
    """Keep a baseline; one that was learned before is left alone."""
    from sqlalchemy import insert, select

    baselines = tables().baselines
    known = select(baselines.c.baseline_id).where(baselines.c.baseline_id == row.baseline_id)
    if connection.execute(known).first() is None:
        values = {name: getattr(row, name) for name in BASELINE_COLUMNS}
        connection.execute(insert(baselines).values({**values, "feed": storable(row.feed)}))


def newest_baseline(
    connection: Connection, feed: str, rules_fingerprint: str, before: str, since: str | None
) -> BaselineRow | None:
    """The baseline whose last row is the newest one before ``before``; of several the one learned last.

    Only those whose first row is at ``since`` or later, where that is given. The facts are left in the database.
    """
    from sqlalchemy import select

    baselines = tables().baselines
    columns = [baselines.c[name] for name in BASELINE_COLUMNS if name != "facts"]
    query = (
        select(*columns)
        .where(baselines.c.feed == storable(feed), baselines.c.rules_fingerprint == rules_fingerprint)
        .where(baselines.c.last_stamp < before)
        .order_by(baselines.c.last_stamp.desc(), baselines.c.learned_at.desc(), baselines.c.baseline_id)
        .limit(1)
    )
    if since is not None:
        query = query.where(baselines.c.first_stamp >= since)
    row = connection.execute(query).mappings().first()
    return None if row is None else _read(BaselineRow, row)


def facts_of(connection: Connection, baseline_id: str) -> bytes | None:
    """The facts of a baseline as Parquet, or None where there is no such baseline."""
    from sqlalchemy import select

    baselines = tables().baselines
    found = connection.execute(select(baselines.c.facts).where(baselines.c.baseline_id == baseline_id)).scalar()
    return None if found is None else bytes(found)


def put_settlement(connection: Connection, row: Settlement) -> Settlement:
    """Add a settlement and give it as stored; the same one (all of it, the second included) is there once.

    Where the feed has one of a later time, because a clock was set back, it gets the moment after that.
    """
    from sqlalchemy import func, insert, select

    settlements = tables().settlements
    known = select(settlements.c.settlement_id).where(settlements.c.settlement_id == row.settlement_id)
    if connection.execute(known).first() is None:
        newest = select(func.max(settlements.c.settled_at)).where(settlements.c.feed == storable(row.feed))
        before = connection.execute(newest).scalar()
        if before is not None and before >= row.settled_at:
            row = replace(row, settled_at=later_than(before, datetime.fromisoformat(row.settled_at)))
        values = {name: getattr(row, name) for name in SETTLEMENT_COLUMNS}
        texts = {name: storable(values[name]) for name in ("feed", "settled_by", "because")}
        connection.execute(insert(settlements).values({**values, **texts}))
    return row


def settlements_of(connection: Connection, batch_ids: list[str]) -> dict[str, tuple[Settlement, ...]]:
    """The settlements of each batch, the oldest first."""
    from sqlalchemy import select

    settlements = tables().settlements
    query = (
        select(*settlements.c)
        .where(settlements.c.batch_id.in_(batch_ids))
        .order_by(settlements.c.settled_at, settlements.c.settlement_id)
    )
    found: dict[str, tuple[Settlement, ...]] = {}
    for row in connection.execute(query).mappings():
        found[row["batch_id"]] = (*found.get(row["batch_id"], ()), _read(Settlement, row))
    return found


def relearn_from(connection: Connection, feed: str) -> str | None:
    """The moment before which history no longer teaches the feed: what was said last stands."""
    from sqlalchemy import select

    settlements = tables().settlements
    query = (
        select(settlements.c.relearn_from)
        .where(settlements.c.feed == storable(feed), settlements.c.what == "relearn")
        .order_by(settlements.c.settled_at.desc(), settlements.c.settlement_id)
        .limit(1)
    )
    return connection.execute(query).scalar()


def put_sketches(connection: Connection, judgement_id: str, sketches: str) -> None:
    """Keep what was sketched of a judgement, where anything was."""
    from sqlalchemy import insert

    if sketches:
        connection.execute(insert(tables().sketches).values(judgement_id=judgement_id, sketches=storable(sketches)))


def sketches_of(connection: Connection, judgement_id: str) -> str:
    """What was sketched of a judgement; empty where nothing was."""
    from sqlalchemy import select

    sketches = tables().sketches
    found = connection.execute(select(sketches.c.sketches).where(sketches.c.judgement_id == judgement_id)).scalar()
    return "" if found is None else str(found)


def _read(kind: type[Any], row: RowMapping) -> Any:
    return kind(**{each.name: row[each.name] for each in fields(kind) if each.name in row})
