"""The most memory and time that reading and judging one batch may take; depends only on ``errors``.

Both are looked at wherever a piece of work ends (a chunk of a file, a block of series, a rule). Where the process has
only its main thread, as on the command line, the operating system helps: memory beyond the limit is refused by it, and
a piece of work that does not end is interrupted. Storing a judgement is never cut short.
"""

from __future__ import annotations

import os
import resource
import signal
import threading
import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from contextvars import ContextVar
from pathlib import Path
from typing import Any, NoReturn

from sercheck.errors import LimitError

ROOM = 256 << 20
"""Bytes that the system grants beyond the limit (ours: libraries that are loaded on the way must find room, or they
break in ways of their own). What is smaller than that is found between pieces of work."""
PAGE = os.sysconf("SC_PAGE_SIZE")
_STATM = Path("/proc/self/statm")


class Watch:
    """Looks at the clock and the memory of one judgement, from its making on."""

    def __init__(self, limits: Mapping[str, float]) -> None:
        self._limits = limits
        self._memory, self._time = limits.get("memory"), limits.get("time")
        self._began, self._before = time.monotonic(), resident()
        self._undo: list[Any] = []
        alone = threading.active_count() == 1 and threading.current_thread() is threading.main_thread()
        if alone and self._time is not None and signal.getsignal(signal.SIGALRM) == signal.SIG_DFL:
            self._interrupt_after(self._time)
        if alone and self._memory is not None:
            self._refuse_beyond(self._memory)

    def check(self) -> None:
        """Compare with the limits.

        Raises:
            LimitError: one is passed.
        """
        if self._time is not None and time.monotonic() - self._began > self._time:
            self.too_long()
        if self._memory is not None and resident() - self._before > self._memory:
            self.too_large()

    def end(self) -> None:
        """The judgement is made; what comes now takes what it takes."""
        self._memory = self._time = None
        while self._undo:
            self._undo.pop()()

    def too_long(self) -> NoReturn:
        """The time is up."""
        seconds = self._limits["time"]
        todo = "Give it more in `limits: {time: ...}`, or judge a smaller batch; nothing was released."
        raise LimitError("limits", f"the batch takes longer than {seconds:g} s", "an answer by then", todo)

    def too_large(self) -> NoReturn:
        """The memory is used up."""
        todo = "Give it more in `limits: {memory: ...}`, or judge a smaller batch; nothing was released."
        came = f"the batch needs more than {self._limits['memory']:,.0f} bytes of memory"
        raise LimitError("limits", came, "an answer with that", todo)

    def _interrupt_after(self, seconds: float) -> None:
        signal.signal(signal.SIGALRM, lambda *_: self.too_long())
        signal.setitimer(signal.ITIMER_REAL, seconds)
        self._undo += [
            lambda: signal.signal(signal.SIGALRM, signal.SIG_DFL),
            lambda: signal.setitimer(signal.ITIMER_REAL, 0),
        ]

    def _refuse_beyond(self, size: float) -> None:
        soft, hard = resource.getrlimit(resource.RLIMIT_DATA)
        most = int(_data() + size) + ROOM
        if hard == resource.RLIM_INFINITY or most < hard:
            resource.setrlimit(resource.RLIMIT_DATA, (most, hard))
            self._undo.append(lambda: resource.setrlimit(resource.RLIMIT_DATA, (soft, hard)))


_WATCH: ContextVar[Watch | None] = ContextVar("watch", default=None)


@contextmanager
def within(limits: Mapping[str, float]) -> Iterator[Watch]:
    """Hold the work inside to limits: ``memory`` (bytes more than now) and ``time`` (seconds), where they are given.

    Raises:
        LimitError: one is passed.
    """
    watch = Watch(limits)
    token = _WATCH.set(watch if limits else None)
    try:
        yield watch
    except MemoryError:
        watch.end()
        if "memory" in limits:
            watch.too_large()
        raise
    finally:
        watch.end()
        _WATCH.reset(token)


def check() -> None:
    """Compare with the limits of the judgement that is being made, if it has any.

    Raises:
        LimitError: one is passed.
    """
    watch = _WATCH.get()
    if watch is not None:
        watch.check()


def resident() -> int:
    """Bytes of memory that the process holds now (where the system does not tell: the most it ever held)."""
    try:
        return int(_STATM.read_bytes().split()[1]) * PAGE
    except OSError:
        return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024


def _data() -> int:
    """Bytes of memory that count for the system's limit."""
    try:
        return int(_STATM.read_bytes().split()[5]) * PAGE
    except OSError:
        return 0
