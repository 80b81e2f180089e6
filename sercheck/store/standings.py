"""How each rule stood on each batch, and the episodes that follow from it; depends on ``episodes`` and ``tables``.

A judgement adds its standings and makes anew, in the same transaction, only the episodes that its batch can touch: a
rule's steps between the closing one before the batch and the one after it. A batch that comes late is thus put where it
belongs, whatever was stored before. The order is the batches' newest rows, then the order in which they came.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from hashlib import blake2b
from typing import TYPE_CHECKING, Any

from sercheck.episodes import CLOSING, GONE, Changed, Run, Standing, Step, change_by, runs_around, standings
from sercheck.record import COLUMNS, Records, storable
from sercheck.store.rows import BatchRow, Judgement
from sercheck.store.tables import tables

if TYPE_CHECKING:
    from sqlalchemy import ColumnElement, Connection, RowMapping

    from sercheck.store.database import Database


COUNTED = 1_000_000
"""Failed records of an episode up to which its series are counted one by one (half a second); of a longer one the
number stays what it was, or grows to the most that failed on one batch."""


@dataclass(frozen=True)
class _Here:
    """One judgement of one batch: where its standings lie in time."""

    batch: BatchRow
    judgement: Judgement
    feed: str
    at: str
    received_at: str

    def key(self) -> tuple[str, str, str, str]:
        return self.at, self.received_at, self.judgement.stored_at, self.judgement.judgement_id


def put_standings(connection: Connection, batch: BatchRow, judgement: Judgement, records: Records) -> list[Changed]:
    """Store how each rule stands after this judgement and bring the episodes up to date; what changed of them."""
    return _put(connection, batch, judgement, standings(records))


def _put(connection: Connection, batch: BatchRow, judgement: Judgement, told: list[Standing]) -> list[Changed]:
    from sqlalchemy import insert

    _one_at_a_time(connection, batch.feed)
    at = batch.last_stamp or judgement.judged_at
    here = _Here(batch, judgement, storable(batch.feed), at, _received_at(connection, batch.batch_id))
    touched = _touched(connection, here)
    told = [*told, *(Standing(rule, "gone") for rule in _gone(connection, here, touched, told))]
    if told:
        rows = [_row(here, place, standing) for place, standing in enumerate(told)]
        connection.execute(insert(tables().standings), rows)
    affected = [each for each in told if each.state == "fail" or (each.state in CLOSING and each.rule in touched)]
    changes = (_renew(connection, here, each.rule) for each in affected)
    return [change for change in changes if change is not None]


def catch_up(database: Database) -> None:
    """Work out standings and episodes of the judgements that were stored before there were any; nothing to do mostly.

    Judgements are taken one by one, the oldest first, each in a transaction of its own: a process that dies in between
    leaves the rest to the next, and of two at once each takes what the other has not.
    """
    with database.reading() as connection:
        due = _due(connection)
    for judgement_id in due:
        with database.writing() as connection:
            _catch_up(connection, judgement_id)


def _due(connection: Connection) -> list[str]:
    from sqlalchemy import column, func, select, table

    batches, judgements = tables()[:2]
    waiting = table("standings_due", column("judgement_id"))
    if connection.execute(select(waiting.c.judgement_id).limit(1)).first() is None:
        return []
    query = (
        select(waiting.c.judgement_id)
        .join_from(waiting, judgements, judgements.c.judgement_id == waiting.c.judgement_id)
        .join(batches, batches.c.batch_id == judgements.c.batch_id)
        .order_by(func.coalesce(batches.c.last_stamp, judgements.c.judged_at), judgements.c.stored_at)
    )
    return list(connection.execute(query).scalars())


def _catch_up(connection: Connection, judgement_id: str) -> None:
    from sqlalchemy import column, delete, select, table

    waiting = table("standings_due", column("judgement_id"))
    taken = connection.execute(delete(waiting).where(waiting.c.judgement_id == judgement_id))
    if taken.rowcount == 0:
        return
    batches, judgements, records = tables()[:3]
    row = connection.execute(select(*judgements.c).where(judgements.c.judgement_id == judgement_id)).mappings().one()
    of = connection.execute(select(*batches.c).where(batches.c.batch_id == row["batch_id"])).mappings().one()
    batch = BatchRow(
        of["batch_id"], of["feed"], of["fingerprint"], of["first_stamp"], of["last_stamp"], of["rows"], of["series"]
    )
    names = ("batch_id", "rules_fingerprint", "baseline_id", "decision", "judged_at", "rules", "sercheck_version")
    judgement = Judgement(**{name: row[name] for name in names}, stored_at=row["stored_at"])
    asked = ("rule", "series", "outcome", "action", "record_id", "observed", "bound", "limit", "p_value")
    query = select(*(records.c[name] for name in asked)).where(records.c.judgement_id == judgement_id)
    found = connection.execute(query.order_by(records.c.place)).all()
    columns: dict[str, Any] = {name: [None] * len(found) for name in COLUMNS}
    columns |= {name: [line[i] for line in found] for i, name in enumerate(asked)}
    _put(connection, batch, judgement, standings(Records(columns)))


def _one_at_a_time(connection: Connection, feed: str) -> None:
    """Of two judgements of a feed the second sees what the first stored; SQLite lets one writer in anyway."""
    from sqlalchemy import text

    if connection.dialect.name == "postgresql":
        number = int.from_bytes(blake2b(f"sercheck {feed}".encode(), digest_size=8).digest(), signed=True)
        connection.execute(text("SELECT pg_advisory_xact_lock(:number)"), {"number": number})


def _received_at(connection: Connection, batch_id: str) -> str:
    from sqlalchemy import func, select

    judgements = tables().judgements
    first = select(func.min(judgements.c.stored_at)).where(judgements.c.batch_id == batch_id)
    return str(connection.execute(first).scalar())


def _row(here: _Here, place: int, standing: Standing) -> dict[str, Any]:
    return {
        **vars(standing),
        "rule": storable(standing.rule),
        "judgement_id": here.judgement.judgement_id,
        "place": place,
        "batch_id": here.batch.batch_id,
        "feed": here.feed,
        "at": here.at,
        "received_at": here.received_at,
        "stored_at": here.judgement.stored_at,
        "episode_id": None,
    }


def _touched(connection: Connection, here: _Here) -> set[str]:
    """Rules with an episode that is open, or that this batch lies in, and that its passing may end or split."""
    from sqlalchemy import or_, select

    episodes = tables().episodes
    query = (
        select(episodes.c.rule)
        .where(episodes.c.feed == here.feed, episodes.c.first_at <= here.at)
        .where(or_(episodes.c.state == "open", episodes.c.closed_at >= here.at))
    )
    return set(connection.execute(query).scalars())


def _gone(connection: Connection, here: _Here, touched: set[str], told: Sequence[Standing]) -> list[str]:
    """Rules with an open episode that neither this batch nor the newest ones before it were asked."""
    from sqlalchemy import func, select

    absent = touched - {storable(standing.rule) for standing in told}
    if not absent:
        return []
    kept = tables().standings
    times = (
        select(kept.c.at)
        .where(kept.c.feed == here.feed, kept.c.at < here.at)
        .distinct()
        .order_by(kept.c.at.desc())
        .limit(GONE)
    )
    oldest = list(connection.execute(times).scalars())
    if len(oldest) < GONE:
        return []
    last = (
        select(kept.c.rule)
        .where(kept.c.feed == here.feed, kept.c.rule.in_(sorted(absent)))
        .group_by(kept.c.rule)
        .having(func.max(kept.c.at) <= oldest[-1])
        .order_by(kept.c.rule)
    )
    return list(connection.execute(last).scalars())


def _renew(connection: Connection, here: _Here, rule: str) -> Changed | None:
    """Make the episodes around this batch anew; what it changed that is worth telling."""
    rule = storable(rule)
    rows = _around(connection, here, rule)
    steps = {_step(row): row for row in rows}
    own = next(step for step in steps if step.key == here.key())
    runs = runs_around(list(steps), own)
    change = change_by(list(steps), runs, own)
    names = _names(here, rule, runs)
    known = _forget(connection, {step.episode_id for run in runs for step in run.steps if step.episode_id})
    for run, name in zip(runs, names, strict=True):
        closing = None if run.closed_by is None else steps[run.closed_by]
        _keep(connection, name, [steps[step] for step in run.steps], closing, known.get(name, 0))
    if change is None:
        return None
    return Changed(rule, change[0], names[[run is change[1] for run in runs].index(True)])


def _around(connection: Connection, here: _Here, rule: str) -> Sequence[RowMapping]:
    """The rule's standings from the closing one before this batch to the one after it."""
    from sqlalchemy import func, select

    kept = tables().standings
    mine = (kept.c.feed == here.feed, kept.c.rule == rule, kept.c.state != "undecided")
    closing = (*mine, kept.c.state.in_(sorted(CLOSING)))
    before = connection.execute(select(func.max(kept.c.at)).where(*closing, kept.c.at < here.at)).scalar()
    after = connection.execute(select(func.min(kept.c.at)).where(*closing, kept.c.at > here.at)).scalar()
    ends: list[ColumnElement[bool]] = [] if before is None else [kept.c.at >= before]
    ends += [] if after is None else [kept.c.at <= after]
    return connection.execute(select(*kept.c).where(*mine, *ends)).mappings().all()


def _step(row: RowMapping) -> Step:
    key = (row["at"], row["received_at"], row["stored_at"], row["judgement_id"])
    return Step(key, row["state"], row["series"], row["beyond"], row["episode_id"])


def _names(here: _Here, rule: str, runs: Sequence[Run]) -> list[str]:
    """An id for each run: the first that one of its steps had, so that an episode keeps its id while it grows."""
    names: list[str] = []
    for run in runs:
        known = [step.episode_id for step in run.steps if step.episode_id and step.episode_id not in names]
        spelled = "\0".join((here.feed, rule, run.steps[0].key[3], here.judgement.judgement_id))
        names.append(known[0] if known else blake2b(spelled.encode(), digest_size=16).hexdigest())
    return names


def _forget(connection: Connection, names: set[str]) -> dict[str, int]:
    """Take the episodes out; how many series each had."""
    from sqlalchemy import delete, select

    if not names:
        return {}
    episodes = tables().episodes
    these = episodes.c.episode_id.in_(sorted(names))
    known = connection.execute(select(episodes.c.episode_id, episodes.c.series).where(these)).all()
    connection.execute(delete(episodes).where(these))
    return {str(name): int(series) for name, series in known}


def _keep(
    connection: Connection, name: str, rows: Sequence[RowMapping], closing: RowMapping | None, series: int
) -> None:
    from sqlalchemy import insert, update

    kept, episodes = tables().standings, tables().episodes
    for row in rows:
        if row["episode_id"] != name:
            own = (kept.c.judgement_id == row["judgement_id"], kept.c.place == row["place"])
            connection.execute(update(kept).where(*own).values(episode_id=name))
    worst = min(rows, key=lambda row: (row["failed"] == 0, row["p_value"] or 0.0, -(row["beyond"] or 0.0)))
    beyond = [row["beyond"] for row in rows if row["beyond"] is not None]
    if sum(row["failed"] for row in rows) <= COUNTED:
        series = _series_of(connection, name)
    values = {
        "episode_id": name,
        "feed": rows[0]["feed"],
        "rule": rows[0]["rule"],
        "state": "open" if closing is None else "closed",
        "action": "hold" if any(row["action"] == "hold" for row in rows) else "note",
        "started": _first_stamp(connection, rows[0]["batch_id"]) or rows[0]["at"],
        "first_at": rows[0]["at"],
        "last_at": rows[-1]["at"],
        "closed_at": closing and closing["at"],
        "closed_as": closing and closing["state"],
        "closed_by": closing and closing["batch_id"],
        "first_batch": rows[0]["batch_id"],
        "last_batch": rows[-1]["batch_id"],
        "batches": len({row["batch_id"] for row in rows}),
        "series": max(series, *(row["series"] for row in rows)),
        "widest": max(row["series"] for row in rows),
        "worst": worst["record_id"],
        "p_value": worst["p_value"],
        "beyond": max(beyond, default=None),
    }
    connection.execute(insert(episodes).values(values))


def _first_stamp(connection: Connection, batch_id: str) -> str | None:
    from sqlalchemy import select

    batches = tables().batches
    return connection.execute(select(batches.c.first_stamp).where(batches.c.batch_id == batch_id)).scalar()


def _series_of(connection: Connection, episode_id: str) -> int:
    """Number of different series that failed in an episode; of a rule that judges all together it is one."""
    from sqlalchemy import func, literal_column, select

    kept, records = tables().standings, tables().records
    query = (
        select(func.count(func.coalesce(records.c.series, "").distinct()))
        .join_from(kept, records, records.c.judgement_id == kept.c.judgement_id)
        .where(kept.c.episode_id == episode_id, records.c.rule == kept.c.rule)
        .where(records.c.outcome == literal_column("'fail'"))  # as text: a partial index serves only what it names
    )
    return int(connection.execute(query).scalar() or 0)
