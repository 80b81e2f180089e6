"""Filters as SQL; depends on ``tables`` and ``rows``."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from sercheck.record import COLUMNS
from sercheck.store.rows import Filters
from sercheck.store.tables import BATCH_COLUMNS, tables

if TYPE_CHECKING:
    from sqlalchemy import ColumnElement, Select

COUNT_OF = {"pass": "passed", "fail": "failed", "undecided": "undecided"}
"""The column of ``judgements`` that counts each outcome."""


def batches_where(wanted: Filters) -> Select[Any]:
    """Ids of batches, the newest first. The decision and outcomes are those of the judgement stored last."""
    from sqlalchemy import func, select

    batches, judgements = tables()[:2]
    later = judgements.alias("later")
    last = (
        select(func.max(later.c.stored_at)).where(later.c.batch_id == batches.c.batch_id).correlate(batches)
    ).scalar_subquery()  # fmt: skip
    query = (
        select(batches.c.batch_id)
        .join_from(batches, judgements, judgements.c.batch_id == batches.c.batch_id)
        .where(judgements.c.stored_at == last, *_of_batch(wanted))
        .order_by(_time().desc(), judgements.c.stored_at.desc(), batches.c.batch_id)
    )
    if wanted.outcome:
        query = query.where(judgements.c[COUNT_OF[wanted.outcome]] > 0)
    if wanted.rule or wanted.series:
        query = query.where(_has_record(wanted))
    return query if wanted.limit is None else query.limit(wanted.limit)


def records_where(wanted: Filters) -> Select[Any]:
    """Records, those of the newest batch first, each judgement's in its own order."""
    from sqlalchemy import select

    batches, judgements, records = tables()[:3]
    query = (
        select(*(records.c[name] for name in COLUMNS))
        .join_from(records, judgements, records.c.judgement_id == judgements.c.judgement_id)
        .join(batches, judgements.c.batch_id == batches.c.batch_id)
        .where(*_of_batch(wanted), *_of_record(wanted))
        .order_by(_time().desc(), judgements.c.stored_at.desc(), judgements.c.judgement_id, records.c.place)
    )
    return query if wanted.limit is None else query.limit(wanted.limit)


def judgements_of(batch_ids: list[str]) -> Select[Any]:
    """Batches with all their judgements, the oldest first."""
    from sqlalchemy import select

    batches, judgements = tables()[:2]
    return (
        select(*(batches.c[name].label(f"of_batch_{name}") for name in BATCH_COLUMNS), *judgements.c)
        .join_from(batches, judgements, judgements.c.batch_id == batches.c.batch_id)
        .where(batches.c.batch_id.in_(batch_ids))
        .order_by(judgements.c.stored_at, judgements.c.judgement_id)
    )


def rules_with(judgement_ids: list[str], outcome: str) -> Select[Any]:
    """Judgement, rule and number of its records of this outcome."""
    from sqlalchemy import func, select

    records = tables().records
    return (
        select(records.c.judgement_id, records.c.rule, func.count())
        .where(records.c.judgement_id.in_(judgement_ids), records.c.outcome == outcome)
        .group_by(records.c.judgement_id, records.c.rule)
    )


def begins_with(column: ColumnElement[Any], start: str) -> ColumnElement[bool]:
    """The text starts so, letter by letter; the range lets an index help."""
    from sqlalchemy import and_, func

    return and_(column >= start, func.substr(column, 1, len(start)) == start)


def _time() -> ColumnElement[str]:
    from sqlalchemy import func

    batches, judgements = tables()[:2]
    return func.coalesce(batches.c.last_stamp, judgements.c.judged_at)


def _of_batch(wanted: Filters) -> list[ColumnElement[bool]]:
    batches, judgements = tables()[:2]
    conditions = []
    if wanted.feed:
        conditions.append(named(batches.c.feed, wanted.feed))
    if wanted.since:
        conditions.append(_time() >= wanted.since)
    if wanted.until:
        conditions.append(_time() <= wanted.until)
    if wanted.decision:
        conditions.append(judgements.c.decision == wanted.decision)
    if wanted.batch_id:
        conditions.append(batches.c.batch_id == wanted.batch_id)
    if wanted.judgement_id:
        conditions.append(judgements.c.judgement_id == wanted.judgement_id)
    return conditions


def _of_record(wanted: Filters) -> list[ColumnElement[bool]]:
    records = tables().records
    conditions = []
    if wanted.outcome:
        conditions.append(records.c.outcome == wanted.outcome)
    if wanted.rule:
        conditions.append(named(records.c.rule, wanted.rule))
    if wanted.series:
        conditions.append(named(records.c.series, wanted.series))
    return conditions


def _has_record(wanted: Filters) -> ColumnElement[bool]:
    from sqlalchemy import select

    judgements, records = tables()[1:3]
    mine = records.c.judgement_id == judgements.c.judgement_id
    return select(records.c.record_id).where(mine, *_of_record(wanted)).correlate(judgements).exists()


def named(column: ColumnElement[Any], pattern: str) -> ColumnElement[bool]:
    """Equal to the text, or like the pattern where it holds ``*`` or ``?``."""
    if not set("*?") & set(pattern):
        return column == pattern
    escaped = pattern.replace("\\", "\\\\").replace("%", r"\%").replace("_", r"\_")
    like = escaped.replace("*", "%").replace("?", "_")
    return (column == pattern) | column.like(like, escape="\\")
