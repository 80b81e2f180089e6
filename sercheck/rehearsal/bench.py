"""Judges replayed batches, healthy and with faults put in, by the same line as ``gate``.

Series that a fault does not hit are measured once for all faults; those that it hits are measured together with those
of other faults in one block. Depends on ``engine``, ``collect`` and the files beside this one.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from hashlib import blake2b

import numpy as np

from sercheck import __version__
from sercheck.collect import Common, actions, records
from sercheck.counted import Facts
from sercheck.engine import Run, chosen_series, decide, look_at_block, name_causes
from sercheck.grid import Grid, Tally
from sercheck.judge import Seen
from sercheck.measures import get
from sercheck.record import Records, utc_text
from sercheck.rehearsal.damage import Broken, Case, broken, hit, nothing_changed
from sercheck.rehearsal.feed import Feed
from sercheck.rehearsal.mixed import Source, known, mixed, unsaid
from sercheck.rulebook.compiled import Rulebook
from sercheck.serial.arrays import Ints
from sercheck.verdict import Verdict

TOGETHER = 240
"""Broken series measured in one block, about (ours: where a block costs no less a series than a larger one)."""
KEPT_BYTES = 400_000_000
"""Memory for measurements of healthy batches that are kept for the next faults (ours)."""
COPIES = 12
"""Arrays as large as a batch with its history that its measurements hold on to, about (counted on the demo)."""
TAGS = ("fault", "size", "try", "series_hit", "began")
"""What stands beside the records of a rehearsal, after ``batch``; null where a batch is healthy."""


@dataclass(frozen=True)
class Marks:
    """What the ledger would know before a batch.

    Attributes:
        held: batches that were held and then let in by a person.
        by: names of the rules that held each of them.
    """

    held: tuple[int, ...] = ()
    by: Mapping[int, frozenset[str]] = field(default_factory=dict)

    def rests(self, batch: int, look: int) -> frozenset[str]:
        """Rules that held one of the last ``look`` batches."""
        return frozenset().union(*(self.by[one] for one in self.held if batch - look <= one < batch))

    def before(self, batch: int) -> tuple[int, ...]:
        """The held batches before one."""
        return tuple(one for one in self.held if one < batch)


@dataclass(frozen=True)
class Judgement:
    """What became of one batch.

    Attributes:
        batch: its number in the feed.
        held_by: rules that held it.
        failed: rules that failed, those that only note among them.
        undecided: records that could not be decided, by rule.
        records: records, by rule.
        cause: what was told as the likely cause, or None.
    """

    batch: int
    held_by: tuple[str, ...]
    failed: tuple[str, ...]
    undecided: Mapping[str, int]
    records: Mapping[str, int]
    cause: str | None


@dataclass(frozen=True)
class Outcome:
    """What became of one fault.

    Attributes:
        fault, size, cause: as the catalogue says.
        series: series that were hit.
        every: all of them.
        number: which try.
        batch: the batch that it began in.
        looked: batches that were judged.
        delay: batches after the first until one was held; None when none was.
        caught_by: rules that held it.
        named: the cause that was told, or None.
    """

    fault: str
    size: float
    cause: str
    series: int
    every: bool
    number: int
    batch: int
    looked: int
    delay: int | None
    caught_by: tuple[str, ...]
    named: str | None

    @property
    def right(self) -> bool:
        """The right cause was named."""
        return self.named is not None and self.named.startswith(self.cause)


Keep = Callable[[Records, Mapping[str, object]], None]
"""Takes the records of a judgement and what is to stand beside them."""


@dataclass
class _Trial:
    """A case in the making: the series it hits (places among all of the feed) and what was delivered so far."""

    case: Case
    series: Ints
    days: dict[int, Broken]
    judged: Judgement | None = None
    idle: bool = False


class Bench:
    """One feed, ready to be judged batch by batch."""

    def __init__(self, feed: Feed, look: int, keep: Keep | None = None) -> None:
        self.feed, self.look, self.keep = feed, look, keep
        book = feed.book
        self._alone = [place for place, rule in enumerate(book.rules) if not get(rule.measure).compares_series]
        self._compared = [place for place in range(len(book.rules)) if place not in self._alone]
        self._known: dict[tuple[int, tuple[int, ...], frozenset[str]], list[Seen]] = {}

    @cached_property
    def _most_known(self) -> int:
        cells = len(self.feed.keys) * max(int(self.feed.edges[-1, 1]) - self.feed.reach(len(self.feed.edges) - 1), 1)
        return max(1, KEPT_BYTES // (8 * COPIES * cells))

    # -- healthy batches ---------------------------------------------------------------------------------------------

    def judge(self, batch: int, marks: Marks, *, kept: bool = False) -> Judgement:
        """Judge a batch as it was delivered; ``kept``: what it was judged with stands, and its records are kept."""
        grid, run = self._grid(batch, marks), self._run(batch, marks)
        seen, _ = look_at_block(grid, run)
        return self._judged(batch, name_causes(seen, grid, run), dict.fromkeys(TAGS), kept=kept)

    def _grid(self, batch: int, marks: Marks) -> Grid:
        return self.feed.grid(batch, marks.before(batch))

    def _run(self, batch: int, marks: Marks, rules: Sequence[int] | None = None) -> Run:
        book = self.feed.book
        if rules is not None:
            book = replace(book, rules=tuple(book.rules[place] for place in rules))
        return Run(book, self.feed.cadence, self.feed.due(batch), marks.rests(batch, self.look))

    def _judged(
        self, batch: int, seen: Sequence[Seen], tags: Mapping[str, object], *, kept: bool = True
    ) -> Judgement:
        table = records(self.feed.book, decide(self.feed.book, seen), self._common(batch, tags))
        if self.keep is not None and kept:
            self.keep(table, {"batch": self.feed.began(batch), **tags})
        return told(batch, table, self.feed.book)

    def _common(self, batch: int, tags: Mapping[str, object]) -> Common:
        began = self.feed.began(batch)
        spelled = "|".join(map(str, (self.feed.book.feed, began, *tags.values())))
        own = blake2b(spelled.encode(), digest_size=16).hexdigest()
        return Common(
            feed=self.feed.book.feed,
            batch_id=f"rehearsed-{began}",
            batch_fingerprint=own,
            judged_at=str(utc_text(self.feed.due(batch))[0]),
            rules_fingerprint=self.feed.book.fingerprint,
            baseline_id=None,
            sercheck_version=__version__,
        )

    # -- faults ------------------------------------------------------------------------------------------------------

    def play(self, cases: Sequence[Case], start: int, marks: Marks, batches: int, seed: int) -> list[Outcome]:
        """Let faults begin in a batch and go on until it is held, for so many batches at most.

        Every batch before was let in, the broken ones too: that is what happens where nothing is held. A fault that
        leaves its first batch as it was (equal values in another order) is not tried.
        """
        first = self._grid(start, marks)
        places = np.flatnonzero(self.feed.series(start))
        trials = [_Trial(case, places[rows], {}) for case in cases if len(rows := hit(case, first, seed))]
        last = min(start + batches, len(self.feed.edges))
        for batch in range(start, last):
            trials = [trial for trial in trials if not trial.idle]
            going = [trial for trial in trials if trial.judged is None or not trial.judged.held_by]
            if going:
                self._play_batch(going, start, batch, marks, seed)
        return [self._outcome(trial, start, last - start) for trial in trials if not trial.idle]

    def _play_batch(self, trials: Sequence[_Trial], start: int, batch: int, marks: Marks, seed: int) -> None:
        grid = self._grid(batch, marks)
        at = np.cumsum(self.feed.series(batch)) - 1
        for trial in trials:
            trial.days[batch] = broken(trial.case, grid, at[trial.series], batch - start, seed, self.feed.cadence)
            trial.idle = batch == start and nothing_changed(trial.days[batch], grid, at[trial.series])
        trials = [trial for trial in trials if not trial.idle]
        for group in _groups(trials):
            stacked = self._stacked(group, grid, at, batch)
            seen = [known(one) for one in look_at_block(stacked, self._run(batch, marks, self._alone))[0]]
            edge = 0
            for trial in group:
                rows = np.arange(edge, edge + len(trial.series))
                edge += len(trial.series)
                whole = _with_rows(grid, at[trial.series], stacked, rows)
                parts = self._whole(whole, at[trial.series], stacked, rows, seen, batch, marks)
                if self.keep is None:  # limits are for records only
                    parts = [self._quick(one) for one in parts]
                    if not self._held(parts):
                        continue
                run = self._run(batch, marks)
                tags = _tags(trial.case, len(trial.series), self.feed.began(start))
                trial.judged = self._judged(batch, name_causes(parts, whole, run), tags)

    def _stacked(self, trials: Sequence[_Trial], grid: Grid, at: Ints, batch: int) -> Grid:
        """The series that the trials hit, one below the other, with what was delivered of them so far."""
        low = self.feed.reach(batch)
        rows = np.concatenate([at[trial.series] for trial in trials])
        values = {name: column[rows] for name, column in grid.values.items()}
        delivered = grid.delivered[rows]
        edge = 0
        for trial in trials:
            part = slice(edge, edge + len(trial.series))
            edge = part.stop
            for day, sent in trial.days.items():
                begin, end = (self.feed.edges[day] - low).tolist()
                delivered[part, begin:end] = sent.delivered
                for name, column in sent.values.items():
                    values[name][part, begin:end] = column
        tally = _joined([trial.days[batch].tally for trial in trials])
        return Grid(grid.keys[rows], grid.axis, grid.start, values, delivered, tally)

    def _whole(
        self, whole: Grid, hit_at: Ints, stacked: Grid, rows: Ints, seen: Sequence[Seen], batch: int, marks: Marks
    ) -> list[Seen]:
        """What was seen of a broken batch: its broken series from the block, the others as they were."""
        own = {(self._alone[part.rule], part.column): part for part in seen}
        others = np.setdiff1d(np.arange(len(whole.keys)), hit_at)
        healthy: dict[tuple[int, str | None], Seen] = {}
        if len(others):
            healthy = {(self._alone[part.rule], part.column): part for part in self._healthy(batch, marks)}
        compared: dict[tuple[int, str | None], Seen] = {}
        if self._compared:
            looked, _ = look_at_block(whole, self._run(batch, marks, self._compared))
            compared = {(self._compared[part.rule], part.column): part for part in looked}
        parts = []
        for rule, column in sorted({*own, *healthy, *compared}, key=lambda key: key[0]):
            if (rule, column) in compared:
                parts.append(replace(compared[rule, column], rule=rule))
                continue
            wanted = chosen_series(self.feed.book.rules[rule], whole.keys)
            place = np.cumsum(wanted) - 1
            in_stack = np.cumsum(chosen_series(self.feed.book.rules[rule], stacked.keys)) - 1
            mine, left = wanted[hit_at], others[wanted[others]]
            sources = []
            if mine.any():
                sources.append(Source(own[rule, column], in_stack[rows[mine]], place[hit_at[mine]]))
            if len(left):
                sources.append(Source(healthy[rule, column], place[left], place[left]))
            if sources:
                parts.append(replace(mixed(sources, whole.keys[wanted]), rule=rule))
        return parts

    def _healthy(self, batch: int, marks: Marks) -> list[Seen]:
        """What is seen of the batch as it was delivered, kept for the next faults."""
        key = (batch, marks.before(batch), marks.rests(batch, self.look))
        if key not in self._known:
            while len(self._known) >= self._most_known:
                self._known.pop(next(iter(self._known)))
            seen, _ = look_at_block(self._grid(batch, marks), self._run(batch, marks, self._alone))
            self._known[key] = [known(one) for one in seen]
        return self._known[key]

    def _quick(self, seen: Seen) -> Seen:
        return seen if self.feed.book.rules[seen.rule].matters is not None else unsaid(seen)

    def _held(self, seen: Sequence[Seen]) -> bool:
        rules = self.feed.book.rules
        return any(
            (judged.outcome == outcome).any()
            for judged in decide(self.feed.book, seen)
            for outcome, action in actions(rules[judged.seen.rule]).items()
            if action == "hold"
        )

    def _outcome(self, trial: _Trial, start: int, looked: int) -> Outcome:
        case, judged = trial.case, trial.judged
        held = judged is not None and bool(judged.held_by)
        return Outcome(
            fault=case.fault.name,
            size=case.size,
            cause=case.fault.cause,
            series=len(trial.series),
            every=case.every,
            number=case.number,
            batch=start,
            looked=len(trial.days) if held else looked,
            delay=judged.batch - start if judged is not None and held else None,
            caught_by=judged.held_by if judged is not None else (),
            named=judged.cause if judged is not None and held else None,
        )


def told(batch: int, table: Records, book: Rulebook) -> Judgement:
    """What the records of a judgement say."""
    names = table["rule"]
    held = set(names[table["action"] == "hold"].tolist())
    failed = set(names[table["outcome"] == "fail"].tolist())
    silent = table["outcome"] == "undecided"
    order = [rule.name for rule in book.rules]
    # the verdict ranks the causes; facts are not told here
    causes = Verdict("", "", book.feed, table, Facts("", "", 0, 0)).likely_causes if failed else []
    return Judgement(
        batch=batch,
        held_by=tuple(name for name in order if name in held),
        failed=tuple(name for name in order if name in failed),
        undecided={name: int(np.count_nonzero(silent & (names == name))) for name in order},
        records={name: int(np.count_nonzero(names == name)) for name in order},
        cause=str(causes[0]["cause"]) if causes else None,
    )


def _tags(case: Case, series: int, began: str) -> dict[str, object]:
    values = (case.fault.name, float(case.size), float(case.number), float(series), began)
    return dict(zip(TAGS, values, strict=True))


def _groups(trials: Sequence[_Trial]) -> Iterator[list[_Trial]]:
    """Trials whose series are measured in one block."""
    group: list[_Trial] = []
    rows = 0
    for trial in trials:
        if group and rows + len(trial.series) > TOGETHER:
            yield group
            group, rows = [], 0
        group.append(trial)
        rows += len(trial.series)
    if group:
        yield group


def _with_rows(grid: Grid, places: Ints, stacked: Grid, rows: Ints) -> Grid:
    """The whole batch with its history, the broken series in place of the real ones."""
    values = {}
    for name, column in grid.values.items():
        values[name] = np.array(column)
        values[name][places] = stacked.values[name][rows]
    delivered = np.array(grid.delivered)
    delivered[places] = stacked.delivered[rows]
    return replace(grid, values=values, delivered=delivered, tally=_put(grid.tally, places, stacked.tally, rows))


def _put(tally: Tally, places: Ints, other: Tally, rows: Ints) -> Tally:
    def put(one: Ints, two: Ints) -> Ints:
        out = one.copy()
        out[places] = two[rows]
        return out

    return Tally(
        put(tally.rows, other.rows), put(tally.doubles, other.doubles), put(tally.differing, other.differing),
        put(tally.disorder, other.disorder), put(tally.off_grid, other.off_grid),
        {name: put(counts, other.unreadable[name]) for name, counts in tally.unreadable.items()},
        {name: put(counts, other.infinite[name]) for name, counts in tally.infinite.items()},
        put(tally.newest, other.newest),
    )  # fmt: skip


def _joined(tallies: Sequence[Tally]) -> Tally:
    def joined(name: str) -> Ints:
        return np.concatenate([getattr(tally, name) for tally in tallies])

    columns = tallies[0].unreadable
    return Tally(
        joined("rows"), joined("doubles"), joined("differing"), joined("disorder"), joined("off_grid"),
        {name: np.concatenate([tally.unreadable[name] for tally in tallies]) for name in columns},
        {name: np.concatenate([tally.infinite[name] for tally in tallies]) for name in columns},
        joined("newest"),
    )  # fmt: skip
