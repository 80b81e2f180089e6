"""Where the ledger lies and how it is opened: folders, URLs, transactions, one sentence for trouble; needs ``errors``.

SQLite keeps its rollback journal rather than a write-ahead log: the ledger is then one file that also works on shares
without shared memory, in a read-only store and when copied, and what is committed survives a power cut (synchronous
EXTRA). The price, readers that wait while a large judgement is stored, is seconds.
"""

from __future__ import annotations

import os
from collections.abc import Iterator
from contextlib import contextmanager
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

from sercheck.errors import StoreError

if TYPE_CHECKING:
    from sqlalchemy import Connection, Engine

WAIT = 300.0
"""Seconds to wait for other writers: thirty large judgements (400,000 records, under 10 s each)."""
CACHE = 64 * 1024
"""KiB of pages SQLite holds before it spills a transaction to the file (a judgement of some 80,000 records)."""
FILE = "ledger.sqlite"
_SENTENCES = (  # what SQLite's message holds, what it means, what to do
    ("file is not a database", "the file is no ledger: it is no SQLite database", "Name another store."),
    ("malformed", "the ledger is damaged", "Put back a copy, or move it away and begin a new one."),
    ("disk is full", "the disk is full; nothing was stored", "Make room and repeat."),
    ("disk I/O error", "the disk gives errors; nothing was stored", "Look at the disk, make room and repeat."),
    ("readonly database", "the ledger is read-only", "Give this user the right to write to it."),
    ("unable to open", "the ledger cannot be opened", "Look at the rights of the store's folder."),
    ("locked", f"others have kept the ledger busy for {WAIT:.0f} seconds; nothing was stored", "Repeat later."),
)


class ConflictError(StoreError):
    """Another process has stored a row of the same id."""


class Database:
    """One database, opened when first used."""

    def __init__(self, url: str | None, file: Path | None) -> None:
        self._url, self.file = url, file
        self.place = "ledger" if url else str(file)
        if url:
            self._read_url(url)

    def _read_url(self, text: str) -> None:
        from sqlalchemy import make_url
        from sqlalchemy.exc import ArgumentError

        try:
            url = make_url(text)
        except ArgumentError:  # the text may hold a password, so it is not repeated
            raise StoreError("ledger", "the URL cannot be read", "such as postgresql+psycopg://host/database") from None
        self.place = f"ledger {url.render_as_string(hide_password=True)}"
        if url.drivername in {"sqlite", "sqlite+pysqlite"}:
            if url.database in (None, "", ":memory:"):
                raise StoreError(self.place, "a ledger in memory forgets", "the name of a file, such as sqlite:///x.db")
            self.file = Path(url.database or "")

    @property
    def exists(self) -> bool:
        """False only for a file that is not there yet; a server is asked when needed."""
        if self.file is None:
            return True
        try:
            self.file.lstat()
        except FileNotFoundError:
            return False
        except OSError as error:
            raise self._no_store(error) from error
        return True

    def create(self) -> None:
        """Make folder and file, for this user alone."""
        if self.file is None or self.exists:
            return
        folder = self.file.parent
        try:
            if not folder.is_dir():
                folder.mkdir(mode=0o700, parents=True, exist_ok=True)
            os.close(os.open(self.file, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o600))
        except OSError as error:
            raise self._no_store(error) from error

    def _no_store(self, error: OSError) -> StoreError:
        return StoreError(
            self.place, f"the store cannot be used: {(error.strerror or str(error)).lower()}",
            "a folder this user may write to", "Name another with --store or SERCHECK_STORE.",
        )  # fmt: skip

    @cached_property
    def engine(self) -> Engine:
        """The SQLAlchemy engine; nothing is connected yet."""
        from sqlalchemy import URL, NullPool, create_engine, event
        from sqlalchemy.exc import ArgumentError

        if self.file is None:
            try:
                return create_engine(self._url or "", poolclass=NullPool)  # nothing stays open between transactions
            except (ArgumentError, ImportError) as error:
                came = f"this kind of database cannot be opened ({error})"
                raise StoreError(self.place, came, "a driver", "Install it beside sercheck.") from error
        engine = create_engine(
            URL.create("sqlite", database=str(self.file)), poolclass=NullPool, connect_args={"timeout": WAIT}
        )
        event.listen(engine, "connect", _set_up_sqlite)
        event.listen(engine, "begin", _begin_sqlite)
        return engine

    @property
    def is_sqlite(self) -> bool:
        """The ledger is a file of our own."""
        return self.file is not None

    def has_table(self, connection: Connection, name: str) -> bool:
        """One question instead of reading all tables."""
        from sqlalchemy import text

        if self.is_sqlite:
            found = connection.execute(
                text("SELECT count(*) FROM sqlite_master WHERE type = 'table' AND name = :name"), {"name": name}
            )
            return bool(found.scalar())
        return bool(self.engine.dialect.has_table(connection, name))

    @contextmanager
    def reading(self) -> Iterator[Connection]:
        """A transaction that only looks."""
        with self._trouble(), self.engine.connect() as connection, connection.begin():
            yield connection

    @contextmanager
    def writing(self) -> Iterator[Connection]:
        """A transaction that writes: all of it or nothing. SQLite lets one writer in at a time, the others wait."""
        with self._trouble(), self.engine.connect() as connection:
            writer = connection.execution_options(writes=True)
            with writer.begin():
                yield writer

    def close(self) -> None:
        """Let go of the connections."""
        if "engine" in self.__dict__:
            self.engine.dispose()

    @contextmanager
    def _trouble(self) -> Iterator[None]:
        from sqlalchemy.exc import DBAPIError, IntegrityError, SQLAlchemyError

        try:
            yield
        except IntegrityError as error:
            raise ConflictError(self.place, "a row of the same id is there already", "ids that differ") from error
        except DBAPIError as error:
            raise self._sentence(str(error.orig)) from error
        except SQLAlchemyError as error:
            raise self._sentence(str(error)) from error

    def _sentence(self, message: str) -> StoreError:
        for part, came, todo in _SENTENCES:
            if part in message:
                return StoreError(self.place, came, todo=todo)
        lines = message.strip().splitlines() or ["no reason given"]
        return StoreError(self.place, f"the database says: {lines[0]}")


def _set_up_sqlite(connection: Any, _: object) -> None:
    connection.isolation_level = None  # transactions begin where we say, not where the driver guesses
    connection.execute("PRAGMA synchronous = EXTRA")
    connection.execute(f"PRAGMA cache_size = -{CACHE}")
    connection.execute("PRAGMA foreign_keys = ON")
    connection.execute("PRAGMA case_sensitive_like = ON")


def _begin_sqlite(connection: Connection) -> None:
    writes = connection.get_execution_options().get("writes", False)
    connection.exec_driver_sql("BEGIN IMMEDIATE" if writes else "BEGIN")
