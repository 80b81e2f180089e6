"""Episodes looked up: since when a rule fails on a feed, and how often it did before; depends on ``tables``."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any

from sercheck.store.ids import the_one, unknown
from sercheck.store.queries import named
from sercheck.store.tables import EPISODE_COLUMNS, tables

if TYPE_CHECKING:
    from sqlalchemy import Connection, Select

    from sercheck.store.ledger import Ledger

ASKED = 500
"""Ids asked for in one query (databases allow 999 parameters and more)."""


@dataclass(frozen=True)
class Episode:
    """A run of batches on which the same rule fails on the same feed. Times are UTC, RFC 3339 text.

    Attributes:
        state: open or closed.
        action: hold, or note for a rule that only notes.
        started: stamp of the oldest row of its first batch.
        first_at: stamp of the newest row of its first batch.
        last_at: likewise of its last batch.
        closed_at: likewise of the batch that closed it.
        closed_as: pass, or gone when the rule is no longer asked.
        closed_by: that batch.
        batches: how many batches failed.
        series: how many different series failed in all (at least; counted up to a million failed records).
        widest: the most that failed on one batch.
        worst: id of the worst record: the smallest p-value, then the farthest beyond its bound.
        p_value: of that record; None for an exact rule.
        beyond: the farthest that an observation lay from its bound, in allowances (1 is the limit).
        false_holds: its batches that a person released: the data were right.
        true_holds: its batches that a person discarded: the data were wrong.
    """

    episode_id: str
    feed: str
    rule: str
    state: str
    action: str
    started: str
    first_at: str
    last_at: str
    closed_at: str | None
    closed_as: str | None
    closed_by: str | None
    first_batch: str
    last_batch: str
    batches: int
    series: int
    widest: int
    worst: str | None
    p_value: float | None
    beyond: float | None
    false_holds: int = 0
    true_holds: int = 0


@dataclass(frozen=True)
class EpisodeFilters:
    """What to look up; None asks for everything. ``feed``, ``rule`` and ``series`` may be patterns with * and ?.

    Attributes:
        since: episodes that were not over before this time.
        until: episodes that had begun by this time (their first batch's newest row).
        state: open or closed.
        series: episodes in which this series failed.
        limit: at most so many, the newest first.
    """

    feed: str | None = None
    since: str | None = None
    until: str | None = None
    state: str | None = None
    rule: str | None = None
    series: str | None = None
    limit: int | None = None


@dataclass(frozen=True)
class RuleHistory:
    """Since when a rule fails on a feed, and how often it did before.

    Attributes:
        now: the episode that is open, or None.
        before: the closed ones, the newest first.
        asked: number of batches on which the rule passed or failed.
    """

    now: Episode | None
    before: tuple[Episode, ...] = field(default=())
    asked: int = 0


def episodes(ledger: Ledger, wanted: EpisodeFilters | None = None) -> tuple[Episode, ...]:
    """The episodes that the filters let through; the open ones first, then the newest."""
    with ledger.looking() as connection:
        return () if connection is None else _read(connection, _where(wanted or EpisodeFilters()))


def open_episodes(ledger: Ledger, feed: str) -> tuple[Episode, ...]:
    """The episodes of a feed that are open, the newest first."""
    return episodes(ledger, EpisodeFilters(feed=feed, state="open"))


def episodes_of(ledger: Ledger, batch_id: str) -> tuple[Episode, ...]:
    """The episodes that a batch belongs to, in the order of its rules."""
    from sqlalchemy import select

    kept, known = tables().standings, tables().episodes
    query = (
        select(*known.c)
        .join_from(known, kept, kept.c.episode_id == known.c.episode_id)
        .where(kept.c.batch_id == batch_id)
        .order_by(kept.c.stored_at, kept.c.place)
    )
    with ledger.looking() as connection:
        found = () if connection is None else _read(connection, query)
    return tuple({each.episode_id: each for each in found}.values())


def episode(ledger: Ledger, start: str) -> Episode:
    """The episode whose id is, or alone begins with, ``start``.

    Raises:
        UnknownIdError: there is none.
        UsageError: there are several, or too few letters were given.
    """
    known = tables().episodes
    with ledger.looking() as connection:
        if connection is None:
            raise unknown("episode", start)
        whole = the_one(connection, "episode", start)
        return _read(connection, _ordered().where(known.c.episode_id == whole))[0]


def batches_of(ledger: Ledger, episode_id: str) -> tuple[str, ...]:
    """The batches of an episode, the oldest first."""
    from sqlalchemy import select

    kept = tables().standings
    query = select(kept.c.batch_id).where(kept.c.episode_id == episode_id)
    query = query.order_by(kept.c.at, kept.c.received_at, kept.c.stored_at)
    with ledger.looking() as connection:
        found = [] if connection is None else list(connection.execute(query).scalars())
    return tuple(dict.fromkeys(found))


def history_of(ledger: Ledger, feed: str, rule: str, before: str | None = None) -> RuleHistory:
    """Since when a rule fails on a feed and how often it did before.

    With ``before`` (a batch's newest row) as it stood at this time: later episodes are left out, and ``now`` is the one
    that this time lies in.
    """
    from sqlalchemy import distinct, func, select

    known, kept = tables().episodes, tables().standings
    mine = [kept.c.feed == feed, kept.c.rule == rule, kept.c.state.in_(["pass", "fail"])]
    with ledger.looking() as connection:
        if connection is None:
            return RuleHistory(None)
        query = _ordered().where(known.c.feed == feed, known.c.rule == rule)
        if before is not None:
            query = query.where(known.c.first_at <= before)
            mine.append(kept.c.at <= before)
        found = _read(connection, query)
        asked = int(connection.execute(select(func.count(distinct(kept.c.batch_id))).where(*mine)).scalar() or 0)
    now = [e for e in found if e.state == "open" or (before is not None and (e.closed_at or "") > before)]
    past = tuple(each for each in found if each not in now[:1])
    return RuleHistory(now[0] if now else None, past, asked)


def _ordered() -> Select[Any]:
    """All episodes, those that are open first, then the newest."""
    from sqlalchemy import select

    known = tables().episodes
    return select(*known.c).order_by(known.c.state.desc(), known.c.last_at.desc(), known.c.first_at, known.c.episode_id)


def _where(wanted: EpisodeFilters) -> Select[Any]:
    from sqlalchemy import or_, select

    known, kept, records = tables().episodes, tables().standings, tables().records
    query = _ordered()
    if wanted.feed:
        query = query.where(named(known.c.feed, wanted.feed))
    if wanted.rule:
        query = query.where(named(known.c.rule, wanted.rule))
    if wanted.state:
        query = query.where(known.c.state == wanted.state)
    if wanted.since:
        query = query.where(or_(known.c.state == "open", known.c.closed_at >= wanted.since))
    if wanted.until:
        query = query.where(known.c.first_at <= wanted.until)
    if wanted.series:
        failed = (
            select(records.c.record_id)
            .join_from(kept, records, records.c.judgement_id == kept.c.judgement_id)
            .where(kept.c.episode_id == known.c.episode_id, records.c.rule == kept.c.rule)
            .where(records.c.outcome == "fail", named(records.c.series, wanted.series))
        )
        query = query.where(failed.correlate(known).exists())
    return query if wanted.limit is None else query.limit(wanted.limit)


def _read(connection: Connection, query: Select[Any]) -> tuple[Episode, ...]:
    rows = connection.execute(query).mappings().all()
    found = [Episode(**{name: row[name] for name in EPISODE_COLUMNS}) for row in rows]
    settled = _settled(connection, [each.episode_id for each in found])
    return tuple(
        replace(each, false_holds=told.count("released"), true_holds=told.count("discarded"))
        for each in found
        for told in [settled.get(each.episode_id, [])]
    )


def _settled(connection: Connection, names: Sequence[str]) -> dict[str, list[str]]:
    """What was said last about each settled batch of each episode."""
    from sqlalchemy import select

    kept, settlements = tables().standings, tables().settlements
    last: dict[tuple[str, str], str] = {}
    for first in range(0, len(names), ASKED):
        query = (
            select(kept.c.episode_id, kept.c.batch_id, settlements.c.what)
            .join_from(kept, settlements, settlements.c.batch_id == kept.c.batch_id)
            .where(kept.c.episode_id.in_(names[first : first + ASKED]), settlements.c.what != "relearn")
            .order_by(settlements.c.settled_at, settlements.c.settlement_id)
        )
        for episode_id, batch_id, what in connection.execute(query):
            last[episode_id, batch_id] = what
    told: dict[str, list[str]] = {}
    for (episode_id, _), what in last.items():
        told.setdefault(episode_id, []).append(what)
    return told
