"""What the ledger has counted of one feed since it was begun; depends on ``tables``."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from sercheck.record import storable
from sercheck.store.outbox import UNSENT
from sercheck.store.tables import tables

if TYPE_CHECKING:
    from sercheck.store.ledger import Ledger


@dataclass(frozen=True)
class Totals:
    """Counts that only grow, and what is open just now.

    Attributes:
        decisions: judgements by decision.
        failed: judgements in which a rule failed, by rule; a rule that was asked and never failed has 0.
        undecided: judgements in which it could say nothing, by rule.
        open_episodes: episodes that are open.
        untold: messages of the feed that no desk has yet.
    """

    decisions: Mapping[str, int] = field(default_factory=dict)
    failed: Mapping[str, int] = field(default_factory=dict)
    undecided: Mapping[str, int] = field(default_factory=dict)
    open_episodes: int = 0
    untold: int = 0


def totals(ledger: Ledger, feed: str) -> Totals:
    """What the ledger has counted of a feed."""
    from sqlalchemy import func, select

    known, name = tables(), storable(feed)
    batches, judgements, kept = known.batches, known.judgements, known.standings
    decided = (
        select(judgements.c.decision, func.count())
        .join_from(judgements, batches, batches.c.batch_id == judgements.c.batch_id)
        .where(batches.c.feed == name)
        .group_by(judgements.c.decision)
    )
    stood = (
        select(kept.c.rule, kept.c.state, func.count())
        .where(kept.c.feed == name, kept.c.state != "gone")
        .group_by(kept.c.rule, kept.c.state)
        .order_by(kept.c.rule)
    )
    opened = select(func.count()).where(known.episodes.c.feed == name, known.episodes.c.state == "open")
    waiting = select(func.count()).where(known.messages.c.feed == name, known.messages.c.state.in_(UNSENT))
    with ledger.looking() as connection:
        if connection is None:
            return Totals()
        decisions = {str(decision): int(number) for decision, number in connection.execute(decided)}
        failed: dict[str, int] = {}
        undecided: dict[str, int] = {}
        for rule, state, number in connection.execute(stood):
            for count, word in ((failed, "fail"), (undecided, "undecided")):
                count[rule] = count.get(rule, 0) + (int(number) if state == word else 0)
        numbers = [int(connection.execute(query).scalar() or 0) for query in (opened, waiting)]
    return Totals(decisions, failed, undecided, *numbers)
