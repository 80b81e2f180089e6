"""Faults of the rows: their order, repeats, fills, replays, and the clock; pure seeded functions on numpy arrays.

Each takes what is ``Given`` and gives the broken window; what comes in is never written to. NaN is missing and is moved
like any value.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sercheck.serial.arrays import Bools, Floats


@dataclass(frozen=True)
class Given:
    """What a fault is put into.

    Attributes:
        window: the batch, shape (S, n), NaN is missing.
        history: the rows right before it, shape (S, N).
        size: how large the fault is.
        rng: where its chance comes from.
        steps: steps in one cycle of the season that the fault may be about.
    """

    window: Floats
    history: Floats
    size: float
    rng: np.random.Generator
    steps: int


def with_before(window: Floats, history: Floats, steps: int) -> Floats:
    """The window with the last ``steps`` steps of history before it; the first value stands in for what is lacking."""
    tail = history[:, max(history.shape[1] - steps, 0) :]
    lacking = steps - tail.shape[1]
    first = (tail if tail.shape[1] else window)[:, :1]
    return np.concatenate([np.repeat(first, lacking, axis=1), tail, window], axis=1)


def last_before(x: Floats, lost: Bools) -> Floats:
    """Every lost place takes the value of the last place before it that is not lost."""
    place = np.where(lost, 0, np.arange(x.shape[1]))
    return np.take_along_axis(x, np.maximum.accumulate(place, axis=1), axis=1)


def shuffled(given: Given) -> Floats:
    """All rows in random order."""
    return np.asarray(given.rng.permuted(given.window, axis=1))


def ordered(given: Given) -> Floats:
    """Rows from the smallest to the largest value, missing ones last."""
    return np.sort(given.window, axis=1)


def backwards(given: Given) -> Floats:
    """The newest row first."""
    return given.window[:, ::-1].copy()


def twice(given: Given) -> Floats:
    """Each row of the first half delivered twice in a row."""
    n = given.window.shape[1]
    return np.repeat(given.window[:, : (n + 1) // 2], 2, axis=1)[:, :n]


def filled_forward(given: Given) -> Floats:
    """A share of the rows, at random places, lost and given the value before."""
    both = with_before(given.window, given.history, 1)
    lost = given.rng.random(both.shape) < given.size
    lost[:, 0] = False
    return last_before(both, lost)[:, 1:]


def stuck(given: Given) -> Floats:
    """As many rows in one stretch as ``size`` says, at a random place, given the value before."""
    both = with_before(given.window, given.history, 1)
    length = min(int(given.size), given.window.shape[1])
    first = given.rng.integers(1, given.window.shape[1] - length + 2, size=(len(given.window), 1))
    place = np.arange(both.shape[1])
    return last_before(both, (place >= first) & (place < first + length))[:, 1:]


def interpolated(given: Given) -> Floats:
    """Every second row lost and put half-way between its neighbours."""
    out = given.window.copy()
    out[:, 1:-1:2] = (given.window[:, :-2:2] + given.window[:, 2::2]) / 2
    return out


def lost_cycle(given: Given) -> Floats:
    """One whole cycle, at a random place, not delivered."""
    cycles = max(given.window.shape[1] // given.steps, 1)
    at = given.rng.integers(0, cycles, size=(len(given.window), 1)) * given.steps
    place = np.arange(given.window.shape[1])
    return np.where((place >= at) & (place < at + given.steps), np.nan, given.window)


def late(given: Given) -> Floats:
    """Every row stamped ``size`` steps late."""
    d = int(given.size)
    return with_before(given.window, given.history, d)[:, : given.window.shape[1]]


def late_from_middle(given: Given) -> Floats:
    """Rows stamped ``size`` steps late from the middle of the window on."""
    middle = given.window.shape[1] // 2
    return np.concatenate([given.window[:, :middle], late(given)[:, middle:]], axis=1)


def cycle_again(given: Given) -> Floats:
    """The newest cycle is the one before it again."""
    length = min(given.steps, given.window.shape[1])
    both = with_before(given.window, given.history, length)
    return np.concatenate([given.window[:, :-length], both[:, -2 * length : -length]], axis=1)


def batch_again(given: Given) -> Floats:
    """The batch delivered ``size`` batches ago again (the oldest one where history is shorter)."""
    n = given.window.shape[1]
    back = min(int(given.size), given.history.shape[1] // n) * n
    return with_before(given.window, given.history, back)[:, :n].copy()


def keys_swapped(given: Given) -> Floats:
    """Pairs of series under each other's keys, ``size`` of them, taken at random."""
    pairs = min(int(given.size), len(given.window) // 2)
    one, other = given.rng.permutation(len(given.window))[: 2 * pairs].reshape(2, pairs)
    out = given.window.copy()
    out[one], out[other] = given.window[other], given.window[one]
    return out
