"""Rules tried, let note or left out until a draft keeps its alarm budget; depends on the trial."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import TYPE_CHECKING

from sercheck.drafting.entry import Entry, LeftOut
from sercheck.drafting.shape import Shape
from sercheck.drafting.text import written
from sercheck.drafting.trial import Trial, in_figures, try_out

if TYPE_CHECKING:
    from sercheck.verdict import Rows

MOST_ROUNDS = 6
"""Rehearsals at most: what each lets note or leaves out gives the others more risk, so they are tried again."""


class Maker:
    """The rules of a draft while they are chosen.

    Attributes:
        entries: the rules that are in.
        left: those that are out.
        trial: the last rehearsal, of the rules as they are now; None before one.
        within: it kept the alarm budget, and every rule its share.
    """

    def __init__(
        self, shape: Shape, budget: str | None, history: Rows, workers: int, tell: Callable[[float, str], None] | None
    ) -> None:
        self.shape, self.budget, self.history, self.workers, self.tell = shape, budget, history, workers, tell
        self.entries: list[Entry] = []
        self.left: list[LeftOut] = []
        self.trial: Trial | None = None
        self.within = False

    def only_note(self, batches: int) -> None:
        """History is too short for rules that compare with it to hold anything."""
        why = (
            f"It only notes until history holds {self.shape.fewest} batches ({batches} now): before that it takes the "
            "feed for stationary, and real feeds are not. Then draft again."
        )
        self.entries = [
            replace(one, otherwise="note", why=(*one.why, why)) if one.like_history and self.shape.batch_every else one
            for one in self.entries
        ]

    def rehearse(self, begins: str, *, many: bool) -> None:
        """Rehearse, and change the rules by what came of it, until nothing is left to change.

        Args:
            begins: the local date from which batches are judged.
            many: enough batches are judged to count false holds; else only rules that decide nothing are left out.
        """
        for round_ in range(MOST_ROUNDS):
            text = written(self.shape, self.budget, ["-"], self.entries, [], [])
            self.trial = try_out(text, self.history, begins, self.workers, self.tell)
            changed = self._leave_out_the_silent()
            noted = self.trial.too_often if many else []
            if many and not changed and not noted and not self.trial.within and self.trial.noisiest:
                noted = [self.trial.noisiest]
            if not changed and not noted:
                self.within = self.trial.within
                return
            self._let_note(noted)
            if not many and round_:
                return
        text = written(self.shape, self.budget, ["-"], self.entries, [], [])
        self.trial = try_out(text, self.history, begins, self.workers, self.tell)
        self.within = self.trial.within

    def _leave_out_the_silent(self) -> bool:
        """Take out what can decide next to nothing; True if anything went."""
        assert self.trial is not None
        kept: list[Entry] = []
        for one in self.entries:
            seen = self.trial.seen.get(one.name, {})
            silent = {column: told for column, told in seen.items() if told.silent}
            if not one.like_history or not silent:
                kept.append(one)
                continue
            rest = tuple(column for column in one.columns if column not in silent)
            where = f" on {', '.join(silent)}" if rest else ""
            reason = next(iter(silent.values())).reason.rstrip(".")
            share = sum(told.undecided for told in silent.values()) / sum(told.records for told in silent.values())
            self.left.append(LeftOut(f"{one.name}{where}", f"undecided in {share:.0%} of its records: {reason}"))
            if rest:
                kept.append(replace(one, columns=rest))
        changed = kept != self.entries
        self.entries = kept
        return changed

    def _let_note(self, names: list[str]) -> None:
        assert self.trial is not None
        entries: list[Entry] = []
        for one in self.entries:
            if one.name in names:
                line, dates = self.trial.lines[one.name], self.trial.dates[one.name]
                why = (
                    f"It only notes: rehearsed, it held {line.false_holds} times where its risk allows "
                    f"{line.share:.2g} ({', '.join(dates[:6])}{' …' if len(dates) > 6 else ''}). If "
                    "those were events, name them closed_days and let it hold."
                )
                noisy = _noisy(one, self.trial)
                rest = tuple(column for column in one.columns if column not in noisy)
                if rest:
                    entries.append(replace(one, columns=rest))
                name = f"{one.name} ({', '.join(noisy)})" if rest else one.name
                entries.append(replace(one, name=name, columns=noisy, otherwise="note", why=(*one.why, why)))
            else:
                entries.append(one)
        self.entries = entries

    def commented(self) -> list[Entry]:
        """The rules with what the rehearsal showed in their comments."""
        if self.trial is None:
            return self.entries
        trial = self.trial
        return [
            replace(one, why=(*one.why, *in_figures(trial, one.name, values=one.like_history))) for one in self.entries
        ]


def _noisy(entry: Entry, trial: Trial) -> tuple[str, ...]:
    """The value columns on which a rule failed as often as on half of the worst; the others may go on holding."""
    failed = {column: told.failed for column, told in trial.seen.get(entry.name, {}).items()}
    most = max(failed.values(), default=0)
    return tuple(column for column in entry.columns if failed.get(column, 0) >= max(most / 2, 1)) or entry.columns
