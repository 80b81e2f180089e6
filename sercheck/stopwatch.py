"""Seconds by stage of one judgement, told only when asked for; depends on nothing of ours.

A stage lasts until the next one begins. Where nobody asked, beginning one costs a look at a context variable.
"""

from __future__ import annotations

import time
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from contextvars import ContextVar
from dataclasses import dataclass


@dataclass(frozen=True)
class Timing:
    """What one stage took.

    Attributes:
        stage: its name; ``measure NAME`` is the rule of that name, whose transforms count for the first rule that asks
            for them.
        cpu: seconds of processor of this process (all its threads), or of all workers together.
        wall: seconds on the clock; of stages that workers did side by side the sum over them.
    """

    stage: str
    cpu: float
    wall: float


class Stopwatch:
    """Adds up what the stages take, in the order in which they first began."""

    def __init__(self) -> None:
        self._spent: dict[str, tuple[float, float]] = {}
        self._stage: str | None = None
        self._began = (0.0, 0.0)

    def begin(self, stage: str | None) -> None:
        """End the stage that is running and begin another (None: none)."""
        now = time.process_time(), time.perf_counter()
        if self._stage is not None:
            self._add(self._stage, now[0] - self._began[0], now[1] - self._began[1])
        if stage is not None:
            self._add(stage, 0.0, 0.0)
        self._stage, self._began = stage, now

    def add(self, timings: Iterable[Timing]) -> None:
        """Take in what somebody else measured."""
        for each in timings:
            self._add(each.stage, each.cpu, each.wall)

    def timings(self) -> tuple[Timing, ...]:
        """What every stage took so far; the one that is running goes on."""
        self.begin(self._stage)
        return tuple(Timing(stage, cpu, wall) for stage, (cpu, wall) in self._spent.items())

    def _add(self, stage: str, cpu: float, wall: float) -> None:
        before = self._spent.get(stage, (0.0, 0.0))
        self._spent[stage] = (before[0] + cpu, before[1] + wall)


_RUNNING: ContextVar[Stopwatch | None] = ContextVar("stopwatch", default=None)


@contextmanager
def timed(*, asked: bool = True) -> Iterator[Stopwatch | None]:
    """Time the stages that begin inside; one that runs already goes on, and without ``asked`` there is none."""
    running = _RUNNING.get()
    if running is not None or not asked:
        yield running
        return
    watch = Stopwatch()
    token = _RUNNING.set(watch)
    try:
        yield watch
    finally:
        _RUNNING.reset(token)


def begin(stage: str) -> None:
    """A stage begins, and the one before ends, if anybody asked."""
    watch = _RUNNING.get()
    if watch is not None:
        watch.begin(stage)


def add(timings: Iterable[Timing]) -> None:
    """Take in what workers measured, if anybody asked."""
    watch = _RUNNING.get()
    if watch is not None:
        watch.add(timings)


def asked() -> bool:
    """Somebody wants to know."""
    return _RUNNING.get() is not None


def timings() -> tuple[Timing, ...]:
    """What every stage took so far; nothing where nobody asked."""
    watch = _RUNNING.get()
    return () if watch is None else watch.timings()
