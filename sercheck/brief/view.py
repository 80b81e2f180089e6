"""What a brief says, as plain frozen data that every surface shows; depends on ``sketches``.

Texts are plain already (one line, no control characters, no secrets), but not escaped: each surface does that itself.
"""

from __future__ import annotations

from dataclasses import dataclass

from sercheck.sketches import Sketch


@dataclass(frozen=True)
class Cause:
    """What probably broke.

    Attributes:
        what: in words.
        support: mean over its series, 0 to 1; None where no cause is known.
        series: number of series.
        worst: those of them in which the most rules fail, the worst first.
        holds: one of its failures holds the batch.
    """

    what: str
    support: float | None
    series: int
    worst: tuple[str, ...]
    holds: bool


@dataclass(frozen=True)
class Failed:
    """A rule that failed.

    Attributes:
        holds: its failure holds the batch; else it is only noted.
        about: what the rule's author says of a failure.
        runbook: where to read on: a text, or a link (``link`` then).
        link: the runbook when it is a web address.
        records: failed records.
        series: series in which it fails; 0 for a verdict on all series.
        who: the clearest series; empty for a verdict on all series or a feed of one.
        reason: its record's sentence.
        since: since when the rule has been failing batch after batch.
        before: how often it failed in the batches before.
        sketch: what to look at.
        lags: lags that fail on the sketched series.
        figures: the clearest records, a text for each of ``FIGURES``.
        more: failed records that are not among them.
        bound: the bound of the clearest record.
        limit: its limit.
        observed: what was seen.
    """

    rule: str
    holds: bool
    about: str
    runbook: str
    link: str
    tell: tuple[str, ...]
    records: int
    series: int
    who: str
    reason: str
    since: str
    before: str
    sketch: Sketch | None
    lags: tuple[int, ...]
    figures: tuple[tuple[str, ...], ...]
    more: int
    bound: float | None
    limit: float | None
    observed: float | None


FIGURES = ("series", "lag", "n", "n_eff", "observed", "bound", "limit", "naive limit", "p")
"""Columns of the figures."""


@dataclass(frozen=True)
class Undecided:
    """A rule that could not say something."""

    rule: str
    records: int
    reason: str
    holds: bool


@dataclass(frozen=True)
class Mark:
    """One batch in the row of the last ones; ``state`` is released, held, settled or discarded."""

    batch_id: str
    when: str
    state: str
    failed: int
    judged: bool = False


@dataclass(frozen=True)
class Brief:
    """All of it.

    Attributes:
        state: released, held, settled (held, then let in by a person) or discarded.
        why: the sentence of why.
        settled: what a person said about it; empty when nobody did.
        stretch: first to last row on the feed's own clock.
        since: since when.
        before: how often before.
        commands: what can be typed now, each with what it does.
        last: the last batches, the oldest first.
    """

    feed: str
    about: str
    batch_id: str
    decision: str
    state: str
    why: str
    settled: str
    stretch: str
    zone: str
    rows: int
    series: int
    counts: tuple[tuple[str, int], ...]
    causes: tuple[Cause, ...]
    more_causes: int
    since: str
    before: str
    failed: tuple[Failed, ...]
    more_failed: int
    undecided: tuple[Undecided, ...]
    more_undecided: int
    notes: tuple[str, ...]
    commands: tuple[tuple[str, str], ...]
    last: tuple[Mark, ...]
    judged_at: str
    received: tuple[str, ...]
    versions: tuple[tuple[str, str], ...]
