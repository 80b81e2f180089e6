"""Ids as people type them: whole, or the beginning of one; depends on ``queries`` and ``tables``."""

from __future__ import annotations

from typing import TYPE_CHECKING

from sercheck.errors import UsageError
from sercheck.store.queries import begins_with
from sercheck.store.tables import tables

if TYPE_CHECKING:
    from sqlalchemy import Connection

SHORTEST_PREFIX = 4
"""Letters of an id that a person must type at least."""


class UnknownIdError(UsageError):
    """No batch, record or episode is called so."""


def the_one(connection: Connection, kind: str, start: str) -> str:
    """The whole id of the batch, record or episode whose id (a batch's fingerprint too) is, or alone begins so.

    Raises:
        UnknownIdError: there is none.
        UsageError: there are several, or too few letters were given.
    """
    from sqlalchemy import or_, select

    known = tables()
    table = {"batch": known.batches, "record": known.records, "episode": known.episodes}[kind]
    column = table.c[f"{kind}_id"]
    names = [column, table.c.fingerprint] if kind == "batch" else [column]
    if connection.execute(select(column).where(column == start)).first():
        return start
    if len(start) < SHORTEST_PREFIX:
        raise UsageError(f"{kind} {start!r}", "too short to look for", f"{SHORTEST_PREFIX} letters of the id or more")
    so_called = or_(*(begins_with(name, start) for name in names))
    ids = list(connection.execute(select(column).where(so_called).order_by(column).limit(6)).scalars())
    if not ids:
        raise unknown(kind, start)
    if len(ids) > 1:
        some = ", ".join(ids[:5]) + (" and more" if len(ids) > 5 else "")
        raise UsageError(f"{kind} {start!r}", f"several ids begin so: {some}", "more letters of one of them")
    return str(ids[0])


def unknown(kind: str, name: str) -> UnknownIdError:
    """The error that says where such ids are listed."""
    lists = {"batch": "batches", "record": "records", "episode": "episodes"}[kind]
    todo = f"`sercheck ledger {lists}` lists them."
    return UnknownIdError(f"{kind} {name!r}", "not in the ledger", f"the id of a {kind} or its beginning", todo)
