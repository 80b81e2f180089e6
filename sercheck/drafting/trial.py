"""A draft rehearsed on healthy batches: which rules can decide, and which hold more often than their share.

Depends on ``rehearsal``.
"""

from __future__ import annotations

import tempfile
from collections import Counter
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import pdtr

from sercheck.rehearsal.advice import UNLIKELY, beyond_share
from sercheck.rehearsal.run import rehearse
from sercheck.rehearsal.verdicts import Rehearsal, RuleLine
from sercheck.rulebook import load_rules

if TYPE_CHECKING:
    from sercheck.verdict import Rows

SILENT = 0.9
"""Share of its records that a rule leaves undecided from which it is left out (as in what a rehearsal advises)."""
OFTEN = 0.3
"""The same from which the draft says so (ours)."""
DATES = 6
"""Dates told in a comment."""


@dataclass(frozen=True)
class Seen:
    """What one rule did on one value column.

    Attributes:
        records: its records.
        undecided: those that it could not decide.
        reason: the commonest reason for that.
        failed: batches in which it failed.
        usual: the observed values that lie 5 %, 50 % and 95 % up; None where nothing was observed.
    """

    records: int
    undecided: int
    reason: str
    failed: int
    usual: tuple[float, float, float] | None

    @property
    def silent(self) -> bool:
        """It decides next to nothing."""
        return self.undecided > SILENT * self.records


@dataclass(frozen=True)
class Trial:
    """What came of it.

    Attributes:
        told: the rehearsal.
        seen: for each rule, each column that it looked at.
        dates: for each rule, when its false holds (or failures, where it notes) began.
    """

    told: Rehearsal
    seen: Mapping[str, Mapping[str, Seen]]
    dates: Mapping[str, tuple[str, ...]]

    @property
    def lines(self) -> dict[str, RuleLine]:
        """The rehearsal's line of each rule."""
        return {line.rule.name: line for line in self.told.rules}

    @property
    def too_often(self) -> list[str]:
        """The holding rules whose false holds pass the 97.5 % Poisson point of their share."""
        return [
            name for name, line in self.lines.items()
            if line.rule.otherwise == "hold" and line.rule.false_alarm > 0 and beyond_share(line)
        ]  # fmt: skip

    @property
    def within(self) -> bool:
        """All false holds together do not pass that point of the budget."""
        held, allowed = self.told.false_holds, self.told.expected
        return not held or allowed is None or float(pdtr(held - 1, allowed)) <= UNLIKELY

    @property
    def noisiest(self) -> str | None:
        """The holding rule with the most false holds beyond its share, of those that have any."""
        able = {
            name: line.false_holds - line.share for name, line in self.lines.items()
            if line.rule.otherwise == "hold" and line.false_holds > line.share > 0
        }  # fmt: skip
        return max(able, key=lambda name: able[name]) if able else None


def try_out(
    text: str, history: Rows, begins: str, workers: int, tell: Callable[[float, str], None] | None
) -> Trial:
    """Rehearse the healthy batches from a local date on.

    Args:
        text: the rule file.
        history: the rows.
        begins: from when batches are judged.
        workers: processes.
        tell: is told the share that is done.
    """
    with tempfile.TemporaryDirectory(prefix="sercheck-") as folder:
        records = Path(folder) / "records.parquet"
        told = rehearse(
            load_rules(text), history, begins=begins, tries=0, workers=workers, records=records, tell=tell
        )  # fmt: skip
        if not told.replayed.finished:
            raise KeyboardInterrupt  # a rehearsal keeps what is finished; a draft of half of it would promise too much
        seen = _seen(records)
    dates = {
        line.rule.name: tuple(
            told.feed.began(one.batch)[:10] for one in told.replayed.healthy
            if line.rule.name in (one.held_by if line.rule.otherwise == "hold" else one.failed)
        )
        for line in told.rules
    }  # fmt: skip
    return Trial(told, seen, dates)


def _seen(path: Path) -> dict[str, dict[str, Seen]]:
    import pyarrow.parquet as pq

    wanted = ["rule", "column", "outcome", "reason", "observed", "batch"]
    table = pq.read_table(path, columns=wanted)
    rules, columns, outcomes, reasons, observed, batches = (table.column(name).to_pylist() for name in wanted)
    groups: dict[tuple[str, str], list[int]] = {}
    for row, key in enumerate(zip(rules, columns, strict=True)):
        groups.setdefault((key[0], key[1] or ""), []).append(row)
    seen: dict[str, dict[str, Seen]] = {}
    for (rule, column), rows in groups.items():
        undecided = [row for row in rows if outcomes[row] == "undecided"]
        common = Counter(reasons[row] or "" for row in undecided).most_common(1)
        decided = np.array([
            observed[row] for row in rows if outcomes[row] != "undecided" and observed[row] is not None
        ], dtype=float)  # fmt: skip
        low, middle, high = np.quantile(decided, (0.05, 0.5, 0.95)).tolist() if len(decided) else (np.nan,) * 3
        usual = (low, middle, high) if len(decided) else None
        reason = common[0][0] if common else ""
        failed = len({batches[row] for row in rows if outcomes[row] == "fail"})
        seen.setdefault(rule, {})[column] = Seen(len(rows), len(undecided), reason, failed, usual)
    return seen


def in_figures(trial: Trial, name: str, *, values: bool) -> list[str]:
    """What a rule did in the rehearsal, in sentences for its comment.

    Args:
        trial: the rehearsal.
        name: the rule.
        values: its bound comes from them: tell the values observed, and its share of the budget.
    """
    said: list[str] = []
    line = trial.lines.get(name)
    seen = trial.seen.get(name, {})
    if line is None:
        return said
    usual = [
        (f"{column} " if len(seen) > 1 and column else "")
        + f"{_number(one.usual[1])} in the middle, {_number(one.usual[0])} to {_number(one.usual[2])} in nine of ten"
        for column, one in seen.items()
        if one.usual is not None
    ]
    batches = trial.told.batches
    if usual and values:
        said.append(f"History's last {counted(batches, 'batch')}: {'; '.join(usual)}.")
    for column, one in seen.items():
        if OFTEN * one.records < one.undecided <= one.records:
            where = f" on {column}" if len(seen) > 1 and column else ""
            said.append(f"Undecided in {one.undecided / one.records:.0%} of its records{where}: {one.reason}")
    if line.rule.false_alarm > 0 and values:
        verb = "held" if line.rule.otherwise == "hold" else "failed"
        times = counted(line.false_holds, "time")
        said.append(f"It {verb} {times} where its risk allows {line.share:.2g}{_dates(trial.dates[name])}.")
    elif trial.dates[name]:
        said.append(f"Failed in {counted(len(trial.dates[name]), 'batch')}{_dates(trial.dates[name])}.")
    return said


def _dates(dates: tuple[str, ...]) -> str:
    if not dates:
        return ""
    more = f" and {len(dates) - DATES} more" if len(dates) > DATES else ""
    return f": {', '.join(dates[:DATES])}{more}"


def counted(many: int, what: str) -> str:
    """A number of things: 1 batch, 2 batches."""
    return f"{many} {what if many == 1 else what + ('es' if what.endswith('ch') else 's')}"


def _number(value: float) -> str:
    return f"{value:.3g}"
