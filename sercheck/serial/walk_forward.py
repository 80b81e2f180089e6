"""A seasonal profile that learns as the feed goes on, and never from what it is held against; numpy and ``serial``."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sercheck.serial.arrays import Floats, Ints

GAINS = (0.0, 0.04, 0.1, 0.2)
"""Smallest weights of a new cycle that are tried: none, and memories of about 25, 10 and 5 cycles."""

CLIP = 4.0
"""A deviation counts up to this many running medians (about 2.7 standard deviations of a normal law)."""

MEMORY = 5
"""Deviations in the running median, and cycles before it is used: deviations are clipped from the sixth cycle on."""

FEWEST = 2
"""Cycles that a phase must have been seen before its profile is used: one alone is an observation, not a profile."""

DECILES = 10


@dataclass(frozen=True)
class Profile:
    """What each step was expected to be before it came; every array has shape (S, T), NaN before it is known.

    Attributes:
        here: the profile at the step's own place in the cycle.
        ahead: the profile one place later, as known at the same time.
        behind: the profile one place earlier, as known at the same time.
        gain: the smallest weight of a new cycle, shape (S,).
    """

    here: Floats
    ahead: Floats
    behind: Floats
    gain: Floats

    def last(self, steps: int) -> Profile:
        """The last steps of it."""
        return Profile(self.here[:, -steps:], self.ahead[:, -steps:], self.behind[:, -steps:], self.gain)


@dataclass(frozen=True)
class Cycles:
    """Steps laid out in cycles.

    Attributes:
        step: the step that lies at each place of each cycle, shape (C, length); -1 where there is none.
        place: cycle times length plus phase of each step, shape (T,).
    """

    step: Ints
    place: Ints


def cycles(phase: Ints, length: int) -> Cycles:
    """Lay the steps out in cycles by their phase on the feed's wall clock.

    A phase that comes twice (an autumn hour) shares its place, and the first one teaches; one that never comes (a
    spring hour) leaves its place empty.
    """
    turn = np.diff(phase) % length
    turn = np.where(turn > length // 2, turn - length, turn) if length > 2 else np.maximum(turn, 1)
    place = int(phase[0]) + np.concatenate(([0], np.cumsum(turn)))
    place -= place.min() // length * length
    step = np.full((int(place.max()) // length + 1) * length, -1, dtype=np.int64)
    step[place[::-1]] = np.arange(len(phase))[::-1]
    return Cycles(step.reshape(-1, length), place)


def walk_forward(
    y: Floats, phase: Ints, length: int, delay: int, *, first: int, block: int, gain: Floats | None = None
) -> Profile:
    """Learn a profile cycle by cycle and give for every step what was known ``delay`` steps before it.

    p ← p + max(1/(k+1), g) δ, where δ = y - p is the deviation of the (k+1)-th cycle seen at this phase, clipped at
    four running medians of abs(δ) from the sixth cycle on: a running mean that never stops learning (g > 0) and that
    one broken cycle cannot bend. The same delay everywhere makes the residuals of history scatter like those of a new
    batch; residuals around a mean that holds their own cycle are too small by (1 + 1/C)/(1 - 1/C).

    Args:
        y: shape (S, T); NaN is missing and teaches nothing.
        phase: place in the cycle of each step, shape (T,).
        length: steps in one cycle.
        delay: steps between a value and the first one whose profile may hold it (rounded up to whole cycles).
        first: steps from the start among which the gain is chosen.
        block: steps of one batch: the gain with the least squared error around each batch's mean is chosen, since a
            level that wanders is no fault of the profile.
        gain: the gain of each series, shape (S,), to skip the choice.
    """
    table = cycles(phase, length)
    lag = max(1, -(-delay // length))
    if gain is None:
        gain = _choose(y[:, :first], cycles(phase[:first], length), lag, block)
    known = _learn(y, table, lag, gain)
    shape = (len(y), -1)
    return Profile(
        known.reshape(shape)[:, table.place],
        np.roll(known, -1, axis=2).reshape(shape)[:, table.place],
        np.roll(known, 1, axis=2).reshape(shape)[:, table.place],
        gain,
    )


def _learn(y: Floats, table: Cycles, lag: int, gain: Floats) -> Floats:
    """The profile known for each cycle, shape (S, C, length)."""
    series, (count, length) = len(y), table.step.shape
    known = np.full((series, count, length), np.nan)
    p = np.zeros((series, length))
    seen = np.zeros((series, length))
    recent = [np.full((series, length), np.inf) for _ in range(MEMORY)]
    for c in range(count):
        step = table.step[c]
        deviation = np.where(step >= 0, y[:, step], np.nan) - p
        told = ~np.isnan(deviation)
        deviation[~told] = 0.0
        size = np.abs(deviation)
        if c >= MEMORY:
            usual = middle(recent, np.clip(seen - 1, 0, MEMORY))
            cap = CLIP * np.maximum(usual, np.median(usual, axis=1)[:, None])
            np.clip(deviation, -cap, cap, out=deviation, where=seen >= MEMORY)
        p += np.maximum(1.0 / (seen + 1), gain[:, None]) * deviation
        again = told & (seen > 0)  # the first value is its own profile and deviates from nothing
        oldest = recent.pop()
        if again.all():
            recent.insert(0, size)
        else:
            shifted = [np.where(again, new, old) for new, old in zip([size, *recent], [*recent, oldest], strict=True)]
            recent = shifted
        seen += told
        if c + lag < count:
            known[:, c + lag] = np.where(seen >= FEWEST, p, np.nan)
    return known


def middle(values: list[Floats], count: Floats) -> Floats:
    """Median of the ``count`` finite ones of five arrays, element by element (the rest are inf); 0 for none."""
    a, b, c, d, e = values
    for _ in range(2):  # odd-even transposition sort: five rounds order five values
        a, b, c, d = _pair(a, b, c, d)
        b, c, d, e = _pair(b, c, d, e)
    a, b, c, d = _pair(a, b, c, d)
    low = np.select([count >= 5, count >= 3, count >= 1], [c, b, a], 0.0)
    high = np.select([count >= 4, count >= 2, count >= 1], [c, b, a], 0.0)
    return np.asarray((low + high) / 2)


def _pair(a: Floats, b: Floats, c: Floats, d: Floats) -> tuple[Floats, Floats, Floats, Floats]:
    return np.minimum(a, b), np.maximum(a, b), np.minimum(c, d), np.maximum(c, d)


def around_blocks(x: Floats, block: int) -> Floats:
    """Deviations from the mean of each block; the blocks end with the series, what is over at the start is cut."""
    count = x.shape[1] // block
    cut = x[:, x.shape[1] - count * block :].reshape(len(x), count, block)
    seen = ~np.isnan(cut)
    total = np.where(seen, cut, 0.0).sum(axis=2, keepdims=True)
    mean = total / np.maximum(seen.sum(axis=2, keepdims=True), 1)
    return np.asarray((cut - mean).reshape(len(x), -1))


def _choose(y: Floats, table: Cycles, lag: int, block: int) -> Floats:
    """The gain with the least squared error around the batches' own means; the first on ties."""
    errors = []
    for gain in GAINS:
        known = _learn(y, table, lag, np.full(len(y), gain)).reshape(len(y), -1)[:, table.place]
        errors.append(np.nansum(around_blocks(y - known, block) ** 2, axis=1))
    best: Floats = np.asarray(GAINS)[np.argmin(np.stack(errors), axis=0)]
    return best


def on_scale(x: Floats, log: Floats) -> Floats:
    """ln(1 + x/c) where ``log`` holds c, x itself where it is NaN; shapes (S, ...) and (S,)."""
    c = log.reshape(-1, *([1] * (x.ndim - 1)))
    with np.errstate(invalid="ignore"):
        return np.where(np.isnan(c), x, np.log1p(np.maximum(x / c, 0.0)))


def off_scale(y: Floats, log: Floats) -> Floats:
    """The way back from ``on_scale``."""
    c = log.reshape(-1, *([1] * (y.ndim - 1)))
    with np.errstate(invalid="ignore", over="ignore"):
        return np.where(np.isnan(c), y, c * np.expm1(y))


def log_unit(x: Floats, profile: Floats) -> Floats:
    """The c of ln(1 + x/c) where the scatter of a series grows with its profile, NaN where logs are no better; (S,).

    Logs are the better scale when all values are at least 0, log mean abs(residual) against log profile over the
    profile's deciles has a slope over one half (the slope of a Poisson count, 1 being that of a constant percentage),
    and the profile spans more than a factor of three (else nothing is gained). c is the profile's mean in its lowest
    decile that is not 0, so that zeros are near neighbours of what is usual there, whatever the unit: a share of a
    road's time needs the same c as the same share in per cent.

    Args:
        x: shape (S, T), NaN is missing.
        profile: the walk-forward profile of ``x``, shape (S, T).
    """
    residual = x - profile
    told = ~np.isnan(residual)
    order = np.argsort(np.where(told, profile, np.inf), axis=1, kind="stable")
    edge = np.arange(DECILES + 1) * told.sum(axis=1, keepdims=True) // DECILES
    size = np.maximum(np.diff(edge, axis=1), 1)

    def decile_means(v: Floats) -> Floats:
        total = np.cumsum(np.take_along_axis(np.where(told, v, 0.0), order, axis=1), axis=1)
        return np.asarray(np.diff(np.take_along_axis(np.pad(total, ((0, 0), (1, 0))), edge, axis=1), axis=1) / size)

    high, wide = decile_means(profile), decile_means(np.abs(residual))
    usable = (high > 0) & (wide > 0)
    a, b = (np.log(np.where(usable, part, 1.0)) for part in (high, wide))
    count = np.maximum(usable.sum(axis=1, keepdims=True), 1)
    da = np.where(usable, a - np.where(usable, a, 0.0).sum(axis=1, keepdims=True) / count, 0.0)
    square = (da**2).sum(axis=1)
    slope = (da * np.where(usable, b, 0.0)).sum(axis=1) / np.where(square > 0, square, np.inf)
    never_negative = ~(x < 0).any(axis=1)
    growing = never_negative & (slope > 0.5) & (high.max(axis=1) > 3 * high.min(axis=1))
    return np.asarray(np.where(growing, np.where(high > 0, high, np.inf).min(axis=1), np.nan))
