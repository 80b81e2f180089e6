"""The digest of all feeds over a stretch of time, as plain numbers; depends on ``episodes`` and ``tables``."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable
from dataclasses import dataclass
from typing import TYPE_CHECKING

from sercheck.store.episodes import Episode, EpisodeFilters, episodes
from sercheck.store.tables import tables

if TYPE_CHECKING:
    from sqlalchemy import Connection

    from sercheck.store.ledger import Ledger


@dataclass(frozen=True)
class RuleNoise:
    """How often one rule failed, and what people said of the batches that it held.

    Attributes:
        failed: batches on which it failed.
        asked: batches on which it passed or failed.
        false_holds: batches it held (perhaps with others) that a person released.
        true_holds: likewise that a person discarded.
        episodes: its episodes in the stretch.
    """

    feed: str
    rule: str
    failed: int
    asked: int
    false_holds: int = 0
    true_holds: int = 0
    episodes: int = 0


@dataclass(frozen=True)
class FeedDigest:
    """What became of one feed's batches in a stretch of time; each batch by its last judgement.

    Attributes:
        batches: how many were judged.
        released: how many the rules released.
        held: how many the rules held.
        false_holds: of those held: a person released them.
        true_holds: of those held: a person discarded them.
        unsettled: of those held: nobody has said anything yet.
        slipped: released by the rules and discarded by a person.
        last_batch: the newest one, ``last_stamp`` its newest row, ``last_decision`` what the rules said of it.
        episodes: those that were not over before the stretch, the open ones first.
        opened: how many of them began in it.
        closed: how many of them ended in it.
    """

    feed: str
    batches: int
    released: int
    held: int
    false_holds: int
    true_holds: int
    unsettled: int
    slipped: int
    last_batch: str
    last_stamp: str
    last_decision: str
    episodes: tuple[Episode, ...] = ()
    opened: int = 0
    closed: int = 0


@dataclass(frozen=True)
class Digest:
    """All feeds, those with most unsettled held batches first, and the rules that fail most.

    Attributes:
        noisiest: rules by the batches they held that a person released, then by the batches on which they failed.
        untold: messages that no desk has yet, by desk.
    """

    since: str | None
    until: str | None
    feeds: tuple[FeedDigest, ...]
    noisiest: tuple[RuleNoise, ...]
    untold: tuple[tuple[str, int], ...] = ()


@dataclass(frozen=True)
class _Seen:
    """One batch: its place in time, the last decision about it and the last word on it."""

    batch_id: str
    feed: str
    at: str
    decision: str
    said: str | None


def digest(ledger: Ledger, since: str | None = None, until: str | None = None, feed: str | None = None) -> Digest:
    """Count what happened between two times (batches' newest rows; UTC, RFC 3339), of one feed or of all.

    ``feed`` may be a pattern with ``*`` and ``?``.
    """
    with ledger.looking() as connection:
        if connection is None:
            return Digest(since, until, (), ())
        batches = _batches(connection, since, until, feed)
        said = {each.batch_id: each.said for each in batches}
        stood = _stood(connection, since, until, feed)
        untold = _untold(connection)
    found = episodes(ledger, EpisodeFilters(feed=feed, since=since, until=until))
    by_feed: dict[str, list[_Seen]] = {}
    for each in batches:
        by_feed.setdefault(each.feed, []).append(each)
    feeds = [_feed(name, seen, [e for e in found if e.feed == name], since, until) for name, seen in by_feed.items()]
    feeds.sort(key=lambda each: (-each.unsettled, -each.held, each.feed))
    return Digest(since, until, tuple(feeds), _noise(stood, said, found), untold)


def _batches(connection: Connection, since: str | None, until: str | None, feed: str | None) -> list[_Seen]:
    """Batches in order of time, each with its last judgement's decision."""
    from sqlalchemy import select

    from sercheck.store.queries import batches_where
    from sercheck.store.rows import Filters

    batches, judgements = tables()[:2]
    wanted = batches_where(Filters(feed=feed, since=since, until=until)).order_by(None).subquery()
    query = (
        select(batches.c.batch_id, batches.c.feed, batches.c.last_stamp, judgements.c.judged_at, judgements.c.decision)
        .join_from(batches, judgements, judgements.c.batch_id == batches.c.batch_id)
        .where(batches.c.batch_id.in_(select(wanted.c.batch_id)))
        .order_by(judgements.c.stored_at, judgements.c.judgement_id)
    )
    settled = _settled(connection)
    last = {
        batch_id: _Seen(batch_id, name, stamp or judged, decision, settled.get(batch_id))
        for batch_id, name, stamp, judged, decision in connection.execute(query)
    }
    return sorted(last.values(), key=lambda each: (each.at, each.batch_id))


def _settled(connection: Connection) -> dict[str, str]:
    """What was said last about each batch that a person settled."""
    from sqlalchemy import select

    kept = tables().settlements
    query = select(kept.c.batch_id, kept.c.what).where(kept.c.what != "relearn")
    rows = connection.execute(query.order_by(kept.c.settled_at, kept.c.settlement_id))
    return {str(batch_id): str(what) for batch_id, what in rows}


def _stood(
    connection: Connection, since: str | None, until: str | None, feed: str | None
) -> dict[tuple[str, str], dict[str, bool]]:
    """For each rule of each feed the batches that it judged, and on which of them it failed at last."""
    from sqlalchemy import select

    from sercheck.store.queries import named

    kept = tables().standings
    query = select(kept.c.feed, kept.c.rule, kept.c.batch_id, kept.c.state)
    query = query.where(kept.c.state.in_(["pass", "fail"])).order_by(kept.c.stored_at)
    if since:
        query = query.where(kept.c.at >= since)
    if until:
        query = query.where(kept.c.at <= until)
    if feed:
        query = query.where(named(kept.c.feed, feed))
    found: dict[tuple[str, str], dict[str, bool]] = {}
    for name, rule, batch_id, state in connection.execute(query):
        found.setdefault((name, rule), {})[batch_id] = state == "fail"
    return found


def _untold(connection: Connection) -> tuple[tuple[str, int], ...]:
    from sqlalchemy import func, select

    kept = tables().messages
    query = select(kept.c.desk, func.count()).where(kept.c.state != "sent").group_by(kept.c.desk)
    return tuple((str(desk), int(number)) for desk, number in connection.execute(query.order_by(kept.c.desk)))


def _feed(
    name: str, seen: list[_Seen], found: list[Episode], since: str | None, until: str | None
) -> FeedDigest:
    held = [each.said for each in seen if each.decision == "held"]
    last = seen[-1]
    return FeedDigest(
        name, len(seen), len(seen) - len(held), len(held), held.count("released"), held.count("discarded"),
        held.count(None), sum(each.decision == "released" and each.said == "discarded" for each in seen),
        last.batch_id, last.at, last.decision, tuple(found),
        sum(_within(each.first_at, since, until) for each in found),
        sum(_within(each.closed_at, since, until) for each in found),
    )  # fmt: skip


def _within(moment: str | None, since: str | None, until: str | None) -> bool:
    return moment is not None and (since is None or moment >= since) and (until is None or moment <= until)


def _noise(
    stood: dict[tuple[str, str], dict[str, bool]], said: dict[str, str | None], found: Iterable[Episode]
) -> tuple[RuleNoise, ...]:
    """The rules that failed at all, the noisiest first."""
    runs = Counter((each.feed, each.rule) for each in found)
    noise = []
    for (feed, rule), batches in stood.items():
        failed = [batch_id for batch_id, fails in batches.items() if fails]
        if failed:
            words = [said.get(batch_id) for batch_id in failed]
            counted = (words.count("released"), words.count("discarded"), runs[feed, rule])
            noise.append(RuleNoise(feed, rule, len(failed), len(batches), *counted))
    return tuple(sorted(noise, key=lambda each: (-each.false_holds, -each.failed, each.feed, each.rule)))
