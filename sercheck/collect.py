"""Judged measurements to records, as columns; depends on ``judge``, ``reasons`` and ``record``."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from sercheck.causes import UNKNOWN
from sercheck.judge import FAIL, OUTCOMES, UNDECIDED, Judged
from sercheck.reasons import after, sentences
from sercheck.record import Records, record_ids, utc_text
from sercheck.rulebook.compiled import Rule, Rulebook


@dataclass(frozen=True)
class Common:
    """What all records of one judgement share; the names are those of the record."""

    feed: str
    batch_id: str
    batch_fingerprint: str
    judged_at: str
    rules_fingerprint: str
    baseline_id: str | None
    sercheck_version: str


def records(book: Rulebook, judged: Sequence[Judged], common: Common) -> Records:
    """All records of a judgement, in the order of rules, columns, series and lags."""
    return Records.concat([_part(book.rules[each.seen.rule], each, common) for each in judged])


def actions(rule: Rule) -> dict[int, str | None]:
    """What an outcome does to the batch; a pass does nothing."""
    return {FAIL: rule.otherwise, UNDECIDED: "hold" if rule.when_undecided == "hold" else None}


def _part(rule: Rule, judged: Judged, common: Common) -> Records:
    part, seen = judged.seen, judged.seen.measurement
    series, lags = seen.observed.shape
    if not series:
        return Records.empty()
    acts = actions(rule)
    outcomes = judged.outcome.ravel()

    def flat(values: np.ndarray) -> np.ndarray:
        return np.broadcast_to(values, seen.observed.shape).ravel()

    cause, support = _causes(judged)
    keys = np.repeat(part.keys, lags)
    lag = np.tile(np.array(seen.lags or [np.nan] * lags, dtype=np.float64), series)
    columns = {
        "record_id": record_ids(
            common.batch_fingerprint,
            common.rules_fingerprint,
            [rule.name] * len(keys),
            [part.column] * len(keys),
            keys,
            lag,
            common.baseline_id,
        ),
        **vars(common),
        "rule": rule.name,
        "measure": rule.measure,
        "column": part.column,
        "series": keys,
        "lag": lag,
        "season": seen.season,
        "after": after(rule),
        "window_start": utc_text(part.window_start)[0],
        "window_end": utc_text(part.window_end)[0],
        "n": flat(seen.n),
        "n_missing": flat(seen.n_missing),
        "n_eff": flat(seen.n_eff),
        "observed": flat(seen.observed),
        "bound": flat(judged.bound),
        "standard_error": flat(judged.standard_error),
        "limit": flat(judged.limit),
        "naive_limit": flat(judged.naive_limit),
        "detectable": flat(judged.detectable),
        "method": seen.method,
        "assumes": seen.assumes,
        "p_value": flat(judged.p_value),
        "false_alarm": None if seen.exact else rule.false_alarm,
        "false_alarm_used": flat(judged.risk_used),
        "outcome": np.array(OUTCOMES, dtype=object)[outcomes],
        "reason": sentences(rule, judged),
        "action": np.array([acts.get(code) for code in range(len(OUTCOMES))], dtype=object)[outcomes],
        "likely_cause": cause,
        "cause_support": support,
    }
    return Records(columns)


def _causes(judged: Judged) -> tuple[np.ndarray | None, np.ndarray | None]:
    """Likely cause and support of every cell; only what failed has one."""
    failed = judged.outcome == FAIL
    if not failed.any():
        return None, None
    part, shape = judged.seen, failed.shape
    cause = np.full(shape, None, dtype=object)
    support = np.full(shape, np.nan)
    cause[failed], support[failed] = UNKNOWN, 0.0
    if part.cause is not None and part.support is not None:
        known = failed & np.array([name is not None for name in part.cause])[:, None]
        cause[known] = np.broadcast_to(part.cause[:, None], shape)[known]
        support[known] = np.broadcast_to(part.support[:, None], shape)[known]
    return cause.ravel(), support.ravel()
