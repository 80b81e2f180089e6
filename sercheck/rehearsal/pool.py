"""Work shared among processes: each loads the feed once, from files that all of them map; depends on ``bench``.

Processes are started afresh (spawned), so that neither threads nor locks of the parent are copied; on Ctrl-C the parent
alone decides what is kept.
"""

from __future__ import annotations

import os
import signal
import tempfile
from collections.abc import Iterator, Mapping, Sequence
from concurrent.futures import Future, ProcessPoolExecutor
from contextlib import contextmanager
from dataclasses import dataclass, field
from multiprocessing import active_children, get_context
from pathlib import Path
from typing import Protocol

from sercheck.record import Records
from sercheck.rehearsal.bench import Bench, Judgement, Marks, Outcome
from sercheck.rehearsal.damage import Case
from sercheck.rehearsal.feed import Feed

THREADS = ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS")
"""What tells the linear algebra how many threads to take: one each, where every core has a process."""


@dataclass
class Kept:
    """Records of judgements on their way to a file, in parts: the memory of a process stays small.

    Attributes:
        folder: where the parts go.
        parts: tables not yet written.
        written: how many were.
    """

    folder: Path
    parts: list[object] = field(default_factory=list)
    written: int = 0

    def __call__(self, table: Records, tags: Mapping[str, object]) -> None:
        from sercheck.rehearsal.parts import tagged

        self.parts.append(tagged(table, tags))

    def flush(self) -> None:
        """Write what there is as one part."""
        from sercheck.rehearsal.parts import write_part

        if self.parts:
            write_part(self.parts, self.folder / f"part-{os.getpid()}-{self.written:06d}.parquet")
            self.written += 1
            self.parts.clear()


@dataclass(frozen=True)
class Setting:
    """What a process needs to judge: the feed (its arrays in ``folder``), and where records go."""

    feed: Feed
    folder: Path
    look: int
    records: Path | None


@dataclass(frozen=True)
class Play:
    """Faults that begin in one batch."""

    cases: tuple[Case, ...]
    start: int
    marks: Marks
    batches: int
    seed: int


class Worker:
    """One feed on its bench, with a place for records."""

    def __init__(self, feed: Feed, look: int, records: Path | None) -> None:
        self.kept = None if records is None else Kept(records)
        self.bench = Bench(feed, look, self.kept)

    def judge(self, batch: int, marks: Marks) -> Judgement:
        """Judge a batch; whether that stands is known when those before it are judged."""
        return self.bench.judge(batch, marks)

    def play(self, play: Play) -> list[Outcome]:
        """Let faults begin."""
        told = self.bench.play(play.cases, play.start, play.marks, play.batches, play.seed)
        self._flush()
        return told

    def record(self, batches: Sequence[int], marks: Marks) -> int:
        """Judge batches once more, now that their marks are known, and hand their records on."""
        for batch in batches:
            self.bench.judge(batch, marks, kept=True)
        self._flush()
        return len(batches)

    def _flush(self) -> None:
        if self.kept is not None:
            self.kept.flush()


class Pool(Protocol):
    """Where work is done: here, or in processes."""

    size: int

    def judge(self, batch: int, marks: Marks) -> Future[Judgement]:
        """Judge a healthy batch."""

    def record(self, batches: Sequence[int], marks: Marks) -> Future[int]:
        """Keep the records of healthy batches."""

    def play(self, play: Play) -> Future[list[Outcome]]:
        """Let faults begin in a batch."""


class Here:
    """No process but this one: work is done when it is asked for."""

    size = 1

    def __init__(self, feed: Feed, look: int, records: Path | None) -> None:
        self._worker = Worker(feed, look, records)

    def judge(self, batch: int, marks: Marks) -> Future[Judgement]:
        done: Future[Judgement] = Future()
        done.set_result(self._worker.judge(batch, marks))
        return done

    def record(self, batches: Sequence[int], marks: Marks) -> Future[int]:
        done: Future[int] = Future()
        done.set_result(self._worker.record(batches, marks))
        return done

    def play(self, play: Play) -> Future[list[Outcome]]:
        done: Future[list[Outcome]] = Future()
        done.set_result(self._worker.play(play))
        return done


class Processes:
    """As many processes as asked for."""

    def __init__(self, executor: ProcessPoolExecutor, size: int) -> None:
        self._executor, self.size = executor, size

    def judge(self, batch: int, marks: Marks) -> Future[Judgement]:
        return self._executor.submit(_judge, batch, marks)

    def record(self, batches: Sequence[int], marks: Marks) -> Future[int]:
        return self._executor.submit(_record, batches, marks)

    def play(self, play: Play) -> Future[list[Outcome]]:
        return self._executor.submit(_play, play)


@contextmanager
def pool(feed: Feed, look: int, workers: int, records: Path | None) -> Iterator[Pool]:
    """Where the work of a rehearsal is done.

    Args:
        feed: the feed with its arrays.
        look: batches over which a rule's longer look rests.
        workers: processes; with 1 all is done in this one.
        records: folder for the parts of the records, or None.
    """
    if workers == 1:
        yield Here(feed, look, records)
        return
    with tempfile.TemporaryDirectory(prefix="sercheck-") as name, _one_thread_each():
        setting = Setting(feed.save(Path(name)), Path(name), look, records)
        others = set(active_children())
        executor = ProcessPoolExecutor(workers, get_context("spawn"), _begin, (setting,))
        try:
            yield Processes(executor, workers)
        except BaseException:  # nobody waits for what is not finished
            for child in set(active_children()) - others:
                child.terminate()
            raise
        finally:
            executor.shutdown(wait=True, cancel_futures=True)


@contextmanager
def _one_thread_each() -> Iterator[None]:
    """Processes that start meanwhile take one thread each for linear algebra, unless the user said otherwise."""
    mine = [name for name in THREADS if name not in os.environ]
    os.environ.update(dict.fromkeys(mine, "1"))
    try:
        yield
    finally:
        for name in mine:
            os.environ.pop(name, None)


class _Own:
    """The worker of this process."""

    worker: Worker | None = None


def _begin(setting: Setting) -> None:
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    _Own.worker = Worker(setting.feed.load(setting.folder), setting.look, setting.records)


def _own() -> Worker:
    assert _Own.worker is not None
    return _Own.worker


def _judge(batch: int, marks: Marks) -> Judgement:
    return _own().judge(batch, marks)


def _play(play: Play) -> list[Outcome]:
    return _own().play(play)


def _record(batches: Sequence[int], marks: Marks) -> int:
    return _own().record(batches, marks)
