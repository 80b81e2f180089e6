"""The record: the outcome of one rule on one series of one batch, kept as columns; depends on nothing of ours."""

from __future__ import annotations

COLUMNS: tuple[str, ...] = (
    "record_id", "feed", "batch_id", "batch_fingerprint", "judged_at",
    "rule", "measure", "column", "series", "lag", "season", "after",
    "window_start", "window_end", "n", "n_missing", "n_eff",
    "observed", "bound", "standard_error", "limit", "naive_limit", "detectable",
    "method", "assumes", "p_value", "false_alarm", "false_alarm_used",
    "outcome", "reason", "action", "likely_cause", "cause_support",
    "rules_fingerprint", "baseline_id", "sercheck_version",
)  # fmt: skip
"""Names and order of the columns, the same in JSON lines, CSV, Parquet and the ledger."""

INTEGERS = frozenset({"lag", "n", "n_missing"})
NUMBERS = frozenset({
    "n_eff", "observed", "bound", "standard_error", "limit", "naive_limit", "detectable",
    "p_value", "false_alarm", "false_alarm_used", "cause_support",
})  # fmt: skip
TIMES = frozenset({"judged_at", "window_start", "window_end"})
"""UTC, RFC 3339 text such as 2026-01-12T00:00:00Z."""
