"""Names and columns of the ledger's tables as they stand after all migrations; depends on ``record``.

Only what queries need: the tables are made, with their types and keys, by the migrations.
"""

from __future__ import annotations

from functools import cache
from typing import TYPE_CHECKING, NamedTuple

from sercheck.record import COLUMNS, INTEGERS, NUMBERS

if TYPE_CHECKING:
    from sqlalchemy import TableClause

BATCH_COLUMNS = ("batch_id", "feed", "fingerprint", "first_stamp", "last_stamp", "rows", "series", "received")
JUDGEMENT_COLUMNS = (
    "judgement_id", "batch_id", "rules_fingerprint", "baseline_id", "decision", "judged_at", "stored_at",
    "passed", "failed", "undecided", "rules", "sercheck_version",
)  # fmt: skip
BASELINE_COLUMNS = (
    "baseline_id", "feed", "rules_fingerprint", "learned_at", "first_stamp", "last_stamp", "fingerprint", "series",
    "facts",
)  # fmt: skip
SETTLEMENT_COLUMNS = (
    "settlement_id", "batch_id", "feed", "what", "settled_by", "because", "settled_at", "relearn_from",
)  # fmt: skip
SKETCH_COLUMNS = ("judgement_id", "sketches")
STANDING_COLUMNS = (
    "judgement_id", "place", "batch_id", "feed", "rule", "at", "received_at", "stored_at", "state", "passed", "failed",
    "undecided", "series", "action", "record_id", "p_value", "beyond", "episode_id",
)  # fmt: skip
EPISODE_COLUMNS = (
    "episode_id", "feed", "rule", "state", "action", "started", "first_at", "last_at", "closed_at", "closed_as",
    "closed_by", "first_batch", "last_batch", "batches", "series", "widest", "worst", "p_value", "beyond",
)  # fmt: skip
MESSAGE_COLUMNS = (
    "message_id", "judgement_id", "batch_id", "feed", "desk", "changes", "made_at", "state", "attempts",
    "next_at", "claimed_by", "claimed_at", "trouble", "sent_at",
)  # fmt: skip
RECORD_COLUMNS = (*COLUMNS, "judgement_id", "place")
"""``place`` is the position of a record in its judgement."""


COUNTS = frozenset({"rows", "series", "place", "passed", "failed", "undecided", "batches", "widest", "attempts"})


class Tables(NamedTuple):
    """The tables that queries name."""

    batches: TableClause
    judgements: TableClause
    records: TableClause
    baselines: TableClause
    settlements: TableClause
    sketches: TableClause
    standings: TableClause
    episodes: TableClause
    messages: TableClause


@cache
def tables() -> Tables:
    """Build them once, at the first use of a ledger."""
    from sqlalchemy import BigInteger, Double, Text, column, table

    def kind(name: str) -> BigInteger | Double[float] | Text:
        if name in NUMBERS:
            return Double()
        return BigInteger() if name in INTEGERS or name in COUNTS else Text()

    texts = {"series"}  # a number of series in batches, a key in records
    return Tables(
        table("batches", *(column(name, kind(name)) for name in BATCH_COLUMNS)),
        table("judgements", *(column(name) for name in JUDGEMENT_COLUMNS)),
        table("records", *(column(name, Text() if name in texts else kind(name)) for name in RECORD_COLUMNS)),
        table("baselines", *(column(name) for name in BASELINE_COLUMNS)),
        table("settlements", *(column(name) for name in SETTLEMENT_COLUMNS)),
        table("sketches", *(column(name) for name in SKETCH_COLUMNS)),
        table("standings", *(column(name, Double() if name == "beyond" else kind(name)) for name in STANDING_COLUMNS)),
        table("episodes", *(column(name, Double() if name == "beyond" else kind(name)) for name in EPISODE_COLUMNS)),
        table("messages", *(column(name, kind(name)) for name in MESSAGE_COLUMNS)),
    )
