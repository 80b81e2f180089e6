"""The series of a block that may fail, and the likely cause of each; depends on ``judge``, ``cause``, ``together``.

Whether a series fails is known only when the risk was shared among all blocks, but its values are at hand only while
its block is. So the cause is looked for in every series that breaks its rule at the rule's whole risk: none that fails
later is missing, and a healthy batch has hardly any.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from sercheck.cause import Causes, likely_causes
from sercheck.grid import Grid, Panel
from sercheck.judge import Seen, breaks
from sercheck.rulebook.compiled import Rulebook
from sercheck.serial.arrays import Bools, Ints
from sercheck.together import pooled


def with_causes(book: Rulebook, seen: Sequence[Seen], grid: Grid) -> list[Seen]:
    """The same measurements with the likely causes of the series that may fail.

    The stretch that is searched is the batch, against the history before it, whatever window the rule looked at.
    """
    if not book.values:
        return list(seen)
    suspects = {column: np.zeros(len(grid.keys), dtype=bool) for column in book.values}
    rows = [_rows(part, grid) for part in seen]
    for part, where in zip(seen, rows, strict=True):
        suspects[part.column or book.values[0]][where[_may_fail(book, part)]] = True
    causes = {column: _causes(grid, column, mask) for column, mask in suspects.items() if mask.any()}
    return [
        _told(part, where, causes.get(part.column or book.values[0]), suspects[part.column or book.values[0]])
        for part, where in zip(seen, rows, strict=True)
    ]


def _rows(part: Seen, grid: Grid) -> Ints:
    if len(part.keys) == len(grid.keys):
        return np.arange(len(grid.keys))
    places = {key: place for place, key in enumerate(grid.keys.tolist())}
    return np.array([places[key] for key in part.keys.tolist()], dtype=np.int64)


def _may_fail(book: Rulebook, part: Seen) -> Bools:
    rule = book.rules[part.rule]
    alone = breaks(part.measurement, rule.false_alarm)
    if "together" not in rule.across:
        return alone
    whole = breaks(pooled([part]).measurement, rule.false_alarm)
    return np.asarray(alone | whole[0] if rule.across != ("together",) else np.full(alone.shape, whole[0]))


def _causes(grid: Grid, column: str, suspects: Bools) -> Causes:
    panel = Panel(grid.values[column][suspects], grid.start, grid.axis, grid.delivered[suspects], column)
    return likely_causes(panel, keys=grid.keys[suspects].tolist())


def _told(part: Seen, rows: Ints, causes: Causes | None, suspects: Bools) -> Seen:
    if causes is None:
        return part
    cause = np.full(len(suspects), None, dtype=object)
    support = np.full(len(suspects), np.nan)
    cause[suspects], support[suspects] = causes.cause, causes.support
    whole = causes.of_the_batch() if suspects.all() else None
    return replace(part, cause=cause[rows], support=support[rows], whole=whole)
