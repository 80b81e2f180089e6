"""What a database is asked: a table or a query, the needed columns, and a window of time; depends on ``layout``.

SQLAlchemy, imported where it is used, quotes names by the database's own rules and binds values.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from datetime import UTC, date, datetime, timedelta
from decimal import Decimal
from typing import TYPE_CHECKING, Any

from sercheck.intake.calendar import Cadence
from sercheck.intake.layout import Layout

if TYPE_CHECKING:
    from sqlalchemy import ColumnElement, Select

SLACK = timedelta(days=2)
"""What a window is widened by where stamps have no offset or only a day: more than any two clocks differ (26 hours)."""
_UNITS = (1, 1_000, 1_000_000, 1_000_000_000)
"""Epoch numbers are seconds, milliseconds, microseconds or nanoseconds."""
_BEYOND = 2**63 - 1
"""No stamp is as late; where a column may mix types (SQLite), a text is larger than any number and comes along."""
_FIRST, _LAST = datetime(1678, 1, 1, tzinfo=UTC), datetime(2262, 1, 1, tzinfo=UTC)


@dataclass(frozen=True)
class Statement:
    """A SELECT of the needed columns; ``time`` is its column of stamps."""

    select: Select[Any]
    time: ColumnElement[Any]

    def nothing(self) -> Select[Any]:
        """All columns that are there, and no row."""
        from sqlalchemy import false, literal_column, select

        return select(literal_column("*")).select_from(*self.select.get_final_froms()).where(false())

    def stamp(self) -> Select[Any]:
        """One stamp, to see of what type they are."""
        return self.select.with_only_columns(self.time).where(self.time.is_not(None)).limit(1)

    def between(self, first: int, before: int, example: object, cadence: Cadence) -> Statement:
        """Only rows that can lie in a window (nanoseconds UTC); more where the database cannot tell.

        Args:
            first: its first moment.
            before: its end, exclusive.
            example: a stamp as the database gives it.
            cadence: the feed's cadence.
        """
        low, high = _moment(first), _moment(-(-before // 1000) * 1000)
        condition = self._inside(low, high, example, irregular=cadence.irregular)
        return self if condition is None else replace(self, select=self.select.where(condition))

    def _inside(self, low: datetime, high: datetime, example: object, *, irregular: bool) -> ColumnElement[bool] | None:
        from sqlalchemy import and_, not_, or_

        time = self.time
        if isinstance(example, datetime) and example.tzinfo is not None:
            return and_(time >= _bound(low, example), time < _bound(high, example))
        wide = max(low - SLACK, _FIRST), min(high + SLACK, _LAST)
        if isinstance(example, datetime):
            naive = [moment.replace(tzinfo=None) for moment in wide]
            return and_(time >= _bound(naive[0], example), time < _bound(naive[1], example))
        if isinstance(example, date):
            return and_(time >= _bound(wide[0].date(), example), time <= _bound(wide[1].date(), example))
        if isinstance(example, str):  # dates in front compare as text; what is written otherwise comes along
            texts = [moment.strftime("%Y-%m-%d") for moment in wide]
            return or_(and_(time >= _bound(texts[0], ""), time < _bound(texts[1], "")), not_(time.like("____-__-__%")))
        if isinstance(example, int | float | Decimal) and not isinstance(example, bool) and not irregular:
            seconds = [int(moment.timestamp()) for moment in wide]
            inside = [and_(time >= seconds[0] * unit, time < seconds[1] * unit) for unit in _UNITS]
            return or_(*inside, time >= _BEYOND)
        return None


def statement_of(table: str | None, query: str | None, layout: Layout) -> Statement:
    """Ask a table (its schema before a point) or a query for the needed columns, spelled as the database has them."""
    from sqlalchemy import column, quoted_name, select

    source = _source(table, query, [column(quoted_name(name, quote=True)) for name in layout.needed])
    wanted = [source.c[name] for name in layout.needed]
    return Statement(select(*wanted), source.c[layout.time])


def first_rows(table: str | None, query: str | None, rows: int) -> Select[Any]:
    """All columns of the first rows of a table or a query."""
    from sqlalchemy import literal_column, select

    return select(literal_column("*")).select_from(_source(table, query, [])).limit(rows)


def _source(table: str | None, query: str | None, columns: list[Any]) -> Any:
    from sqlalchemy import quoted_name, text
    from sqlalchemy import table as named

    if table is not None:
        schema, _, name = table.rpartition(".")
        owner = quoted_name(schema, quote=True) if schema else None
        return named(quoted_name(name, quote=True), *columns, schema=owner)
    escaped = (query or "").replace(":", r"\:")  # a colon is the query's own, not a value of ours
    return text(escaped).columns(*columns).subquery("asked")


def _moment(nanoseconds: int) -> datetime:
    moment = datetime(1970, 1, 1, tzinfo=UTC) + timedelta(microseconds=nanoseconds // 1000)
    return min(max(moment, _FIRST), _LAST)


def _bound(value: Any, example: Any) -> Any:
    """A value to be sent beside the query, of the example's type."""
    from sqlalchemy import Date, DateTime, String, literal

    kind = DateTime(timezone=bool(getattr(example, "tzinfo", None))) if isinstance(example, datetime) else None
    return literal(value, kind or (Date() if isinstance(example, date) else String()))
