"""Numbers for other systems in the OpenMetrics text format (RFC draft, 2020); depends on the verdict and the store.

The format is written here: it is a few lines of text, and the tests hold it to a parser that is not ours. Counters are
those of the ledger, so they grow from batch to batch however often the file is written; without a ledger they are those
of this batch. One file is for one feed: name one for each.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import TYPE_CHECKING, Literal

import numpy as np

from sercheck import __version__
from sercheck.episodes import standings
from sercheck.record import storable
from sercheck.store.totals import Totals

if TYPE_CHECKING:
    from sercheck.store.ledger import Ledger
    from sercheck.verdict import Verdict

Labels = dict[str, str]
DECISIONS = ("held", "released")


@dataclass(frozen=True)
class Family:
    """One metric: its name without suffix, its type, what it counts, its unit, and a value for each set of labels."""

    name: str
    kind: Literal["counter", "gauge", "info"]
    about: str
    samples: Sequence[tuple[Labels, float]]
    unit: str = ""

    def lines(self) -> Iterator[str]:
        """As text."""
        yield f"# TYPE {self.name} {self.kind}"
        if self.unit:
            yield f"# UNIT {self.name} {self.unit}"
        yield f"# HELP {self.name} {_escaped(self.about)}"
        suffix = {"counter": "_total", "gauge": "", "info": "_info"}[self.kind]
        for labels, value in self.samples:
            told = ",".join(f'{name}="{_escaped(storable(text))}"' for name, text in labels.items())
            yield f"{self.name}{suffix}{{{told}}} {_number(value)}"


def metrics(verdict: Verdict, ledger: Ledger | None) -> str:
    """The numbers of a feed after a batch was judged; the ledger's counts where there is one that has the batch."""
    from sercheck.store.totals import totals

    counted = totals(ledger, verdict.feed) if ledger else _of_one(verdict)
    lines = [line for family in _families(verdict, counted) for line in family.lines()]
    return "\n".join([*lines, "# EOF", ""])


def _of_one(verdict: Verdict) -> Totals:
    """The counts of this batch alone."""
    stood = standings(verdict.table)
    return Totals(
        {verdict.decision: 1},
        {each.rule: int(each.state == "fail") for each in stood},
        {each.rule: int(each.state == "undecided") for each in stood},
    )


def _families(verdict: Verdict, counted: Totals) -> Iterator[Family]:
    feed = {"feed": verdict.feed}
    table = verdict.table
    decided = [({**feed, "decision": word}, counted.decisions.get(word, 0)) for word in DECISIONS]
    yield Family("sercheck_batches", "counter", "Judgements of batches by what the rules decided.", decided)
    failed = [({**feed, "rule": rule}, number) for rule, number in counted.failed.items()]
    yield Family("sercheck_failures", "counter", "Judgements in which a rule failed.", failed)
    silent = [({**feed, "rule": rule}, number) for rule, number in counted.undecided.items()]
    yield Family("sercheck_undecided", "counter", "Judgements in which a rule could say nothing.", silent)
    held = "1 when the batch that was judged last is held, after what people said of it; else 0."
    yield Family("sercheck_held", "gauge", held, [(feed, float(not verdict.released))])
    outcomes = [({**feed, "outcome": outcome}, number) for outcome, number in verdict.counts.items()]
    yield Family("sercheck_records", "gauge", "Records of the last batch by outcome.", outcomes)
    sizes = [
        ({**feed, "rule": rule}, float(np.median(known)))
        for rule in dict.fromkeys(table["rule"].tolist())
        for known in [_known(table["n_eff"][table["rule"] == rule])]
        if len(known)
    ]
    about = "Effective sample size of the last batch: rows as many independent ones are worth, median of the records."
    yield Family("sercheck_effective_sample_size", "gauge", about, sizes)
    yield Family("sercheck_rows", "gauge", "Rows of the last batch.", [(feed, verdict.facts.rows)])
    yield Family("sercheck_series", "gauge", "Series of the last batch.", [(feed, verdict.facts.series)])
    took = [(feed, verdict.seconds)]
    yield Family("sercheck_judging_seconds", "gauge", "Reading and judging the last batch.", took, "seconds")
    newest = [(feed, datetime.fromisoformat(verdict.facts.last).timestamp())] if verdict.facts.last else []
    about = "Newest row of the last batch, seconds since 1970 UTC."
    yield Family("sercheck_newest_row_timestamp_seconds", "gauge", about, newest, "seconds")
    judged = [(feed, datetime.fromisoformat(text).timestamp()) for text in set(table["judged_at"].tolist())]
    about = "The clock that the last batch was judged by, seconds since 1970 UTC."
    yield Family("sercheck_judged_timestamp_seconds", "gauge", about, judged[:1], "seconds")
    yield Family("sercheck_open_episodes", "gauge", "Rules that keep failing.", [(feed, counted.open_episodes)])
    yield Family("sercheck_untold_messages", "gauge", "Messages that no desk has yet.", [(feed, counted.untold)])
    yield Family("sercheck_build", "info", "The program that wrote this.", [({"version": __version__}, 1)])


def _known(numbers: np.ndarray) -> np.ndarray:
    known: np.ndarray = numbers[np.isfinite(numbers)]
    return known


def _number(value: float) -> str:
    return str(int(value)) if float(value).is_integer() and abs(value) < 2**53 else repr(float(value))


def _escaped(text: str) -> str:
    """A text as a label's value or a help text says it: backslash, quote and line feed are escaped."""
    return text.replace("\\", "\\\\").replace("\n", "\\n").replace('"', '\\"')
