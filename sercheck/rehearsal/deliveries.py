"""Faults of the delivery: rows that are missing, doubled, out of order, off the clock; pure seeded functions on rows.

What they leave is laid on the grid by the intake itself, which counts what it finds. Depends on ``intake`` and
``causes``.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from sercheck import causes
from sercheck.intake.rows import Rows

Spoil = Callable[[Rows, float, np.random.Generator, int], Rows]


@dataclass(frozen=True)
class Delivery:
    """One thing that goes wrong with the rows of a batch, whatever their values.

    Attributes:
        name: what it is called in tables and options.
        says: one sentence for a reader.
        cause: the cause that should be named for it, one of ``sercheck.causes``.
        sizes: sizes worth trying; what a size means is in ``says``.
        spoil: from the rows of some series (in order of time), a size, a seeded generator and the nanoseconds of a
            step to the rows that are delivered. Pure.
        whole: a batch in which it hits all series would be no batch at all.
    """

    name: str
    says: str
    cause: str
    sizes: tuple[float, ...]
    spoil: Spoil
    whole: bool = False


def _lost(rows: Rows, size: float, rng: np.random.Generator, _: int) -> Rows:
    return rows.take(rng.random(len(rows)) >= size)


def _cut_short(rows: Rows, size: float, _: np.random.Generator, __: int) -> Rows:
    counts = np.bincount(rows.codes, minlength=len(rows.keys))
    place = np.arange(len(rows)) - np.repeat(np.cumsum(counts) - counts, counts)
    return rows.take(place < np.ceil((1 - size) * counts)[rows.codes])


def _emptied(rows: Rows, size: float, rng: np.random.Generator, _: int) -> Rows:
    empty = rng.random(len(rows)) < size
    values = {name: np.where(empty, np.nan, column) for name, column in rows.values.items()}
    return Rows(rows.keys, rows.codes, rows.stamps, values)


def _doubled(rows: Rows, size: float, rng: np.random.Generator, _: int) -> Rows:
    return rows.take(np.repeat(np.arange(len(rows)), 1 + (rng.random(len(rows)) < size)))


def _disordered(rows: Rows, _: float, rng: np.random.Generator, __: int) -> Rows:
    return rows.take(rng.permutation(len(rows))).by_series()


def _off_the_clock(rows: Rows, size: float, rng: np.random.Generator, step: int) -> Rows:
    late = np.where(rng.random(len(rows)) < size, step // 3, 0)
    return Rows(rows.keys, rows.codes, rows.stamps + late, rows.values)


def _silent(rows: Rows, _: float, __: np.random.Generator, ___: int) -> Rows:
    return rows.take(slice(0, 0))


SHARES = (0.1, 0.3, 0.5)
"""Shares of rows: a few hours of a day, a third, a half."""

DELIVERIES = (
    Delivery("rows lost", "This share of rows, at random places, not delivered.", causes.MISSING, SHARES, _lost),
    Delivery("cut short", "This share of rows not delivered, the newest.", causes.MISSING, SHARES, _cut_short),
    Delivery("values empty", "This share of rows delivered without a value.", causes.MISSING, SHARES, _emptied),
    Delivery("rows delivered twice", "This share of rows delivered twice under the same stamp.", causes.REPEATED,
             (0.1, 1.0), _doubled),
    Delivery("delivered out of order", "Rows delivered in random order, each with its own stamp.", causes.WRONG_ORDER,
             (1.0,), _disordered),
    Delivery("stamps off the clock", "This share of rows stamped a third of a step late.", causes.MISSING, (0.1, 1.0),
             _off_the_clock),
    Delivery("series silent", "No row of the series delivered.", causes.MISSING, (1.0,), _silent, whole=True),
)  # fmt: skip
"""The faults of the delivery that are always tried, in the order in which they are told."""
