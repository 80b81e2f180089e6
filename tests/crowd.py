"""Many gates at once, on one feed and on twenty: is anything lost, doubled or mixed, does anybody wait for ever?

    python -m tests.crowd --gates 10000 --at-once 20 --ledger both

Every batch is judged by two processes, so half of all gates meet a judgement that is there or being stored. A batch's
decision is known beforehand and its records (of up to 500 batches) from a judgement that is not kept; what the gates
answer and what the ledger and the archive have in the end is compared with them, and the store is verified.
"""

from __future__ import annotations

import argparse
import multiprocessing
import tempfile
import time
import traceback
from collections import Counter
from contextlib import ExitStack
from dataclasses import dataclass
from hashlib import blake2b
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

import sercheck
from sercheck.store.archive import Archive
from sercheck.store.ledger import open_ledger
from sercheck.verify import verify
from tests.servers import databases

RULES = """
feed: {feed}
columns: {{time: at, values: [x]}}
every: 1h
batch_every: 1D
false_alarm: 0.001
baseline: {{refresh: 36500D}}
rules:
  - {{name: in range, measure: rate, of_rows: {{outside: [0, 100]}}, stays: {{below: 0}}}}
  - {{name: no hour twice, measure: spacing, look: doubles, stays: {{below: 1}}}}
  - {{name: all there, measure: completeness, stays: {{above: 0.99}}}}
"""
AS_OF = "2050-01-01T00:00:00Z"
WRONG = 7
"""Every so many days a batch is held."""
DEADLINE = 3600.0
"""Seconds after which a gate that has not answered is stuck."""


@dataclass(frozen=True)
class Task:
    """One batch of one feed."""

    feed: str
    day: int

    def rows(self) -> pd.DataFrame:
        """A day of hours; some days have a value out of range, so that they are held."""
        rng = np.random.default_rng([self.day, len(self.feed), *self.feed.encode()])
        stamps = pd.date_range(pd.Timestamp("2000-01-01", tz="UTC") + pd.Timedelta(days=self.day), periods=24, freq="h")
        values = rng.uniform(10, 90, 24)
        values[7] = 500.0 if self.day % WRONG == 0 else values[7]
        return pd.DataFrame({"at": stamps, "x": values})

    def judged(self, **where: Any) -> sercheck.Verdict:
        """The gate's answer."""
        return sercheck.gate(RULES.format(feed=self.feed), self.rows(), as_of=AS_OF, **where)


OWN = [
    "feed", "batch_id", "rule", "series", "window_start", "window_end", "n", "n_missing", "observed", "bound",
    "outcome",
]  # fmt: skip
"""What a record says of the batch alone; the rest depends on which batches were let in by then."""


def digest(table: Any, columns: list[str] | None = None) -> str:
    """The records as a number."""
    frame = table.to_frame()
    frame = frame[columns] if columns else frame
    return blake2b(frame.to_csv(index=False).encode(), digest_size=8).hexdigest()


def _work(tasks: list[Task], where: dict[str, Any], start: Any, answers: Any) -> None:
    try:
        start.wait()
        for task in tasks:
            verdict = task.judged(**where)
            answers.put((task, verdict.batch_id, verdict.decision, digest(verdict.table)))
    except BaseException:  # told to the parent, whatever it is
        answers.put(traceback.format_exc())
    answers.put(None)


def crowd(store: Path, ledger: str | None, feeds: int, batches: int, at_once: int, seed: int = 1) -> dict[str, float]:
    """Judge ``batches`` batches of ``feeds`` feeds, each twice, and compare; the figures.

    Raises:
        AssertionError: something was lost, doubled or mixed, or a gate ended in trouble.
    """
    where = {"store": str(store), "ledger": ledger}
    tasks = [Task(f"feed_{number % feeds}", 3 + number // feeds) for number in range(batches)]
    for feed in dict.fromkeys(task.feed for task in tasks):  # two days before, so that all judge against one baseline
        Task(feed, 1).judged(**where)
        Task(feed, 2).judged(**where)
    chance = np.random.default_rng(seed)
    both = [part[place] for part in _parts([*tasks]) for place in chance.permutation(len(part))]
    fork = multiprocessing.get_context("fork")
    start, answers = fork.Barrier(at_once), fork.Queue()
    workers = [
        fork.Process(target=_work, args=(both[number::at_once], where, start, answers)) for number in range(at_once)
    ]  # fmt: skip
    began = time.perf_counter()
    for worker in workers:
        worker.start()
    said: list[tuple[Task, str, str, str]] = []
    done, troubles = 0, []
    while done < at_once:
        answer = answers.get(timeout=DEADLINE)
        done += answer is None
        troubles += [answer] if isinstance(answer, str) else []
        said += [answer] if isinstance(answer, tuple) else []
    for worker in workers:
        worker.join()
    took = time.perf_counter() - began
    assert not troubles, f"{len(troubles)} workers ended in trouble, the first: {troubles[0]}"
    assert len(said) == 2 * batches
    _compare(store, ledger, tasks, said)
    return {"gates": len(said), "batches": batches, "seconds": took, "gates_a_second": len(said) / took}


def _parts(tasks: list[Task]) -> list[list[Task]]:
    """Each batch twice, a hundred batches at a time: none may come a year before the one let in last."""
    return [tasks[first : first + 100] * 2 for first in range(0, len(tasks), 100)]


def _compare(store: Path, ledger: str | None, tasks: list[Task], said: list[tuple[Task, str, str, str]]) -> None:
    by_task: dict[Task, set[tuple[str, str, str]]] = {}
    for task, *answer in said:
        by_task.setdefault(task, set()).add(tuple(answer))
    split = {task: answers for task, answers in by_task.items() if len(answers) != 1}
    assert not split, f"{len(split)} batches got two answers, such as {next(iter(split.items()))}"
    with open_ledger(str(store), ledger) as kept:
        found = {each.batch.batch_id: each for each in kept.batches()}
        doubled = [name for name, each in found.items() if len(each.judgements) != 1]
        assert not doubled, f"{len(doubled)} batches were judged twice, such as {doubled[0]}"
        states = {feed: Archive(store / "archive", feed).log() for feed in {task.feed for task in tasks}}
        for number, task in enumerate(tasks):
            ((batch_id, decision, told),) = by_task[task]
            records = kept.records(batch_id)
            assert decision == ("held" if task.day % WRONG == 0 else "released"), task
            if number % (1 + len(tasks) // 500) == 0:
                alone = task.judged()
                assert (alone.batch_id, alone.decision) == (batch_id, decision), task
                assert digest(alone.table, OWN) == digest(records, OWN), task
            assert found.pop(batch_id).last.decision == decision
            assert digest(records) == told, task
            assert states[task.feed].states[batch_id].what == decision, task
        faults = verify(kept, store / "archive").faults
        assert not faults, f"{len(faults)} faults, the first: {faults[0].sentence()}"
    assert len(found) == 2 * len(states), f"the ledger has {len(found)} batches that nobody asked for"
    for feed, log in states.items():
        wanted = 2 + sum(task.feed == feed for task in tasks)
        entries = Counter(entry.batch_id for entry in log.entries)
        assert len(entries) == wanted, f"{feed}: {len(entries)} batches in the archive instead of {wanted}"


def main() -> None:
    """Run both crowds against each kind of ledger and print the figures."""
    parser = argparse.ArgumentParser(prog="python -m tests.crowd", description=__doc__)
    parser.add_argument("--gates", type=int, default=10_000)
    parser.add_argument("--at-once", type=int, default=20)
    parser.add_argument("--ledger", choices=["sqlite", "postgresql", "both"], default="both")
    asked = parser.parse_args()
    kinds = ["sqlite", "postgresql"] if asked.ledger == "both" else [asked.ledger]
    each = asked.gates // len(kinds)
    with ExitStack() as stack, tempfile.TemporaryDirectory() as folder:
        new = stack.enter_context(databases()) if "postgresql" in kinds else None
        for kind in kinds:
            for feeds, share in ((1, 0.1), (20, 0.9)):
                url = new() if kind == "postgresql" and new else None
                store = Path(folder) / f"{kind}-{feeds}"
                told = crowd(store, url, feeds, round(each * share / 2), asked.at_once)
                print(
                    f"{kind}, {feeds} feed(s): {told['gates']:.0f} gates of {told['batches']:.0f} batches, "
                    f"{asked.at_once} at once, {told['seconds']:.0f} s, nothing lost, doubled or mixed",
                    flush=True,
                )


if __name__ == "__main__":
    main()
