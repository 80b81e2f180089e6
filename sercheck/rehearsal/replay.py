"""Replays a history batch by batch, healthy and then with faults put in; depends on the files beside this one.

A batch that is held counts as let in by a person right after, as history says it was: it stays in level and profile,
leaves the histories of memory, cycle and phase, and the longer look of the rule that held it rests for seven batches.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import Future, as_completed
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from sercheck.errors import UsageError
from sercheck.history import LOOK
from sercheck.rehearsal.bench import Judgement, Marks, Outcome
from sercheck.rehearsal.damage import Case, known_faults, possible
from sercheck.rehearsal.deliveries import Delivery
from sercheck.rehearsal.faults import Fault
from sercheck.rehearsal.feed import Feed
from sercheck.rehearsal.pool import Play, Pool, pool

if TYPE_CHECKING:
    from collections.abc import Collection

AHEAD = 2
"""Batches a process that are judged before it is known that none of those before them is held."""
CHUNK = 48
"""Series that are hit in one piece of work, about: few enough to be lost, enough to share what is measured."""
RECORDED = 8
"""Healthy batches whose records are kept in one piece of work."""

Tell = Callable[[float, str], None]
"""Takes the share of the work that is done and what is being done."""


@dataclass(frozen=True)
class Plan:
    """What is asked of a rehearsal.

    Attributes:
        faults: names of the faults, in order; None for all.
        sizes: sizes for each of them; None for those of the catalogue.
        tries: batches that each fault is put into.
        batches: for how many batches a fault is let go on.
        seed: of all that is drawn.
    """

    faults: tuple[str, ...] | None = None
    sizes: tuple[float, ...] | None = None
    tries: int = 4
    batches: int = 7
    seed: int = 1


@dataclass(frozen=True)
class Replayed:
    """What was replayed.

    Attributes:
        healthy: the batches as they were delivered, in order.
        outcomes: what became of each fault.
        starts: the batches in which faults began.
        planned: healthy batches and faults that were to be tried.
        finished: nothing was interrupted.
    """

    healthy: tuple[Judgement, ...]
    outcomes: tuple[Outcome, ...]
    starts: tuple[int, ...]
    planned: tuple[int, int]
    finished: bool


def replay(feed: Feed, asked: Plan, workers: int, tell: Tell, records: Path | None = None) -> Replayed:
    """Replay a feed.

    Args:
        feed: the history cut into batches.
        asked: which faults, how often.
        workers: processes.
        tell: is told how far the work is.
        records: a folder for the parts of the records, or None.

    An interrupt (Ctrl-C) ends the replay and what is finished is returned; before the first batch it goes on up.
    """
    faults = wanted(asked.faults)
    cases = cases_of(faults, asked, len(feed.keys))
    healthy: list[Judgement] = []
    outcomes: list[Outcome] = []
    starts: tuple[int, ...] = ()
    planned = len(cases) * min(asked.tries, len(feed.judged))
    whole = len(feed.judged) * len(feed.keys)
    all_work = whole + sum(_work(case, feed) for case in cases) * min(asked.tries, len(feed.judged))
    done = 0.0
    finished = False
    try:
        with pool(feed, LOOK, workers, records) as work:
            for judged in judge_all(feed, work):
                healthy.append(judged)
                done += len(feed.keys)
                tell(done / all_work, f"{len(healthy)} of {len(feed.judged)} healthy batches")
            marks = marks_of(healthy)
            if records is not None:
                pieces = [list(feed.judged)[k : k + RECORDED] for k in range(0, len(feed.judged), RECORDED)]
                for future in as_completed([work.record(piece, marks) for piece in pieces]):
                    future.result()
            starts = draw_starts(feed, healthy, asked)
            planned = len(cases) * len(starts)
            all_work = whole + sum(_work(case, feed) for case in cases) * len(starts)
            for part, play in _plays(_pieces(cases, len(feed.keys)), starts, marks, asked, work):
                outcomes += part
                done += sum(_work(case, feed) for case in play.cases)
                tell(min(done / all_work, 1.0), f"{len(outcomes)} of {planned} faults")
        finished = True
    except KeyboardInterrupt:
        if not healthy:
            raise
    order = {fault.name: place for place, fault in enumerate(faults)}
    outcomes.sort(key=lambda one: (order[one.fault], one.every, one.size, one.number))
    return Replayed(tuple(healthy), tuple(outcomes), starts, (len(feed.judged), planned), finished)


def wanted(names: Collection[str] | None) -> list[Fault | Delivery]:
    """The faults of these names, in their order; all where there are none.

    Raises:
        UsageError: there is no such fault.
    """
    known = known_faults()
    if names is None:
        return list(known.values())
    strange = [name for name in names if name not in known]
    if strange:
        from difflib import get_close_matches

        near = get_close_matches(strange[0], known, 1)
        raise UsageError(
            "--faults", f"there is no fault '{strange[0]}'", ", ".join(known),
            f"Is '{near[0]}' meant?" if near else "",
        )  # fmt: skip
    return [known[name] for name in names]


def cases_of(faults: Sequence[Fault | Delivery], asked: Plan, series: int) -> list[Case]:
    """Every fault at every size: in one series at the sizes of its curve, in all series at its usual sizes."""
    cases = []
    for fault in faults:
        curve = (fault.curve if isinstance(fault, Fault) else ()) or fault.sizes
        for every in (False, True):
            if possible(fault, every=every, series=series):
                sizes = asked.sizes or (fault.sizes if every else curve)
                cases += [Case(fault, size, every, 0) for size in sizes]
    return cases


def _work(case: Case, feed: Feed) -> float:
    """What a fault costs beside a series of a healthy batch, roughly (measured: causes take longer than measuring)."""
    return 4.0 + (3.0 * len(feed.keys) if case.every else 0.0)


def judge_all(feed: Feed, work: Pool) -> Iterator[Judgement]:
    """Judge every batch in order, each as the decisions before it want.

    With several processes some batches ahead are judged as if none before them were held; where one is, they are judged
    anew. Where most are held nothing is judged ahead.
    """
    done: list[Judgement] = []
    waiting: dict[int, Future[Judgement]] = {}
    for batch in feed.judged:
        marks = marks_of(done)
        often = sum(bool(one.held_by) for one in done[-8:]) > 4
        ahead = 1 if work.size == 1 or often else AHEAD * work.size
        for other in range(batch, min(batch + ahead, len(feed.edges))):
            if other not in waiting:
                waiting[other] = work.judge(other, marks)
        judged = waiting.pop(batch).result()
        if judged.held_by:
            for future in waiting.values():
                future.cancel()
            waiting.clear()
        done.append(judged)
        yield judged


def marks_of(judged: Sequence[Judgement]) -> Marks:
    """What the ledger knows after these batches."""
    held = [one for one in judged if one.held_by]
    return Marks(tuple(one.batch for one in held), {one.batch: frozenset(one.held_by) for one in held})


def draw_starts(feed: Feed, healthy: Sequence[Judgement], asked: Plan) -> tuple[int, ...]:
    """Batches in which faults begin: healthy ones, followed by as many that are not held as a fault may go on.

    Where there are none so quiet, any that was not held.
    """
    held = {one.batch for one in healthy if one.held_by}
    free = [one.batch for one in healthy if one.batch not in held]
    last = len(feed.edges) - asked.batches
    quiet = [batch for batch in free if batch <= last and not held & set(range(batch, batch + asked.batches))]
    able = np.array(quiet or free, dtype=np.int64)
    drawn = np.random.default_rng([asked.seed, 0]).permutation(len(able))[: asked.tries]
    return tuple(able[np.sort(drawn)].tolist())


def _pieces(cases: Sequence[Case], series: int) -> list[list[Case]]:
    """Cases that are let begin in one piece of work."""
    ways = ((False, CHUNK), (True, max(1, CHUNK // max(series, 1))))
    kinds = [([case for case in cases if case.every == every], size) for every, size in ways]
    return [kind[k : k + size] for kind, size in kinds for k in range(0, len(kind), size)]


def _plays(
    pieces: Sequence[Sequence[Case]], starts: Sequence[int], marks: Marks, asked: Plan, work: Pool
) -> Iterator[tuple[list[Outcome], Play]]:
    """Let all faults begin in all starts; as pieces of work come back."""
    plays = [
        Play(tuple(replace(case, number=number) for case in piece), start, marks, asked.batches, asked.seed)
        for number, start in enumerate(starts)
        for piece in pieces
    ]
    if work.size == 1:
        for play in plays:
            yield work.play(play).result(), play
        return
    waiting = {work.play(play): play for play in plays}
    for future in as_completed(waiting):
        yield future.result(), waiting[future]
