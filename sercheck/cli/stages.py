"""What each stage took, as a table for people and as plain data; depends on ``table``."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

from sercheck.cli.table import Head, table

if TYPE_CHECKING:
    from sercheck.stopwatch import Timing


def stages(timings: Sequence[Timing]) -> str:
    """Seconds by stage, their sum in the last line."""
    heads = [Head("stage", least=20), Head("cpu s", right=True), Head("wall s", right=True)]
    rows = [[each.stage, f"{each.cpu:.3f}", f"{each.wall:.3f}"] for each in timings]
    rows.append(["all", f"{sum(each.cpu for each in timings):.3f}", f"{sum(each.wall for each in timings):.3f}"])
    return table(heads, rows)


def as_data(timings: Sequence[Timing]) -> list[dict[str, object]]:
    """The same for ``--format json``: ``stage``, ``cpu`` and ``wall`` in seconds."""
    return [{"stage": each.stage, "cpu": round(each.cpu, 6), "wall": round(each.wall, 6)} for each in timings]
