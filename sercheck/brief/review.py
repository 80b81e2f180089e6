"""The digest of all feeds over a stretch of time, for every surface; depends on the store's digest and ``words``."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass
from typing import Any

from sercheck.brief.rulefile import read_rule_file
from sercheck.brief.text import escaped
from sercheck.brief.words import many, moment, name, zone_of
from sercheck.store.digest import Digest, FeedDigest

MOST_FEEDS, MOST_RULES, MOST_OPEN = 200, 20, 5
"""Feeds, noisiest rules and open episodes of a feed that are shown; more are counted."""
FEED_HEADS = ("feed", "batches", "held", "false holds", "true holds", "not settled", "slipped")
RULE_HEADS = ("rule", "feed", "failed on", "of", "episodes", "false holds", "true holds")
KEY = "False holds: a person let the batch in; true ones: a person discarded it; slipped: released and discarded later."


@dataclass(frozen=True)
class FeedLine:
    """One feed: its newest batch, what became of the batches, and the rules that are failing."""

    feed: str
    state: str
    when: str
    batch_id: str
    batches: int
    released: int
    held: int
    false_holds: int
    true_holds: int
    unsettled: int
    slipped: int
    failing: tuple[tuple[str, str, int], ...]
    more_failing: int

    @property
    def cells(self) -> tuple[str, ...]:
        """As ``FEED_HEADS`` name them."""
        numbers = (self.batches, self.held, self.false_holds, self.true_holds, self.unsettled, self.slipped)
        return (self.feed, *(f"{number:,}" for number in numbers))


@dataclass(frozen=True)
class RuleLine:
    """One rule: on how many batches it failed, of how many, and what people said of them."""

    rule: str
    feed: str
    failed: int
    asked: int
    episodes: int
    false_holds: int
    true_holds: int

    @property
    def cells(self) -> tuple[str, ...]:
        """As ``RULE_HEADS`` name them."""
        numbers = (self.failed, self.asked, self.episodes, self.false_holds, self.true_holds)
        return (self.rule, self.feed, *(f"{number:,}" for number in numbers))


@dataclass(frozen=True)
class Review:
    """All of it; times on each feed's own clock."""

    since: str
    feeds: tuple[FeedLine, ...]
    more_feeds: int
    noisiest: tuple[RuleLine, ...]
    more_rules: int
    untold: tuple[tuple[str, int], ...]

    @property
    def sentence(self) -> str:
        """The sum of all feeds."""
        batches, held = sum(each.batches for each in self.feeds), sum(each.held for each in self.feeds)
        right, wrong = sum(each.false_holds for each in self.feeds), sum(each.true_holds for each in self.feeds)
        waiting = sum(each.unsettled for each in self.feeds)
        return (
            f"{many(batches, 'batch', 'batches')} of {many(len(self.feeds) + self.more_feeds, 'feed')} since "
            f"{self.since}, {held:,} held: {right:,} false holds, {wrong:,} true holds, {waiting:,} not settled."
        )


def review(told: Digest, rules: Mapping[str, str], since: str) -> Review:
    """Plain texts and numbers.

    Args:
        told: the store's digest.
        rules: text of each feed's rule file, which knows its zone.
        since: the beginning, as it is said.
    """
    lines = tuple(_feed(each, rules.get(each.feed, "")) for each in told.feeds[:MOST_FEEDS])
    noisy = tuple(
        RuleLine(name(e.rule), name(e.feed), e.failed, e.asked, e.episodes, e.false_holds, e.true_holds)
        for e in told.noisiest[:MOST_RULES]
    )
    return Review(
        since, lines, max(len(told.feeds) - MOST_FEEDS, 0), noisy, max(len(told.noisiest) - MOST_RULES, 0),
        tuple((name(desk), number) for desk, number in told.untold),
    )  # fmt: skip


def _feed(each: FeedDigest, rules: str) -> FeedLine:
    zone = zone_of(read_rule_file(rules).timezone)
    running = [episode for episode in each.episodes if episode.state == "open"]
    return FeedLine(
        name(each.feed), each.last_decision, moment(each.last_stamp, zone), each.last_batch, each.batches,
        each.released, each.held, each.false_holds, each.true_holds, each.unsettled, each.slipped,
        tuple((name(e.rule), moment(e.started, zone), e.batches) for e in running[:MOST_OPEN]),
        max(len(running) - MOST_OPEN, 0),
    )  # fmt: skip


def text(told: Review) -> str:
    """For a terminal."""
    lines = [told.sentence, ""]
    lines += _aligned(FEED_HEADS, [each.cells for each in told.feeds])
    lines += [f"and {many(told.more_feeds, 'more feed')}"] if told.more_feeds else []
    lines += ["", KEY]
    for feed in told.feeds:
        lines += [f"  {feed.feed}: {said}" for said in _failing(feed)]
    if told.noisiest:
        lines += ["", *_aligned(RULE_HEADS, [each.cells for each in told.noisiest])]
    lines += [f"and {many(told.more_rules, 'more rule')}"] if told.more_rules else []
    return "\n".join([*lines, *_untold(told)])


def markdown(told: Review) -> str:
    """For a chat."""
    lines = [f"**{told.sentence}**", "", *_table(FEED_HEADS, [each.cells for each in told.feeds]), "", KEY, ""]
    for feed in told.feeds:
        lines += [escaped(f"- {feed.feed}: {said}") for said in _failing(feed)]
    if told.noisiest:
        lines += ["", *_table(RULE_HEADS, [each.cells for each in told.noisiest])]
    return "\n".join([*lines, *map(escaped, _untold(told))])


def plain_data(told: Review) -> dict[str, Any]:
    """For a program."""
    data = asdict(told)
    for feed in data["feeds"]:
        feed["failing"] = [{"rule": rule, "since": since, "batches": n} for rule, since, n in feed["failing"]]
    return {**data, "untold": dict(told.untold)}


def page(told: Review) -> str:
    """The page."""
    from sercheck.page import render

    return render("review.html", told=told, key=KEY, untold=_untold(told))


def _failing(feed: FeedLine) -> list[str]:
    told = [f"{rule} fails since {since}, {many(n, 'batch', 'batches')}" for rule, since, n in feed.failing]
    return [*told, *([f"{feed.more_failing} more rules fail"] if feed.more_failing else [])]


def _untold(told: Review) -> list[str]:
    return [f"{many(number, 'message')} to {desk} could not be sent yet" for desk, number in told.untold]


def _aligned(heads: Sequence[str], rows: Sequence[Sequence[str]]) -> list[str]:
    cells = [tuple(heads), *(tuple(c if len(c) <= 40 else f"{c[:39]}…" for c in row) for row in rows)]
    widths = [max(map(len, column)) for column in zip(*cells, strict=True)]
    left = [head in ("feed", "rule") for head in heads]
    return ["  ".join(_set(*cell) for cell in zip(row, widths, left, strict=True)).rstrip() for row in cells]


def _set(cell: str, width: int, left: bool) -> str:
    return cell.ljust(width) if left else cell.rjust(width)


def _table(heads: Sequence[str], rows: Sequence[Sequence[str]]) -> list[str]:
    lines = [heads, ["---"] * len(heads), *([escaped(cell) for cell in row] for row in rows)]
    return [f"| {' | '.join(line)} |" for line in lines]
