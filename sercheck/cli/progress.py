"""How far long work is, with the time left, on one line of a terminal; nothing anywhere else."""

from __future__ import annotations

import sys
import time
from types import TracebackType
from typing import Self

WAIT = 0.5
"""Seconds between two tellings."""
SURE, SEEN = 3.0, 0.02
"""Seconds, and share of the work, after which the time left is worth telling."""


class Progress:
    """Tells the share done of a piece of work; used as a context, it leaves no trace."""

    def __init__(self) -> None:
        self._begun = self._told = time.monotonic()
        self._shown = False

    def __enter__(self) -> Self:
        return self

    def __call__(self, share: float, what: str) -> None:
        """``what`` is being done, ``share`` of all is finished."""
        now = time.monotonic()
        if not sys.stderr.isatty() or now - self._told < WAIT:
            return
        self._told, spent = now, now - self._begun
        left = f", {_spelled(spent / share - spent)} left" if share > SEEN and spent > SURE else ""
        sys.stderr.write(f"\r\x1b[K{min(share, 1):4.0%}  {what}{left}")
        sys.stderr.flush()
        self._shown = True

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, at: TracebackType | None) -> None:
        if self._shown:
            sys.stderr.write("\r\x1b[K")
            sys.stderr.flush()


def _spelled(seconds: float) -> str:
    if seconds < 90:
        return f"{seconds:.0f} s"
    return f"{seconds / 60:.0f} min" if seconds < 5400 else f"{seconds / 3600:.1f} h"
