"""What a replay says: false holds with exact intervals, shares caught, delays, curves; depends on ``replay``.

Intervals are exact: Garwood (1936) for a Poisson mean, Clopper and Pearson (1934) for a share, and for the count of a
second stretch, given the first, the conditional binomial law of two Poisson counts (Przyborowski and Wilenski 1940).
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.special import betaincinv, gammaincinv

from sercheck.measures import get
from sercheck.rehearsal.bench import Judgement, Outcome
from sercheck.rehearsal.feed import Feed, batches_in
from sercheck.rehearsal.replay import Replayed
from sercheck.rulebook.budget import expected_false_holds
from sercheck.rulebook.compiled import Rule
from sercheck.suspects import evident

LEVEL = 0.95
"""Of all intervals (common practice)."""
PERIOD = "90D"
"""The period that rates are told for where the rule file has no alarm budget: a quarter of a year."""


def poisson_interval(count: int) -> tuple[float, float]:
    """Exact interval of a Poisson mean of which ``count`` was seen (Garwood 1936)."""
    tail = (1 - LEVEL) / 2
    low = float(gammaincinv(count, tail)) if count else 0.0
    return low, float(gammaincinv(count + 1, 1 - tail))


def share_interval(found: int, tried: int) -> tuple[float, float] | None:
    """Exact interval of a share of which ``found`` of ``tried`` were seen (Clopper and Pearson 1934)."""
    if not tried:
        return None
    tail = (1 - LEVEL) / 2
    low = float(betaincinv(found, tried - found + 1, tail)) if found else 0.0
    return low, float(betaincinv(found + 1, tried - found, 1 - tail)) if found < tried else 1.0


def next_interval(count: int, times: float = 1.0) -> tuple[int, int]:
    """Exact interval of the count in a next stretch ``times`` as long, given ``count`` in this one.

    All counts y that the conditional law of the first count given the sum, binomial with share 1/(1 + times), does not
    reject at half of 5 % on either side: the sampling errors of both stretches are in it.
    """
    tail = (1 - LEVEL) / 2
    share = 1 / (1 + times)

    def at_most(k: int, n: int) -> float:
        """P(first count ≤ k) of n together."""
        from scipy.special import bdtr

        return 1.0 if k >= n else 0.0 if k < 0 else float(bdtr(k, n, share))

    low = 0
    while 1 - at_most(count - 1, count + low) <= tail:
        low += 1
    high = low
    while at_most(count, count + high + 1) > tail:
        high += 1
    return low, high


def episodes(batches: Sequence[int]) -> int:
    """Runs of batches in a row: an alarm that lasts counts once."""
    return sum(1 for k, batch in enumerate(batches) if not k or batch != batches[k - 1] + 1)


@dataclass(frozen=True)
class RuleLine:
    """One rule over all healthy batches and all faults.

    Attributes:
        rule: the rule.
        false_holds: runs of healthy batches that it held; of its failures where it only notes.
        interval: exact interval of the mean number in a stretch as long.
        share: mean number that its risk allows in this stretch.
        data: runs of batches that it held for faults of history's own rows.
        undecided: records that it could not decide.
        records: all of its records.
        caught: faults that it caught first, alone or with others.
        alone: those that no other rule caught with it.
    """

    rule: Rule
    false_holds: int
    interval: tuple[float, float]
    share: float
    data: int
    undecided: int
    records: int
    caught: int
    alone: int


@dataclass(frozen=True)
class FaultLine:
    """One fault at one size in one series or in all of them.

    Attributes:
        fault, size: which.
        every: in all series.
        tried: how often it was put into a batch.
        first: how often that batch was held.
        caught: how often that batch or one of those after it was held.
        looked: batches a fault was let go on for.
        interval: exact interval of the share caught.
        median_delay: median of the batches until a caught one was held, 0 for the first; None where none was.
        delays: how many were held in the first batch, the second and so on.
        caught_by: rules that held, the commonest first.
        cause_right: share of the caught whose cause was named; None where none was caught.
    """

    fault: str
    size: float
    every: bool
    tried: int
    first: int
    caught: int
    looked: int
    interval: tuple[float, float] | None
    median_delay: float | None
    delays: tuple[int, ...]
    caught_by: tuple[str, ...]
    cause_right: float | None

    @property
    def share(self) -> float:
        """Share caught."""
        return self.caught / self.tried


@dataclass(frozen=True)
class FaultSum:
    """One fault over all its sizes: in one series (or as many as it needs), in all of them, and altogether.

    Attributes:
        fault: which.
        lines: all its lines, smallest size first.
    """

    fault: str
    lines: tuple[FaultLine, ...]

    def shares(self, *, every: bool) -> tuple[float, float] | None:
        """Share held in the first batch, and within those it was let go on for; None where it was not tried."""
        lines = [line for line in self.lines if line.every == every]
        tried = sum(line.tried for line in lines)
        if not tried:
            return None
        return sum(line.first for line in lines) / tried, sum(line.caught for line in lines) / tried

    @property
    def caught(self) -> int:
        """How often it was caught."""
        return sum(line.caught for line in self.lines)

    @property
    def share(self) -> float:
        """Share caught of all that were tried."""
        return self.caught / sum(line.tried for line in self.lines)

    @property
    def median_delay(self) -> float | None:
        """Median of the batches until a caught one was held."""
        counts = np.sum([line.delays for line in self.lines], axis=0)
        return float(np.median(np.repeat(np.arange(len(counts)), counts))) if counts.any() else None

    @property
    def cause_right(self) -> float | None:
        """Share of the caught whose cause was named."""
        named = sum(line.cause_right * line.caught for line in self.lines if line.cause_right is not None)
        return named / self.caught if self.caught else None

    @property
    def caught_by(self) -> str | None:
        """The rule that caught it most often."""
        by: Counter[str] = Counter()
        for line in self.lines:
            by.update(dict(zip(line.caught_by[:1], [line.caught], strict=False)))
        return by.most_common(1)[0][0] if by else None

    @property
    def sizes(self) -> str:
        """The sizes tried, as text."""
        low, high = (pick(line.size for line in self.lines) for pick in (min, max))
        return f"{low:g}" if low == high else f"{low:g} to {high:g}"


@dataclass(frozen=True)
class Rehearsal:
    """What came of a rehearsal.

    Attributes:
        feed: the history.
        replayed: what was replayed.
        held: batches that healthy rules held, with those rules.
        by_data: batches that were held for faults of history's own rows alone, with those rules.
        rules: a line for each rule, in the order of the file.
        faults: a line for each fault, the worst caught first.
        advice: what to change, a sentence each.
        looked: batches a fault was let go on for.
    """

    feed: Feed
    replayed: Replayed
    held: tuple[Judgement, ...]
    by_data: tuple[Judgement, ...]
    rules: tuple[RuleLine, ...]
    faults: tuple[FaultLine, ...]
    looked: int
    advice: tuple[str, ...] = ()

    @property
    def batches(self) -> int:
        """Healthy batches that were judged."""
        return len(self.replayed.healthy)

    @property
    def false_holds(self) -> int:
        """Runs of batches that were held though nothing was wrong with their rows."""
        return episodes([one.batch for one in self.held])

    @property
    def interval(self) -> tuple[float, float]:
        """Exact interval of the mean number in a stretch as long as this one."""
        return poisson_interval(self.false_holds)

    @property
    def period(self) -> str:
        """The period that the alarm budget speaks of."""
        budget = self.feed.book.false_holds
        return budget.per if budget else PERIOD

    @property
    def periods(self) -> float:
        """How many such periods were replayed."""
        return self.batches / batches_in(self.feed, self.period)

    @property
    def expected(self) -> float | None:
        """Most false holds that the rules' risks allow in this stretch, on average; None where nobody can tell."""
        told = expected_false_holds(self.feed.book)
        return None if told is None else told[0] / batches_in(self.feed, told[1]) * self.batches

    @property
    def caught(self) -> float | None:
        """Share of all faults that were caught; None where none was tried."""
        tried = sum(line.tried for line in self.faults)
        return sum(line.caught for line in self.faults) / tried if tried else None

    @property
    def sums(self) -> list[FaultSum]:
        """Each fault over all its sizes, the worst caught first."""
        groups: dict[str, list[FaultLine]] = {}
        for line in self.faults:
            groups.setdefault(line.fault, []).append(line)
        sums = [
            FaultSum(name, tuple(sorted(lines, key=lambda line: (line.every, line.size))))
            for name, lines in groups.items()
        ]
        return sorted(sums, key=lambda one: one.share)

    def curve(self, fault: str, *, every: bool) -> list[FaultLine]:
        """The operating characteristic: the lines of a fault by size."""
        lines = [line for line in self.faults if line.fault == fault and line.every == every]
        return sorted(lines, key=lambda line: line.size)

    def summary(self) -> dict[str, Any]:
        """The rehearsal as plain data, as ``sercheck rehearse --format json`` prints it."""
        budget = self.feed.book.false_holds
        first, last = (self.feed.began(one.batch) for one in (self.replayed.healthy[0], self.replayed.healthy[-1]))
        return {
            "feed": self.feed.book.feed,
            "finished": self.replayed.finished,
            "batches": self.batches,
            "first": first,
            "last": last,
            "series": len(self.feed.keys),
            "false_holds": self.false_holds,
            "false_holds_interval": list(self.interval),
            "false_holds_next": list(next_interval(self.false_holds)),
            "budget": {
                "count": None if budget is None else budget.count, "per": self.period, "periods": self.periods,
                "expected": self.expected,
            },
            "held": [{"batch": self.feed.began(one.batch), "rules": list(one.held_by)} for one in self.held],
            "held_for_missing_or_doubled_rows": [
                {"batch": self.feed.began(one.batch), "rules": list(one.held_by)} for one in self.by_data
            ],
            "rules": [
                {
                    "rule": line.rule.name, "action": line.rule.otherwise, "false_holds": line.false_holds,
                    "false_holds_interval": list(line.interval), "expected": line.share,
                    "undecided": line.undecided, "records": line.records, "caught": line.caught,
                    "caught_alone": line.alone,
                }
                for line in self.rules
            ],
            "faults": [
                {
                    "fault": line.fault, "size": line.size, "series": "all" if line.every else "one",
                    "tried": line.tried, "caught": line.caught, "caught_first": line.first,
                    "caught_interval": None if line.interval is None else list(line.interval),
                    "median_delay": line.median_delay, "delays": list(line.delays),
                    "caught_by": list(line.caught_by), "cause_right": line.cause_right,
                }
                for line in self.faults
            ],
            "faults_begun_in": [self.feed.began(start) for start in self.replayed.starts],
            "batches_a_fault_lasts": self.looked,
            "advice": list(self.advice),
        }  # fmt: skip


def conclude(feed: Feed, replayed: Replayed, looked: int) -> Rehearsal:
    """Count what a replay gave."""
    held = [one for one in replayed.healthy if one.held_by]
    clock = {rule.name for rule in feed.book.rules if of_rows(rule)}
    by_data = tuple(one for one in held if clock >= set(one.held_by))
    healthy = tuple(one for one in held if not clock >= set(one.held_by))
    rules = tuple(_rule(rule, replayed, clock) for rule in feed.book.rules)
    faults = sorted(_faults(replayed.outcomes, looked), key=lambda line: (line.share, line.first / line.tried))
    return Rehearsal(feed, replayed, healthy, by_data, rules, tuple(faults), looked)


def of_rows(rule: Rule) -> bool:
    """The rule asks whether rows came (missing, doubled, disordered): its failures are faults of history's own rows."""
    return not get(rule.measure).of_values or evident(rule) is not None


def _rule(rule: Rule, replayed: Replayed, clock: set[str]) -> RuleLine:
    name = rule.name
    broke = [one.batch for one in replayed.healthy if name in (one.held_by if _holds(rule) else one.failed)]
    runs = episodes(broke)
    false = 0 if name in clock else runs
    caught = [one for one in replayed.outcomes if name in one.caught_by]
    return RuleLine(
        rule=rule,
        false_holds=false,
        interval=poisson_interval(false),
        share=rule.false_alarm * len(replayed.healthy),
        data=runs - false,
        undecided=sum(one.undecided[name] for one in replayed.healthy),
        records=sum(one.records[name] for one in replayed.healthy),
        caught=len(caught),
        alone=sum(one.caught_by == (name,) for one in caught),
    )


def _holds(rule: Rule) -> bool:
    return rule.otherwise == "hold" or rule.when_undecided == "hold"


def _faults(outcomes: Sequence[Outcome], looked: int) -> list[FaultLine]:
    groups: dict[tuple[str, float, bool], list[Outcome]] = {}
    for one in outcomes:
        groups.setdefault((one.fault, one.size, one.every), []).append(one)
    return [_fault(key, group, looked) for key, group in groups.items()]


def _fault(key: tuple[str, float, bool], group: Sequence[Outcome], looked: int) -> FaultLine:
    caught = [one for one in group if one.delay is not None]
    delays = [one.delay for one in caught if one.delay is not None]
    by = Counter(name for one in caught for name in one.caught_by)
    return FaultLine(
        *key,
        tried=len(group),
        first=sum(delay == 0 for delay in delays),
        caught=len(caught),
        looked=looked,
        interval=share_interval(len(caught), len(group)),
        median_delay=float(np.median(delays)) if delays else None,
        delays=tuple(sum(delay == k for delay in delays) for k in range(looked)),
        caught_by=tuple(name for name, _ in by.most_common()),
        cause_right=sum(one.right for one in caught) / len(caught) if caught else None,
    )
