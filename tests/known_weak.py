"""Cells of ``calibration`` that miss their targets: the one place where a weakness of a measure is named.

Each is excluded by the ``assumes`` of its records, or stands in the measure's docstring.
"""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass


@dataclass(frozen=True)
class Weak:
    """Cells that are known to miss.

    Attributes:
        questions: names of questions in ``cells``.
        asked: forms, with their side where only one of them misses.
        processes: names of processes.
        says: why, and by how much.
        rows: rows of the windows; all where it is empty.
    """

    questions: Collection[str]
    asked: Collection[str]
    processes: Collection[str]
    says: str
    rows: Collection[int] = ()


KNOWN: tuple[Weak, ...] = ()


def weakness(question: str, asked: str, process: str, n: int) -> str:
    """Why this cell may miss its target; empty where it may not."""
    for weak in KNOWN:
        form = any(asked == each or asked.endswith(f" {each}") for each in weak.asked)
        if question in weak.questions and form and process in weak.processes and (not weak.rows or n in weak.rows):
            return weak.says
    return ""
