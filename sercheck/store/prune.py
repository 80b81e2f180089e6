"""Retention: what is old leaves the ledger in one transaction, but nothing that is still needed; depends on ``tables``.

What stays, however old: batches of an episode that is open or ended at or after the date, batches with a message that a
desk has not taken, the last seven batches of each feed (rules rest after they held one of them), the batch from which a
person last declared a new regime, and every baseline that is its rules' newest or that a record names. The archive
is not touched: its rows are the history that teaches.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from sercheck.store.tables import tables

if TYPE_CHECKING:
    from sqlalchemy import ColumnElement, Connection

    from sercheck.store.ledger import Ledger

NEWEST = 7
"""Batches of a feed that stay in any case: those over which a rule's longer look rests."""
ASKED = 500
"""Ids named in one statement."""


@dataclass(frozen=True)
class Pruned:
    """What left the ledger, and how many batches from before the date stay because they are needed."""

    batches: int
    judgements: int
    records: int
    episodes: int
    baselines: int
    kept: int


def prune(ledger: Ledger, before: str) -> Pruned:
    """Remove batches whose newest row is older than ``before`` (UTC, RFC 3339) with all that belongs to them.

    One transaction: there is all of it or nothing, and two at once do no harm. Where no ledger is, nothing is made.

    Raises:
        StoreError: the ledger cannot be read or written; nothing is removed then.
    """
    with ledger.looking() as connection:
        if connection is None:
            return Pruned(0, 0, 0, 0, 0, 0)
    with ledger.changing() as connection:
        return _prune(connection, before)


def _prune(connection: Connection, before: str) -> Pruned:
    from sqlalchemy import column, select, table

    all_of = tables()
    old = _old(connection, before)
    going = sorted(old - _needed(connection, before))
    judgements = list(_asked(connection, all_of.judgements.c.judgement_id, all_of.judgements.c.batch_id, going))
    due = table("standings_due", column("judgement_id"))
    episodes = {
        name for name in _asked(connection, all_of.standings.c.episode_id, all_of.standings.c.batch_id, going) if name
    }
    counts: dict[str, int] = {}
    for each in (all_of.messages, all_of.standings, all_of.sketches, all_of.records, due):
        counts[each.name] = _remove(connection, each, each.c.judgement_id, judgements)
    for each in (all_of.settlements, all_of.judgements, all_of.batches):
        counts[each.name] = _remove(connection, each, each.c.batch_id, going)
    still = set(connection.execute(select(all_of.standings.c.episode_id).distinct()).scalars())
    gone = _remove(connection, all_of.episodes, all_of.episodes.c.episode_id, sorted(episodes - still))
    baselines = _remove_baselines(connection, before)
    return Pruned(
        counts["batches"], counts["judgements"], counts["records"], gone, baselines, len(old) - len(going)
    )  # fmt: skip


def _old(connection: Connection, before: str) -> set[str]:
    from sqlalchemy import func, select

    batches, judgements = tables()[:2]
    last = func.max(func.coalesce(batches.c.last_stamp, judgements.c.judged_at))
    query = (
        select(batches.c.batch_id)
        .join_from(batches, judgements, judgements.c.batch_id == batches.c.batch_id)
        .group_by(batches.c.batch_id)
        .having(last < before)
    )
    return set(connection.execute(query).scalars())


def _needed(connection: Connection, before: str) -> set[str]:
    """Batches that stay whatever their age."""
    from sqlalchemy import func, or_, select

    batches, _, _, _, settlements, _, standings, episodes, messages = tables()
    running = or_(episodes.c.state == "open", episodes.c.last_at >= before, episodes.c.closed_at >= before)
    in_episodes = (
        select(standings.c.batch_id)
        .join(episodes, standings.c.episode_id == episodes.c.episode_id)
        .where(running)
    )  # fmt: skip
    kept = set(connection.execute(in_episodes).scalars())
    closers = select(episodes.c.closed_by).where(running, episodes.c.closed_by.is_not(None))
    kept |= set(connection.execute(closers).scalars())
    kept |= set(connection.execute(select(messages.c.batch_id).where(messages.c.state != "sent")).scalars())
    order = (batches.c.last_stamp.desc(), batches.c.batch_id)
    place = func.row_number().over(partition_by=batches.c.feed, order_by=order)
    newest = select(batches.c.batch_id, place.label("place")).subquery()
    kept |= set(connection.execute(select(newest.c.batch_id).where(newest.c.place <= NEWEST)).scalars())
    said = (
        select(settlements.c.feed, settlements.c.batch_id)
        .where(settlements.c.what == "relearn")
        .order_by(settlements.c.settled_at, settlements.c.settlement_id.desc())
    )
    regimes = {feed: batch_id for feed, batch_id in connection.execute(said)}  # noqa: C416  of each feed the last
    return kept | set(regimes.values())


def _remove_baselines(connection: Connection, before: str) -> int:
    """Baselines of old rows that no judgement names and that are not their rules' newest."""
    from sqlalchemy import func, select

    _, judgements, _, baselines = tables()[:4]
    order = (baselines.c.last_stamp.desc(), baselines.c.learned_at.desc(), baselines.c.baseline_id)
    place = func.row_number().over(partition_by=(baselines.c.feed, baselines.c.rules_fingerprint), order_by=order)
    ranked = select(baselines.c.baseline_id, baselines.c.last_stamp, place.label("place")).subquery()
    named = select(judgements.c.baseline_id).where(judgements.c.baseline_id.is_not(None))
    query = (
        select(ranked.c.baseline_id)
        .where(ranked.c.place > 1, ranked.c.last_stamp < before)
        .where(ranked.c.baseline_id.not_in(named))
    )
    return _remove(
        connection, baselines, baselines.c.baseline_id, list(connection.execute(query).scalars())
    )  # fmt: skip


def _asked(
    connection: Connection, wanted: ColumnElement[Any], by: ColumnElement[Any], ids: Sequence[str]
) -> Iterator[str]:
    from sqlalchemy import select

    for first in range(0, len(ids), ASKED):
        yield from connection.execute(select(wanted).where(by.in_(ids[first : first + ASKED]))).scalars()


def _remove(connection: Connection, table: Any, by: ColumnElement[Any], ids: Sequence[str]) -> int:
    from sqlalchemy import delete

    removed = 0
    for first in range(0, len(ids), ASKED):
        removed += connection.execute(delete(table).where(by.in_(ids[first : first + ASKED]))).rowcount
    return removed
