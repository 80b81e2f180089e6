"""What desks are to be told, kept until they are; depends on ``episodes``, ``rows`` and ``tables``.

A message is written in the transaction of the decision that it tells of, so that a process that dies afterwards leaves
it to the next. Whoever sends it claims it first, in one statement, so that of two at once one sends. A claim whose
process has died, or that is older than any sending lasts, is taken over: then it is not known whether the message went
out, and it is sent again under the same id. Ledger rows name desks and never hold an address.
"""

from __future__ import annotations

import json
import os
import platform
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from hashlib import blake2b
from typing import TYPE_CHECKING

from sercheck.episodes import Change, Changed, for_desks
from sercheck.store.rows import BatchRow, Judgement
from sercheck.store.tables import MESSAGE_COLUMNS, tables

if TYPE_CHECKING:
    from sqlalchemy import ColumnElement, Connection, RowMapping

    from sercheck.store.ledger import Ledger

UNSENT = ("waiting", "sending", "undelivered")
LATE = "its server gave no answer"
"""How the trouble of an attempt begins of which nobody knows whether it reached the desk."""
FIRST_PAUSE = timedelta(minutes=1)
LONGEST_PAUSE = timedelta(hours=6)
"""A message that could not be sent rests for a minute, then twice as long each time, six hours at most (ours: a desk
that is down is not asked by every run, and one that is back is told within a shift)."""
LONGEST_CLAIM = timedelta(minutes=10)
"""After this long a claim is taken over, however its process fares: far longer than a sending may last (ours)."""


@dataclass(frozen=True)
class Message:
    """What one desk is to be told of one judgement.

    Attributes:
        message_id: the same however often it is sent.
        changes: what changed of which episodes.
        attempts: how often it was tried.
        uncertain: an attempt ended without its end being known: the desk may have the message already.
    """

    message_id: str
    judgement_id: str
    batch_id: str
    feed: str
    desk: str
    changes: tuple[Changed, ...]
    made_at: str
    state: str
    attempts: int
    next_at: str | None
    claimed_by: str | None
    trouble: str | None
    sent_at: str | None

    @property
    def uncertain(self) -> bool:
        """It was claimed before and the claim never ended, or it ended without the server's answer."""
        return self.state == "sending" or (self.trouble or "").startswith(LATE)

    def facts(self) -> dict[str, object]:
        """What became of it, as plain data."""
        changes = [vars(change) for change in self.changes]
        hidden = {"claimed_by", "judgement_id"}
        return {name: value for name, value in vars(self).items() if name not in hidden} | {"changes": changes}


def put_messages(
    connection: Connection,
    batch: BatchRow,
    judgement: Judgement,
    changes: Sequence[Changed],
    tell: Mapping[str, Sequence[str]],
) -> None:
    """A message for each desk that is to be told of a change; all changes of a judgement are one message."""
    from sqlalchemy import insert

    for desk, told in for_desks(changes, tell).items():
        spelled = f"{judgement.judgement_id}\0{desk}".encode()
        values = {
            **dict.fromkeys(MESSAGE_COLUMNS),
            "message_id": blake2b(spelled, digest_size=16).hexdigest(),
            "judgement_id": judgement.judgement_id,
            "batch_id": batch.batch_id,
            "feed": batch.feed,
            "desk": desk,
            "changes": json.dumps([vars(change) for change in told], ensure_ascii=False),
            "made_at": judgement.stored_at,
            "state": "waiting",
            "attempts": 0,
        }
        connection.execute(insert(tables().messages).values(values))


def due(ledger: Ledger, now: datetime, desks: Collection[str], batch_id: str | None = None) -> list[Message]:
    """Messages to be sent now to these desks, and those of one batch to any; the oldest first."""
    from sqlalchemy import or_, select

    kept = tables().messages
    mine: ColumnElement[bool] = kept.c.desk.in_(sorted(desks))
    if batch_id is not None:
        mine = or_(mine, kept.c.batch_id == batch_id)
    query = select(*kept.c).where(kept.c.state.in_(UNSENT), mine).order_by(kept.c.made_at, kept.c.message_id)
    with ledger.looking() as connection:
        rows = [] if connection is None else connection.execute(query).mappings().all()
    return [_message(row) for row in rows if _is_due(row, now)]


def waiting_desks(ledger: Ledger) -> set[str]:
    """Desks with a message that has not been sent."""
    from sqlalchemy import select

    kept = tables().messages
    with ledger.looking() as connection:
        if connection is None:
            return set()
        return set(connection.execute(select(kept.c.desk).where(kept.c.state.in_(UNSENT)).distinct()).scalars())


def messages_of(ledger: Ledger, batch_id: str | None = None, state: str | None = None) -> list[Message]:
    """Messages of a batch, of a state, or all, the oldest first."""
    from sqlalchemy import select

    kept = tables().messages
    query = select(*kept.c).order_by(kept.c.made_at, kept.c.message_id)
    if batch_id is not None:
        query = query.where(kept.c.batch_id == batch_id)
    if state is not None:
        query = query.where(kept.c.state == state)
    with ledger.looking() as connection:
        rows = [] if connection is None else connection.execute(query).mappings().all()
    return [_message(row) for row in rows]


def claim(ledger: Ledger, message: Message, now: datetime) -> bool:
    """Take a message for sending; False when another process has it or has sent it."""
    from sqlalchemy import update

    kept = tables().messages
    unchanged = [kept.c.message_id == message.message_id, kept.c.state == message.state]
    unchanged.append(kept.c.attempts == message.attempts)
    values = {
        "state": "sending",
        "attempts": message.attempts + 1,
        "claimed_by": json.dumps([platform.node(), os.getpid()]),
        "claimed_at": _text(now),
    }
    with ledger.changing() as connection:
        return connection.execute(update(kept).where(*unchanged).values(values)).rowcount == 1


def mark_sent(ledger: Ledger, message: Message, now: datetime) -> None:
    """The desk has it."""
    _mark(ledger, message, {"state": "sent", "sent_at": _text(now), "trouble": None, "next_at": None})


def mark_undelivered(ledger: Ledger, message: Message, now: datetime, trouble: str) -> datetime:
    """The desk could not be told, for this reason, which names no address; when it is tried again."""
    pause: timedelta = min(FIRST_PAUSE * 2 ** min(message.attempts, 20), LONGEST_PAUSE)
    later = now + pause
    _mark(ledger, message, {"state": "undelivered", "trouble": trouble, "next_at": _text(later)})
    return later


def _mark(ledger: Ledger, message: Message, values: dict[str, str | None]) -> None:
    """Ends the claim; a claim that another process has taken over meanwhile is its own to end."""
    from sqlalchemy import update

    kept = tables().messages
    own = (kept.c.message_id == message.message_id, kept.c.attempts == message.attempts + 1)
    with ledger.changing() as connection:
        connection.execute(update(kept).where(*own).values({**values, "claimed_by": None, "claimed_at": None}))


def _is_due(row: RowMapping, now: datetime) -> bool:
    if row["state"] == "sending":
        return _abandoned(row, now)
    return row["next_at"] is None or row["next_at"] <= _text(now)


def _abandoned(row: RowMapping, now: datetime) -> bool:
    """The process that claimed it is dead, or took longer than any sending lasts."""
    machine, process = json.loads(row["claimed_by"])
    if row["claimed_at"] <= _text(now - LONGEST_CLAIM):
        return True
    if machine != platform.node() or process == os.getpid():
        return False
    try:
        os.kill(process, 0)
    except ProcessLookupError:
        return True
    except OSError:
        return False
    return False


def _message(row: RowMapping) -> Message:
    values = {name: row[name] for name in Message.__dataclass_fields__ if name != "changes"}
    return Message(**values, changes=tuple(_changed(each) for each in json.loads(row["changes"])))


def _changed(told: dict[str, str]) -> Changed:
    change: Change = told["change"]  # type: ignore[assignment]
    return Changed(told["rule"], change, told["episode_id"])


def _text(moment: datetime) -> str:
    return moment.astimezone(UTC).strftime("%Y-%m-%dT%H:%M:%S.%fZ")
