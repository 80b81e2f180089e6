"""The series of a block that may fail, and the likely cause of each; depends on ``judge``, ``cause``, ``together``.

Whether a series fails is known only when the risk was shared among all blocks, but its values are at hand only while
its block is. So the cause is looked for in every series that breaks its rule at the rule's whole risk: none that fails
later is missing, and a healthy batch has hardly any.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from sercheck import causes
from sercheck.cause import Causes, likely_causes
from sercheck.grid import Grid, Panel
from sercheck.judge import Seen, breaks
from sercheck.rulebook.compiled import Rule, Rulebook
from sercheck.serial.arrays import Bools, Ints
from sercheck.together import pooled

MOST = 200
"""Series of a block whose causes are looked for one by one, those that break the most rules; the others get the cause
of these together, with its support over them. Two hundred days of hours take a second and a half."""

OF_LOOKS = {"gaps": causes.MISSING, "doubles": causes.REPEATED, "disorder": causes.WRONG_ORDER}
"""What a failing ``spacing`` says by itself."""


def with_causes(book: Rulebook, seen: Sequence[Seen], grid: Grid) -> list[Seen]:
    """The same measurements with the likely causes of the series that may fail.

    The stretch that is searched is the batch, against the history before it, whatever window the rule looked at. Rules
    that ask for missing, doubled, disordered or late rows name their cause themselves.
    """
    told = list(seen)
    broken = {column: np.zeros(len(grid.keys), dtype=np.int64) for column in book.values}
    open_parts = []
    for place, part in enumerate(seen):
        own = evident(book.rules[part.rule])
        if own is not None:
            told[place] = _evidently(part, own)
        elif book.values:
            rows = _rows(part, grid)
            broken[part.column or book.values[0]][rows[_may_fail(book, part)]] += 1
            open_parts.append((place, part, rows))
    found = {column: _causes(grid, column, count) for column, count in broken.items() if count.any()}
    for place, part, rows in open_parts:
        column = part.column or book.values[0]
        told[place] = _told(part, rows, found.get(column), broken[column] > 0)
    return told


def evident(rule: Rule) -> str | None:
    """The cause that a failure of this rule is itself: rows that are missing, doubled, out of order or late.

    ``count`` and a ``completeness`` that stays below a bound fail for too many rows as well and say nothing.
    """
    fields = rule.fields.model_dump()
    if rule.measure == "spacing":
        return OF_LOOKS.get(fields["look"])
    if rule.measure == "freshness" and rule.stays.kind == "below":
        return causes.LATE
    if rule.measure == "completeness" and rule.stays.kind in ("above", "like_history"):
        return causes.MISSING
    if rule.measure == "rate" and fields["of_rows"] == "missing" and rule.stays.kind in ("below", "like_history"):
        return causes.MISSING
    return None


def _evidently(part: Seen, cause: str) -> Seen:
    series = len(part.keys)
    return replace(part, cause=np.full(series, cause, dtype=object), support=np.ones(series), whole=(cause, 1.0))


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


def _causes(grid: Grid, column: str, broken: Ints) -> tuple[Ints, Causes]:
    """The series that are looked at, the clearest, and their causes."""
    chosen = np.sort(np.argsort(-broken, kind="stable")[: min(MOST, np.count_nonzero(broken))])
    panel = Panel(grid.values[column][chosen], grid.start, grid.axis, grid.delivered[chosen], column)
    return chosen, likely_causes(panel, keys=grid.keys[chosen].tolist(), shared=True)


def _told(part: Seen, rows: Ints, found: tuple[Ints, Causes] | None, suspects: Bools) -> Seen:
    if found is None:
        return part
    chosen, told = found
    joint = told.of_the_batch()
    cause = np.where(suspects, joint[0], np.array(None, dtype=object))
    support = np.where(suspects, joint[1], np.nan)
    cause[chosen], support[chosen] = told.cause, told.support
    return replace(part, cause=cause[rows], support=support[rows], whole=joint if suspects.all() else None)
