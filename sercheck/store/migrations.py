"""How a ledger's tables come about: named steps, each in one transaction with the record of it; depends on ``errors``.

A step never changes once released: what it makes is written out here and shares nothing with today's queries.
A new step goes to the end of ``MIGRATIONS``.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import TYPE_CHECKING

from sercheck.errors import StoreError

if TYPE_CHECKING:
    from sqlalchemy import Connection

    from sercheck.store.database import Database


@dataclass(frozen=True)
class Migration:
    """One step: its name, which is recorded, and what it does."""

    name: str
    apply: Callable[[Connection], None]


def _first_tables(connection: Connection) -> None:
    from sqlalchemy import BigInteger, Column, Double, ForeignKey, Index, Integer, MetaData, String, Table, Text

    meta = MetaData()
    Table(
        "batches",
        meta,
        Column("batch_id", String(255), primary_key=True),
        *(Column(name, Text, nullable=False) for name in ("feed", "fingerprint")),
        *(Column(name, Text) for name in ("first_stamp", "last_stamp")),
        *(Column(name, BigInteger, nullable=False) for name in ("rows", "series")),
        Column("received", Text, nullable=False),
    )
    Table(
        "judgements",
        meta,
        Column("judgement_id", String(64), primary_key=True),
        Column("batch_id", String(255), ForeignKey("batches.batch_id"), nullable=False, index=True),
        Column("rules_fingerprint", Text, nullable=False),
        Column("baseline_id", Text),
        *(Column(name, Text, nullable=False) for name in ("decision", "judged_at", "stored_at")),
        *(Column(name, Integer, nullable=False) for name in ("passed", "failed", "undecided")),
        *(Column(name, Text, nullable=False) for name in ("rules", "sercheck_version")),
    )
    texts = (
        "feed", "batch_id", "batch_fingerprint", "judged_at", "rule", "measure", "column", "series", "season", "after",
        "window_start", "window_end", "method", "assumes", "outcome", "reason", "action", "likely_cause",
        "rules_fingerprint", "baseline_id", "sercheck_version",
    )  # fmt: skip
    numbers = (
        "n_eff", "observed", "bound", "standard_error", "limit", "naive_limit", "detectable", "p_value", "false_alarm",
        "false_alarm_used", "cause_support",
    )  # fmt: skip
    Table(
        "records",
        meta,
        Column("record_id", String(64), primary_key=True),
        Column("judgement_id", String(64), ForeignKey("judgements.judgement_id"), nullable=False),
        Column("place", BigInteger, nullable=False),
        *(Column(name, Text) for name in texts),
        *(Column(name, BigInteger) for name in ("lag", "n", "n_missing")),
        *(Column(name, Double) for name in numbers),
        Index("records_of_judgement", "judgement_id", "place"),
    )
    meta.create_all(connection, checkfirst=False)


def _memory(connection: Connection) -> None:
    from sqlalchemy import BigInteger, Column, ForeignKey, Index, LargeBinary, MetaData, String, Table, Text, text

    meta = MetaData()
    Table("batches", meta, Column("batch_id", String(255), primary_key=True))  # there already; named for the key
    baselines = Table(
        "baselines",
        meta,
        Column("baseline_id", String(64), primary_key=True),
        *(Column(name, Text, nullable=False) for name in ("feed", "rules_fingerprint", "learned_at")),
        *(Column(name, Text, nullable=False) for name in ("first_stamp", "last_stamp", "fingerprint")),
        Column("series", BigInteger, nullable=False),
        Column("facts", LargeBinary, nullable=False),
    )
    settlements = Table(
        "settlements",
        meta,
        Column("settlement_id", String(64), primary_key=True),
        Column("batch_id", String(255), ForeignKey("batches.batch_id"), nullable=False),
        *(Column(name, Text, nullable=False) for name in ("feed", "what", "settled_by", "because", "settled_at")),
        Column("relearn_from", Text),
        Index("settlements_of_batch", "batch_id"),
    )
    meta.create_all(connection, [baselines, settlements], checkfirst=False)
    if connection.dialect.name in ("sqlite", "postgresql"):  # others want a length for an index on text
        connection.execute(text("CREATE INDEX settlements_of_feed ON settlements (feed)"))
        connection.execute(text("CREATE INDEX baselines_of_feed ON baselines (feed)"))


def _sketches(connection: Connection) -> None:
    from sqlalchemy import Column, ForeignKey, MetaData, String, Table, Text

    meta = MetaData()
    Table("judgements", meta, Column("judgement_id", String(64), primary_key=True))  # there already; named for the key
    sketches = Table(
        "sketches",
        meta,
        Column("judgement_id", String(64), ForeignKey("judgements.judgement_id"), primary_key=True),
        Column("sketches", Text, nullable=False),
    )
    meta.create_all(connection, [sketches], checkfirst=False)


def _episodes(connection: Connection) -> None:
    from sqlalchemy import BigInteger, Column, Double, ForeignKey, Index, MetaData, String, Table, Text, text

    meta = MetaData()
    Table("judgements", meta, Column("judgement_id", String(64), primary_key=True))  # there already; named for the key
    standings = Table(
        "standings",
        meta,
        Column("judgement_id", String(64), ForeignKey("judgements.judgement_id"), primary_key=True),
        Column("place", BigInteger, primary_key=True, autoincrement=False),
        Column("batch_id", String(255), nullable=False),
        *(Column(name, Text, nullable=False) for name in ("feed", "rule", "at", "received_at", "stored_at", "state")),
        *(Column(name, BigInteger, nullable=False) for name in ("passed", "failed", "undecided", "series")),
        *(Column(name, Text) for name in ("action", "record_id")),
        *(Column(name, Double) for name in ("p_value", "beyond")),
        Column("episode_id", String(64)),
        Index("standings_of_batch", "batch_id"),
        Index("standings_of_episode", "episode_id"),
    )
    episodes = Table(
        "episodes",
        meta,
        Column("episode_id", String(64), primary_key=True),
        *(Column(name, Text, nullable=False) for name in ("feed", "rule", "state")),
        Column("action", Text),
        *(Column(name, Text, nullable=False) for name in ("started", "first_at", "last_at")),
        *(Column(name, Text) for name in ("closed_at", "closed_as", "closed_by")),
        *(Column(name, Text, nullable=False) for name in ("first_batch", "last_batch")),
        *(Column(name, BigInteger, nullable=False) for name in ("batches", "series", "widest")),
        Column("worst", Text),
        *(Column(name, Double) for name in ("p_value", "beyond")),
    )
    messages = Table(
        "messages",
        meta,
        Column("message_id", String(64), primary_key=True),
        Column("judgement_id", String(64), ForeignKey("judgements.judgement_id"), nullable=False),
        *(Column(name, Text, nullable=False) for name in ("batch_id", "feed", "desk", "changes", "made_at")),
        Column("state", String(32), nullable=False),
        Column("attempts", BigInteger, nullable=False),
        *(Column(name, Text) for name in ("next_at", "claimed_by", "claimed_at", "trouble", "sent_at")),
        Index("messages_by_state", "state"),
    )
    due = Table("standings_due", meta, Column("judgement_id", String(64), primary_key=True))
    meta.create_all(connection, [standings, episodes, messages, due], checkfirst=False)
    connection.execute(text("INSERT INTO standings_due SELECT judgement_id FROM judgements"))
    if connection.dialect.name in ("sqlite", "postgresql"):  # others want a length, or know no partial index
        connection.execute(text("CREATE INDEX standings_of_feed ON standings (feed, at)"))
        connection.execute(text("CREATE INDEX episodes_of_feed ON episodes (feed)"))
        failed = "CREATE INDEX records_that_failed ON records (judgement_id) WHERE outcome = 'fail'"
        connection.execute(text(failed))
        how = "(series)" if connection.dialect.name == "sqlite" else "USING hash (series)"  # its trees take short keys
        connection.execute(text(f"CREATE INDEX records_of_series ON records {how}"))


MIGRATIONS: tuple[Migration, ...] = (
    Migration("001 batches, judgements and records", _first_tables),
    Migration("002 baselines and settlements", _memory),
    Migration("003 sketches", _sketches),
    Migration("004 episodes and messages", _episodes),
)


def migrate(database: Database) -> None:
    """Bring the tables up to date; one look when they are already.

    Raises:
        StoreError: a newer sercheck has changed the ledger, or it cannot be written.
    """
    for step in _missing(database, _recorded(database)):
        try:
            _take(database, step)
        except StoreError:
            if step in _missing(database, _recorded(database)):
                raise  # else another process took the step meanwhile


def _take(database: Database, step: Migration) -> None:
    with database.writing() as connection:
        recorded = _read(connection) if database.has_table(connection, "migrations") else None
        if step not in _missing(database, recorded):
            return
        if recorded is None:
            _make_list(connection)
        step.apply(connection)
        _record(connection, step)


def _missing(database: Database, recorded: list[str] | None) -> tuple[Migration, ...]:
    known = [step.name for step in MIGRATIONS]
    have = recorded or []
    if have != known[: len(have)]:
        strange = next(name for name in have if name not in known[: len(have)])
        raise StoreError(
            database.place, f"the ledger was changed by a newer sercheck (step {strange!r} is not known here)",
            f"a ledger no newer than step {known[-1]!r}", "Install the newer sercheck.",
        )  # fmt: skip
    return MIGRATIONS[len(have) :]


def _recorded(database: Database) -> list[str] | None:
    with database.reading() as connection:
        return _read(connection) if database.has_table(connection, "migrations") else None


def _read(connection: Connection) -> list[str]:
    from sqlalchemy import Text, column, select, table

    name = column("name", Text())
    return list(connection.execute(select(name).select_from(table("migrations", name)).order_by(name)).scalars())


def _make_list(connection: Connection) -> None:
    from sqlalchemy import Column, MetaData, String, Table, Text

    steps = Table("migrations", MetaData(), Column("name", String(255), primary_key=True), Column("applied_at", Text))
    steps.create(connection, checkfirst=False)


def _record(connection: Connection, step: Migration) -> None:
    from sqlalchemy import column, insert, table

    steps = table("migrations", column("name"), column("applied_at"))
    now = datetime.now(UTC).strftime("%Y-%m-%dT%H:%M:%SZ")
    connection.execute(insert(steps).values(name=step.name, applied_at=now))
