"""Judged measurements to records, as columns; depends on ``judge``, ``reasons`` and ``record``."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, datetime

import numpy as np

from sercheck.judge import FAIL, OUTCOMES, UNDECIDED, Judged
from sercheck.reasons import after, sentences
from sercheck.record import COLUMNS, Records, record_ids
from sercheck.rulebook.compiled import Rule, Rulebook


@dataclass(frozen=True)
class Facts:
    """What all records of one judgement share."""

    feed: str
    batch_id: str
    batch_fingerprint: str
    judged_at: str
    rules_fingerprint: str
    baseline_id: str | None
    sercheck_version: str


def utc_text(ns: int) -> str:
    """Nanoseconds since 1970 UTC as RFC 3339 text, to the microsecond where there is a fraction."""
    seconds, rest = divmod(ns, 1_000_000_000)
    stamp = datetime.fromtimestamp(seconds, UTC).replace(tzinfo=None)
    fraction = f".{rest // 1000:06d}" if rest else ""
    return f"{stamp.isoformat(timespec='seconds')}{fraction}Z"


def records(book: Rulebook, judged: Sequence[Judged], facts: Facts) -> Records:
    """All records of a judgement, ordered by rule, column, series and lag."""
    parts = [_columns(book.rules[each.seen.rule], each, facts) for each in judged]
    if not parts:
        return Records({name: [] for name in COLUMNS})
    merged = {name: [cell for part in parts for cell in part[name]] for name in COLUMNS if name != "record_id"}
    merged["record_id"] = record_ids(
        facts.batch_fingerprint,
        facts.rules_fingerprint,
        merged["rule"],
        merged["column"],
        merged["series"],
        merged["lag"],
        facts.baseline_id,
    )
    return Records({name: merged[name] for name in COLUMNS})


def _columns(rule: Rule, judged: Judged, facts: Facts) -> dict[str, list[object]]:
    part = judged.seen
    seen = part.measurement
    series, lags = seen.observed.shape
    cells = series * lags
    acts = {FAIL: rule.otherwise, UNDECIDED: "hold" if rule.when_undecided == "hold" else None}
    told = None if seen.exact else rule.false_alarm

    def same(value: object) -> list[object]:
        return [value] * cells

    def flat(values: np.ndarray) -> list[object]:
        return list(np.broadcast_to(values, seen.observed.shape).ravel().tolist())

    return {
        "feed": same(facts.feed),
        "batch_id": same(facts.batch_id),
        "batch_fingerprint": same(facts.batch_fingerprint),
        "judged_at": same(facts.judged_at),
        "rule": same(rule.name),
        "measure": same(rule.measure),
        "column": same(part.column),
        "series": [key for key in part.keys.tolist() for _ in range(lags)],
        "lag": list(seen.lags or (None,)) * series,
        "season": same(seen.season),
        "after": same(after(rule)),
        "window_start": same(utc_text(part.window_start)),
        "window_end": same(utc_text(part.window_end)),
        "n": flat(seen.n),
        "n_missing": flat(seen.n_missing),
        "n_eff": flat(seen.n_eff),
        "observed": flat(seen.observed),
        "bound": flat(judged.bound),
        "standard_error": flat(judged.standard_error),
        "limit": flat(judged.limit),
        "naive_limit": flat(judged.naive_limit),
        "detectable": flat(judged.detectable),
        "method": same(seen.method),
        "assumes": same(seen.assumes),
        "p_value": flat(judged.p_value),
        "false_alarm": same(told),
        "false_alarm_used": flat(judged.risk_used),
        "outcome": [OUTCOMES[code] for code in judged.outcome.ravel().tolist()],
        "reason": list(sentences(rule, judged)),
        "action": [acts.get(code) for code in judged.outcome.ravel().tolist()],
        "likely_cause": same(None),
        "cause_support": same(None),
        "rules_fingerprint": same(facts.rules_fingerprint),
        "baseline_id": same(facts.baseline_id),
        "sercheck_version": same(facts.sercheck_version),
    }
