"""Small made-up records, batches and judgements for the tests of record, ledger and command line."""

from __future__ import annotations

import numpy as np

from sercheck.record import COLUMNS, INTEGERS, NUMBERS, Records, record_ids
from sercheck.store.rows import BatchRow, JudgementRow

TEXTS = tuple(name for name in COLUMNS if name not in INTEGERS | NUMBERS)


def records(size: int = 6, batch_id: str = "heat-0112-abcd", rules: str = "rules-1", **changes: object) -> Records:
    """Records of one batch: series ``s0`` on, every third one failed, every fifth undecided."""
    rng = np.random.default_rng(7)
    series = [f"s{number}" for number in range(size)]
    outcome = ["fail" if n % 3 == 0 else "undecided" if n % 5 == 0 else "pass" for n in range(size)]
    rule, column = "keeps little memory", "kwh"
    columns: dict[str, object] = {name: rng.standard_normal(size) for name in sorted(NUMBERS)}
    columns |= dict.fromkeys(TEXTS)
    columns |= {
        "record_id": record_ids(batch_id, rules, [rule] * size, [column] * size, series, [1] * size, None),
        "feed": "substation_heat",
        "batch_id": batch_id,
        "batch_fingerprint": f"f-{batch_id}",
        "judged_at": "2026-01-13T06:00:00Z",
        "rule": rule,
        "measure": "autocorrelation",
        "column": column,
        "series": series,
        "lag": 1,
        "window_start": "2026-01-12T00:00:00Z",
        "window_end": "2026-01-12T23:00:00Z",
        "n": 24,
        "n_missing": 0,
        "method": "Bartlett (1946)",
        "outcome": outcome,
        "reason": [None if word == "pass" else f"{word} because of this" for word in outcome],
        "rules_fingerprint": rules,
        "sercheck_version": "0.1.0",
    }
    return Records({**columns, **changes})


def batch(batch_id: str = "heat-0112-abcd", **changes: object) -> BatchRow:
    """The batch of those records."""
    facts: dict[str, object] = {
        "batch_id": batch_id,
        "feed": "substation_heat",
        "fingerprint": f"f-{batch_id}",
        "first_stamp": "2026-01-12T00:00:00Z",
        "last_stamp": "2026-01-12T23:00:00Z",
        "rows": 144,
        "series": 6,
        "received": ("inbox/heat.csv",),
    }
    return BatchRow(**{**facts, **changes})


def judgement(batch_id: str = "heat-0112-abcd", **changes: object) -> JudgementRow:
    """Its judgement."""
    facts: dict[str, object] = {
        "batch_id": batch_id,
        "rules_fingerprint": "rules-1",
        "baseline_id": None,
        "decision": "held",
        "judged_at": "2026-01-13T06:00:00Z",
        "rules": "feed: substation_heat\n",
        "sercheck_version": "0.1.0",
    }
    return JudgementRow(**{**facts, **changes})


def alike(one: Records, other: Records) -> bool:
    """The same values in all columns, null equal to null."""
    return len(one) == len(other) and all(left == right for left, right in zip(one.rows(), other.rows(), strict=True))
