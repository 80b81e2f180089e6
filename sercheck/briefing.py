"""The brief of a batch that is stored, or that was judged just now; depends on ``brief`` and the store."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

from sercheck.brief.case import Case, case_of, newest
from sercheck.brief.digest import digest
from sercheck.brief.review import MOST_FEEDS, Review, review
from sercheck.brief.view import Brief
from sercheck.brief.words import moment, zone_of
from sercheck.errors import UsageError
from sercheck.store.ledger import UnknownIdError, open_ledger
from sercheck.store.rows import BatchRow, JudgedBatch, Judgement

if TYPE_CHECKING:
    from sercheck.verdict import Verdict


def brief_of(batch_id: str | None, store: str | Path | None = None, ledger: str | None = None) -> Brief:
    """The brief of a batch of the ledger.

    Args:
        batch_id: id of the batch or its beginning; None is the newest batch that is held and not settled, else the
            newest.
        store: the store's folder, or the ledger's URL.
        ledger: SQLAlchemy URL of the ledger, where it is not in the store.

    Raises:
        UsageError: there is no such batch.
        StoreError: the ledger cannot be read.
    """
    with open_ledger(None if store is None else str(store), ledger) as kept_in:
        batch = kept_in.batch(batch_id) if batch_id is not None else newest(kept_in)
        if batch is None:
            raise UsageError(kept_in.place, "no batch was judged yet", "a ledger with batches", "Run `sercheck gate`.")
        return digest(case_of(kept_in, batch, _named(store)))


def brief_of_verdict(verdict: Verdict, store: str | Path | None = None) -> Brief:
    """The brief of a batch that was judged just now, whether or not it was kept."""
    with open_ledger(None if store is None else str(store)) as kept_in:
        try:
            batch = kept_in.batch(verdict.batch_id)
        except UnknownIdError:
            return digest(_unkept(verdict))
        case = case_of(kept_in, _this_judgement(batch, verdict), _named(store))
        return digest(replace(case, notes=verdict.notes, sketches=case.sketches or verdict.sketches))


def review_of(since: str, store: str | Path | None = None) -> Review:
    """The digest of all feeds since a time.

    Args:
        since: UTC, RFC 3339; batches whose newest row is then or later count.
        store: the store's folder, or the ledger's URL.
    """
    from sercheck.store.digest import digest as numbers

    with open_ledger(None if store is None else str(store)) as kept_in:
        told = numbers(kept_in, since)
        rules = {each.feed: kept_in.batch(each.last_batch).last.rules for each in told.feeds[:MOST_FEEDS]}
    return review(told, rules, f"{moment(since, zone_of('UTC'))} UTC")


def _this_judgement(batch: JudgedBatch, verdict: Verdict) -> JudgedBatch:
    """The batch as judged by the verdict's rules and baseline: another may have been stored after it."""
    rules, baseline = (set(verdict.table[name][:1].tolist()) for name in ("rules_fingerprint", "baseline_id"))
    mine = [each for each in batch.judgements if {each.rules_fingerprint} == rules and {each.baseline_id} == baseline]
    return replace(batch, judgements=tuple(mine)) if mine else batch


def _unkept(verdict: Verdict) -> Case:
    table, facts = verdict.table, verdict.facts
    first = next(table.take([0]).rows())
    undecided = {each["rule"]: each["records"] for each in verdict.undecided}
    return Case(
        BatchRow(
            verdict.batch_id, verdict.feed, first["batch_fingerprint"], facts.first, facts.last, facts.rows,
            facts.series, verdict.paths,
        ),
        Judgement(
            verdict.batch_id, first["rules_fingerprint"], first["baseline_id"], verdict.decision, first["judged_at"],
            verdict.rules, first["sercheck_version"], counts=verdict.counts,
        ),
        (), table, undecided, verdict.sketches, verdict.notes,
    )  # fmt: skip


def _named(store: str | Path | None) -> str:
    """The store's folder, to be named in commands; never a URL, which may hold a password."""
    return "" if store is None or "://" in str(store) else str(store)
