"""What the ledger takes and gives, as plain frozen data; depends on nothing of ours.

Times are UTC, RFC 3339 text such as 2026-01-12T00:00:00Z.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import datetime, timedelta
from hashlib import blake2b


@dataclass(frozen=True)
class BatchRow:
    """A batch as it came.

    Attributes:
        batch_id: derived from the batch's content, so that the same batch is known again.
        fingerprint: hash of the content.
        first_stamp: stamp of the oldest row; None when there is no row.
        last_stamp: stamp of the newest row.
        rows: number of rows delivered.
        series: number of series.
        received: the files it was read from.
    """

    batch_id: str
    feed: str
    fingerprint: str
    first_stamp: str | None
    last_stamp: str | None
    rows: int
    series: int
    received: tuple[str, ...] = ()


@dataclass(frozen=True)
class JudgementRow:
    """What was decided about a batch by one set of rules against one baseline.

    Attributes:
        decision: released or held.
        judged_at: the clock it was judged by.
        rules: text of the rule file.
    """

    batch_id: str
    rules_fingerprint: str
    baseline_id: str | None
    decision: str
    judged_at: str
    rules: str
    sercheck_version: str

    @property
    def judgement_id(self) -> str:
        """Derived from batch, rules and baseline: judging again gives the same id."""
        return judgement_id(self.batch_id, self.rules_fingerprint, self.baseline_id)


@dataclass(frozen=True)
class Judgement(JudgementRow):
    """A judgement as the ledger has it.

    Attributes:
        stored_at: when the ledger took it, by the clock of the machine.
        counts: records by outcome: pass, fail, undecided.
    """

    stored_at: str = ""
    counts: Mapping[str, int] = field(default_factory=dict)


@dataclass(frozen=True)
class Settlement:
    """What a person said about a batch or from it on about its feed; added to the ledger, never changed.

    Attributes:
        what: ``released``, ``discarded`` or ``relearn``.
        settled_by: who.
        because: why.
        settled_at: when.
        relearn_from: for ``relearn`` the first moment that teaches; history before it no longer does.
    """

    batch_id: str
    feed: str
    what: str
    settled_by: str
    because: str
    settled_at: str
    relearn_from: str | None = None

    @property
    def settlement_id(self) -> str:
        """Derived from all of it."""
        return _digest(vars(self))

    def sentence(self) -> str:
        """What was said, by whom, when and why."""
        what = f"relearn from {self.relearn_from}" if self.what == "relearn" else self.what
        return f"{what} by {self.settled_by} at {self.settled_at} because {self.because}"


@dataclass(frozen=True)
class BaselineRow:
    """What was learned from a stretch of a feed's history for one set of rules.

    Attributes:
        learned_at: the clock when it was learned; the first time stays.
        first_stamp: of the rows it was learned from.
        last_stamp: likewise.
        fingerprint: of those rows' content.
        series: number of series.
        facts: a Parquet file with a row for each series and column.
    """

    feed: str
    rules_fingerprint: str
    learned_at: str
    first_stamp: str
    last_stamp: str
    fingerprint: str
    series: int
    facts: bytes = field(repr=False, default=b"")

    @property
    def baseline_id(self) -> str:
        """Derived from the feed, the rules and the rows: learning the same again gives the same id."""
        return _digest([self.feed, self.rules_fingerprint, self.first_stamp, self.last_stamp, self.fingerprint])


@dataclass(frozen=True)
class JudgedBatch:
    """A batch with its judgements and settlements, the oldest first; there is at least one judgement."""

    batch: BatchRow
    judgements: tuple[Judgement, ...]
    settlements: tuple[Settlement, ...] = ()

    @property
    def last(self) -> Judgement:
        """The judgement that counts: the one stored last."""
        return self.judgements[-1]

    @property
    def settled(self) -> Settlement | None:
        """The settlement that counts: the last that released or discarded the batch."""
        return next((each for each in reversed(self.settlements) if each.what != "relearn"), None)


@dataclass(frozen=True)
class Filters:
    """What to look up; None asks for everything.

    Attributes:
        feed: name, or a pattern with ``*`` and ``?``.
        since: batches whose newest row is at or after this time (judged then, for a batch without rows).
        until: batches whose newest row is at or before this time.
        outcome: pass, fail or undecided.
        decision: released or held.
        rule: name, or a pattern.
        series: key, or a pattern.
        batch_id: the whole id.
        judgement_id: the whole id.
        limit: at most so many, the newest first.
    """

    feed: str | None = None
    since: str | None = None
    until: str | None = None
    outcome: str | None = None
    decision: str | None = None
    rule: str | None = None
    series: str | None = None
    batch_id: str | None = None
    judgement_id: str | None = None
    limit: int | None = None


def later_than(before: str | None, now: datetime) -> str:
    """Now as text, or just after ``before`` where a clock was set back: what is stored last is also the latest."""
    if before is not None:
        now = max(now, datetime.fromisoformat(before) + timedelta(microseconds=1))
    return now.strftime("%Y-%m-%dT%H:%M:%S.%fZ")


def judgement_id(batch_id: str, rules_fingerprint: str, baseline_id: str | None) -> str:
    """32 hex digits of BLAKE2b over the three parts, spelled as a JSON list so that no two are alike."""
    return _digest([batch_id, rules_fingerprint, baseline_id])


def _digest(parts: object) -> str:
    return blake2b(json.dumps(parts).encode(), digest_size=16).hexdigest()
