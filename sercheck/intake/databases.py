"""Rows out of a database: by the name of a source whose address only the environment knows, or on an open connection.

Depends on ``build`` and the errors (SQLAlchemy and pyarrow where used). A source is read in a read-only transaction of
its own, an open connection in whatever transaction it is in; neither is ever written to. Only the needed columns are
asked for; names are quoted by the database's own rules, and moments are bound, never written into a query.
"""

from __future__ import annotations

import os
import re
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any
from urllib.parse import parse_qsl, quote

from sercheck.errors import BatchError
from sercheck.intake.asked import first_rows, statement_of
from sercheck.intake.build import Chunk, to_chunk
from sercheck.intake.calendar import Cadence
from sercheck.intake.layout import Layout
from sercheck.intake.paths import check_columns

if TYPE_CHECKING:
    import pyarrow as pa
    from sqlalchemy import URL, Connection, Engine

FETCHED = 50_000
"""Rows fetched at a time (ours: some megabytes)."""
SETTING = "SERCHECK_SOURCE_"
_NAMED = re.compile(r"db:(?P<name>[A-Za-z]\w*)\?(?P<asked>.*)", re.DOTALL)
_DRIVERS = {
    "sqlite3": "sqlite", "psycopg": "postgresql+psycopg", "psycopg2": "postgresql+psycopg2", "duckdb": "duckdb",
    "_duckdb": "duckdb", "pymysql": "mysql+pymysql", "MySQLdb": "mysql+mysqldb", "oracledb": "oracle+oracledb",
    "pyodbc": "mssql+pyodbc",
}  # fmt: skip
"""Drivers of plain connections and how SQLAlchemy calls them."""


@dataclass(frozen=True)
class DatabaseRows:
    """Rows of one table or query.

    Attributes:
        place: how messages and the ledger call them; without address or password.
        table: the table, with its schema in front where there is one; or None.
        query: one SELECT in place of a table; or None.
        connection: an open connection of SQLAlchemy or a driver; None reads the source called ``name``.
        name: of the source.
    """

    place: str
    table: str | None = None
    query: str | None = None
    connection: Any = field(default=None, repr=False)
    name: str = ""


def rows(connection: Any, *, table: str | None = None, query: str | None = None) -> DatabaseRows:
    """Rows for ``sercheck.gate`` that are read on an open connection, inside the transaction it is in.

    Nothing is written, committed or rolled back. What the transaction has staged and not yet committed is seen.

    Args:
        connection: of SQLAlchemy, or of a driver (sqlite3, psycopg, duckdb and others).
        table: name of a table, as ``heat`` or ``staging.heat``.
        query: one SELECT in place of a table.

    Raises:
        BatchError: neither or both of table and query.
    """
    return _checked(DatabaseRows("connection", table, query, connection))


def is_source(given: object) -> bool:
    """The text names rows of a database (``db:NAME?...``), not a file."""
    return isinstance(given, str) and given.startswith("db:") and not Path(given).exists()


def named(text: str) -> DatabaseRows:
    """The rows that ``db:NAME?table=...`` or ``db:NAME?query=...`` names.

    Raises:
        BatchError: it is written otherwise.
    """
    found = _NAMED.fullmatch(text)
    asked = parse_qsl(found["asked"].replace("+", "%2B"), keep_blank_values=True) if found else []
    if not found or len(asked) != 1 or asked[0][0] not in ("table", "query"):
        raise BatchError(
            text[:200], "this is no source", "db:NAME?table=TABLE or db:NAME?query=SELECT",
            f"The address of the database belongs into the environment variable {SETTING}<NAME>.",
        )  # fmt: skip
    kind, value = asked[0]
    place = f"db:{found['name']}?{kind}={quote(value, safe='. ,=*')[:120]}"
    return _checked(replace(DatabaseRows(place, name=found["name"]), **{kind: value}))


def _checked(asked: DatabaseRows) -> DatabaseRows:
    if (asked.table is None) == (asked.query is None):
        raise BatchError(asked.place, "both or neither of table and query", "one of the two")
    if not (asked.table or asked.query or "").strip():
        raise BatchError(asked.place, "an empty name", "the name of a table, or one SELECT")
    if asked.query is not None:
        query = asked.query.strip().rstrip(";").strip()
        if ";" in query or not re.match(r"(?i)(select|with|values|from)\b", query):
            raise BatchError(asked.place, "the query is not one SELECT", "one SELECT without ';'")
        return replace(asked, query=query)
    return asked


def read_rows(
    asked: DatabaseRows, layout: Layout, cadence: Cadence, between: tuple[int, int] | None = None
) -> list[Chunk]:
    """All rows, or those of a window.

    Args:
        asked: the table or query.
        layout: the feed's columns.
        cadence: the feed's cadence and clock.
        between: nanoseconds UTC from and to (exclusive); the database is asked for these rows, and for those of the
            days around them where a stamp has no offset. Where it cannot be asked for a window, all rows come.

    Raises:
        BatchError: the database cannot be reached or asked, lacks a column or has no rows there.
    """
    with _told(asked), _reader(asked) as reader:
        statement = statement_of(asked.table, asked.query, layout)
        there = reader.columns(statement.nothing())
        check_columns(there, layout, asked.place)
        if between is not None:
            statement = statement.between(*between, reader.first(statement.stamp()), cadence)
        blocks = reader.blocks(statement.select)
        chunks = [to_chunk(_columns(block, layout), layout, cadence, asked.place) for block in blocks]
    if not chunks and between is None:
        raise BatchError(asked.place, "it has columns and no rows", "at least one row")
    return chunks or [_no_rows(layout, cadence)]


def some_rows(asked: DatabaseRows, rows: int) -> dict[str, pa.Array]:
    """Every column of the first rows, for a look at a feed whose columns nobody has named yet.

    Raises:
        BatchError: the database cannot be reached or asked.
    """
    with _told(asked), _reader(asked) as reader:
        select = first_rows(asked.table, asked.query, rows)
        names = reader.columns(select.limit(0))
        cells = [row for block in reader.blocks(select) for row in block]
        found = zip(names, zip(*cells, strict=True), strict=True) if cells else ()
        return {name: _column(list(column), stamps=True) for name, column in found}


class _Reader:
    """Asks one connection of SQLAlchemy."""

    def __init__(self, connection: Connection) -> None:
        self._connection = connection

    def columns(self, select: Any) -> list[str]:
        return list(self._connection.execute(select).keys())

    def first(self, select: Any) -> Any:
        return self._connection.execute(select).scalar()

    def blocks(self, select: Any) -> Iterator[list[Any]]:
        options = {"stream_results": True, "yield_per": FETCHED}
        result = self._connection.execute(select, execution_options=options)
        yield from ([tuple(row) for row in part] for part in result.partitions() if part)


class _PlainReader(_Reader):
    """Asks a driver's own connection, in SQL that SQLAlchemy writes for it."""

    def __init__(self, connection: Any, dialect: Any) -> None:
        self._plain, self._dialect = connection, dialect

    def _asked(self, select: Any) -> Any:
        compiled = select.compile(dialect=self._dialect)
        cursor = self._plain.cursor()
        values = compiled.params
        if compiled.positional:
            values = tuple(values[name] for name in compiled.positiontup)
        cursor.execute(str(compiled), values) if values else cursor.execute(str(compiled).replace("%%", "%"))
        return cursor

    def columns(self, select: Any) -> list[str]:
        return [part[0] for part in self._asked(select).description]

    def first(self, select: Any) -> Any:
        row = self._asked(select).fetchone()
        return None if row is None else row[0]

    def blocks(self, select: Any) -> Iterator[list[Any]]:
        cursor = self._asked(select)
        while block := cursor.fetchmany(FETCHED):
            yield block


@contextmanager
def _reader(asked: DatabaseRows) -> Iterator[_Reader]:
    from sqlalchemy import Connection

    if asked.connection is not None:
        if isinstance(asked.connection, Connection):
            yield _Reader(asked.connection)
        else:
            yield _PlainReader(asked.connection, _dialect_of(asked.connection))
        return
    engine = _engine(asked)
    try:
        with engine.connect() as connection:
            if engine.dialect.name == "postgresql":
                connection.execution_options(isolation_level="REPEATABLE READ", postgresql_readonly=True)
            yield _Reader(connection)  # closing rolls back
    finally:
        engine.dispose()


def _dialect_of(connection: Any) -> Any:
    from sqlalchemy import make_url

    driver = type(connection).__module__.partition(".")[0]
    if driver not in _DRIVERS:
        came = f"a {driver}.{type(connection).__name__}"
        raise BatchError("connection", came, "an open connection of SQLAlchemy or of a database driver")
    return make_url(f"{_DRIVERS[driver]}://").get_dialect()()


def _address(asked: DatabaseRows) -> URL:
    from sqlalchemy import make_url
    from sqlalchemy.exc import ArgumentError

    setting = SETTING + asked.name.upper()
    text = os.environ.get(setting, "")
    if not text:
        todo = "It holds the database's address, such as postgresql+psycopg://user@host/database."
        raise BatchError(asked.place, f"the environment variable {setting} is not set", "an address", todo)
    try:
        return make_url(text)
    except (ArgumentError, ValueError):  # the text may hold a password, so it is not repeated
        raise BatchError(
            asked.place, f"the address in {setting} cannot be read", "such as postgresql+psycopg://user@host/database"
        ) from None  # fmt: skip


def _engine(asked: DatabaseRows) -> Engine:
    from sqlalchemy import NullPool, create_engine
    from sqlalchemy.exc import ArgumentError

    url = _address(asked)
    kind, more = url.get_backend_name(), {}
    if kind in ("sqlite", "duckdb"):  # both would make a file that is not there
        file = url.database or ""
        if not file or file == ":memory:" or ("uri" not in url.query and not Path(file).is_file()):
            raise BatchError(asked.place, f"{SETTING}{asked.name.upper()} names no file that is there", "a database")
    if kind == "sqlite" and "uri" not in url.query:
        file = "file:" + quote(str(Path(url.database or "").absolute()))
        url = url.set(database=file, query={**url.query, "mode": "ro", "uri": "true"})
    elif kind == "duckdb":
        more = {"connect_args": {"read_only": True}}
    elif kind == "postgresql" and url.drivername == "postgresql":
        url = url.set(drivername="postgresql+psycopg")
    try:
        return create_engine(url, poolclass=NullPool, hide_parameters=True, **more)
    except (ArgumentError, ImportError) as error:
        kind = re.sub(r"\W", "", kind)[:30]
        todo = {"duckdb": "Install 'sercheck[duckdb]'.", "postgresql": "Install 'sercheck[postgres]'."}.get(kind)
        came = f"databases of the kind {kind} cannot be opened here"
        raise BatchError(asked.place, came, "its driver", todo or "Install its driver beside sercheck.") from error


@contextmanager
def _told(asked: DatabaseRows) -> Iterator[None]:
    """One sentence for whatever a database says, without its address."""
    import pyarrow as pa
    from sqlalchemy.exc import SQLAlchemyError

    trouble: tuple[type[Exception], ...] = (SQLAlchemyError, pa.ArrowException)
    if asked.connection is not None:
        trouble = (*trouble, *_errors_of(asked.connection))
    try:
        yield
    except trouble as error:
        message = str(getattr(error, "orig", None) or error)
    else:
        return
    raise BatchError(asked.place, f"the database says: {_without_address(message, asked)}", "rows that can be read")


def _errors_of(connection: Any) -> tuple[type[Exception], ...]:
    import sys

    module = sys.modules.get(type(connection).__module__.partition(".")[0].lstrip("_"))
    error = getattr(module, "Error", None)
    return (error,) if isinstance(error, type) and issubclass(error, Exception) else ()


def _without_address(message: str, asked: DatabaseRows) -> str:
    said = " ".join(message.split())
    if asked.connection is None:
        text = os.environ.get(SETTING + asked.name.upper(), "")
        url = _address(asked)
        parts = [text, url.password, url.username, url.host, url.database, *map(str, url.query.values())]
        for part in sorted(filter(None, map(str, filter(None, parts))), key=len, reverse=True):
            said = said.replace(part, "…")
    return said[:300]


def _no_rows(layout: Layout, cadence: Cadence) -> Chunk:
    import pyarrow as pa

    return to_chunk(dict.fromkeys(layout.needed, pa.array([], pa.string())), layout, cadence, "")


def _columns(block: list[Any], layout: Layout) -> dict[str, pa.Array]:
    return {
        name: _column(list(cells), stamps=name == layout.time)
        for name, cells in zip(layout.needed, zip(*block, strict=True), strict=True)
    }  # fmt: skip


def _column(cells: list[Any], *, stamps: bool) -> pa.Array:
    """Cells as the driver gives them; a mixed column is what its texts say."""
    from datetime import datetime

    import pyarrow as pa

    try:
        if stamps and any(isinstance(cell, datetime) and cell.tzinfo for cell in cells):
            return pa.array(cells, pa.timestamp("us", "UTC"))
        return pa.array(cells)
    except (pa.ArrowException, OverflowError, UnicodeEncodeError):
        texts = [None if cell is None else str(cell).encode("utf-8", "backslashreplace").decode() for cell in cells]
        return pa.array(texts, pa.string())
