"""Batches and records as pages for people; depends on ``table`` and ``say``."""

from __future__ import annotations

from collections.abc import Iterable
from typing import TYPE_CHECKING, Any

from sercheck.cli.say import folded, plain
from sercheck.cli.table import Head, number, table

if TYPE_CHECKING:
    from sercheck.record import Records
    from sercheck.store.episodes import Episode
    from sercheck.store.outbox import Message
    from sercheck.store.rows import JudgedBatch, Judgement

TEXT_LIMIT = 50
"""Lines of a list shown to people when they name no number (about a screen)."""
SHORT_BATCH, SHORT_RECORD = 12, 8
"""Letters of a fingerprint or id in a list: among a million batches two alike have a chance below 1 in 500 (birthday
problem, 48 bits); of record ids 8 letters tell those of one page apart, and ``show`` says when they do not do."""
LABEL = 17
"""Width of the names on a page: the longest, ``batch_fingerprint``."""
REASON = 2_000
"""Letters of one fact shown to people."""


def batch_table(found: Iterable[JudgedBatch]) -> str:
    """One line a batch; the beginning of its fingerprint stands for it, as whole ids leave no room."""
    heads = (
        Head("batch"), Head("feed", least=8), Head("newest row (UTC)"), Head("decision"), Head("pass", right=True),
        Head("fail", right=True), Head("undecided", right=True), Head("rows", right=True), Head("series", right=True),
    )  # fmt: skip
    return table(heads, [_batch_line(each) for each in found])


def _batch_line(each: JudgedBatch) -> list[object]:
    batch, last = each.batch, each.last
    counts = [last.counts[outcome] for outcome in ("pass", "fail", "undecided")]
    decision = last.decision if each.settled is None else f"{last.decision}, then {each.settled.what}"
    names = [batch.fingerprint[:SHORT_BATCH], batch.feed, minute(batch.last_stamp)]
    return [*names, decision, *counts, batch.rows, batch.series]


def minute(stamp: str | None) -> str | None:
    """A stamp to the minute."""
    return stamp and stamp[: len("2026-01-12T23:00")].replace("T", " ")


def record_table(found: Records) -> str:
    """One line a record, without what only ``show`` has room for; the batch is named where there are several."""
    heads = [
        Head("outcome"), Head("rule", least=12), Head("column", least=6), Head("series", least=6),
        Head("lag", right=True), Head("observed", right=True), Head("limit", right=True), Head("p", right=True),
        Head("record"),
    ]  # fmt: skip
    lines = [_record_line(row) for row in found.rows()]
    if len(set(found["batch_id"].tolist())) > 1:
        heads.append(Head("batch"))
        for line, fingerprint in zip(lines, found["batch_fingerprint"].tolist(), strict=True):
            line.append(str(fingerprint)[:SHORT_BATCH])
    return table(heads, lines)


def _record_line(row: dict[str, Any]) -> list[object]:
    numbers = [number(row["observed"]), number(row["limit"]), number(row["p_value"], 2)]
    names = [row[name] for name in ("outcome", "rule", "column", "series", "lag")]
    return [*names, *numbers, str(row["record_id"])[:SHORT_RECORD]]


def batch_page(each: JudgedBatch, found: Records, episodes: Iterable[Episode], messages: Iterable[Message]) -> str:
    """Everything about one batch; ``found`` are the records that failed or were undecided, as many as there is room."""
    batch = each.batch
    stretch = f", {batch.first_stamp} to {batch.last_stamp}" if batch.first_stamp else ""
    lines = [
        fact("batch", batch.batch_id),
        fact("feed", batch.feed),
        fact("rows", f"{batch.rows} of {batch.series} series{stretch}"),
        fact("fingerprint", batch.fingerprint),
        *(fact("received", path) for path in batch.received),
        *(line for judgement in each.judgements for line in _judgement(judgement)),
        *([""] if each.settlements else []),
        *(fact("settled", settlement.sentence()) for settlement in each.settlements),
    ]
    lines += [fact("episode", _episode(episode)) for episode in episodes]
    lines += [fact("desk", _told(message)) for message in messages]
    if len(found):
        lines += ["", record_table(found)]
    counts = [each_judged.counts for each_judged in each.judgements]
    more = sum(count["fail"] + count["undecided"] for count in counts) - len(found)
    if more > 0:
        lines.append(f"and {more} more: sercheck ledger records --batch {batch.batch_id} --outcome fail")
    return "\n".join(lines)


def _judgement(judgement: Judgement) -> list[str]:
    counts = judgement.counts
    return [
        "",
        fact("decision", f"{judgement.decision}, judged at {judgement.judged_at}"),
        fact("records", f"{counts['pass']} pass, {counts['fail']} fail, {counts['undecided']} undecided"),
        fact("rules", judgement.rules_fingerprint),
        fact("baseline", judgement.baseline_id or "none"),
        fact("sercheck", judgement.sercheck_version),
    ]


def _episode(episode: Episode) -> str:
    rule = plain(episode.rule, 80)
    many = f"{episode.batches} batch" + ("es" if episode.batches > 1 else "")
    return f"{episode.state}: {rule}, since {episode.started}, {many} ({episode.episode_id[:SHORT_BATCH]})"


def _told(message: Message) -> str:
    if message.state == "sent":
        return f"{message.desk} told at {message.sent_at}"
    trouble = f": {message.trouble}" if message.trouble else ""
    return f"{message.desk} not told yet ({message.state}, attempts: {message.attempts}){trouble}"


def record_page(row: dict[str, Any]) -> str:
    """All that a record says; what is null is left out."""
    return "\n".join(fact(name, str(value)) for name, value in row.items() if value is not None)


def fact(name: str, value: str) -> str:
    """One fact of a page under its name, folded beside it."""
    return folded(plain(value, REASON), f"{name:<{LABEL}}  ", " " * (LABEL + 2))
