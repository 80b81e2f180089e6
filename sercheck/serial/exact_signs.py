"""Signs that leave no doubt: equal values, midpoints, order, earlier rows, rounding; depends on numpy, ``serial``."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from scipy import special

from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.repeats import FLOAT_SLACK, equal_to_earlier, midpoints, resting_value, rounding
from sercheck.serial.replay import seen_before
from sercheck.serial.window_t import windows

BEYOND_CHANCE = 1e-4
"""Chance at which a count of coincidences is a sign: several are read, and together they must stay far below 2 %."""

CLUSTERS = 4.0
"""Coincidences of real feeds come in clusters: their variance is taken as so many times the binomial one."""

FEWEST_WINDOWS = 8
"""Windows of history from which the clustering is estimated, as for any variance over windows."""

LEAST_RUN = 3
"""Equal neighbours in a run before it is called long: four equal values."""

FEW = 3
"""Coincidences that history must have to tell how they come."""

EVEN = 0.8
"""Share of the runs that must be of one length for rows delivered twice or data spread evenly (the ends may be cut)."""

ORDERED_BY_CHANCE = 1e-3
"""Chance that rows in random order are sorted, under which sorted ones are called so: seven rows or more."""

UNLIKELY = 0.01
"""Chance that rows filled at random make the longest run, under which it is a stretch stuck by itself."""

BY_CHANCE = 8.0
"""Decimal digits of chance against different values being multiples of a coarser step, from which they are rounded."""

FINEST = 1e-8
"""Finest step that is looked for."""

SOME, SEAM = 0.1, 6
"""A tenth of a window, six rows at most, must have come before: a clock that slipped repeats a few at its seam."""

COMMON = 0.01
"""Share of history's rows with a value that came before, under which values hardly ever come twice."""

ROUNDS = 40
"""Repetitions in which the share of coincidences settles to a hundredth at worst, where every other row coincides."""

LARGEST = 900
"""Largest power of two that is worked with, so that eight decimals more are still doubles."""

EXACT = 1e15
"""Largest value whose decimals a double still tells."""

LONGEST_HISTORY = 4000
"""Rows of history that rounding is read from."""


class Sign(NamedTuple):
    """One kind of exact evidence.

    Attributes:
        name: which fault it is a sign of.
        found: shape (S,).
        value: the number that goes with it, shape (S,).
    """

    name: str
    found: Bools
    value: Floats


def exact_signs(values: Floats, start: int) -> list[Sign]:
    """All exact signs of the windows, those first that are told first.

    Args:
        values: history and window, shape (S, T), NaN is missing.
        start: first step of the window.
    """
    values = _within_reach(values)
    window, history = values[:, start:], values[:, :start]
    rounded, step = coarser(window, history)
    grain = _rounding(values, start)
    return [
        _in_order(window, history),
        Sign("rounded", rounded, step),
        *_runs(values, start, grain),
        _again(values, start),
        _midpoints(window, history, grain),
    ]


def _within_reach(values: Floats) -> Floats:
    """Series with huge values over a power of two, which leaves what is equal equal."""
    peak = np.where(np.isnan(values), 0.0, np.abs(values)).max(axis=1, initial=0.0)
    over = np.maximum(np.frexp(peak)[1] - LARGEST, 0)
    return np.asarray(np.ldexp(values, -over[:, None])) if over.any() else values


def _in_order(window: Floats, history: Floats) -> Sign:
    """All steps up (or all down), as no window of history has them, and the values are history's: by value, not time.

    In random order it happens twice in n! windows.
    """
    steps, up, down = _one_way(window[:, None, :])
    many, rises, falls = _one_way(windows(history, window.shape[1]))
    usual = ((rises | falls) & (many > 0)).any(axis=1)
    low, high = np.fmin.reduce(history, axis=1, initial=np.inf), np.fmax.reduce(history, axis=1, initial=-np.inf)
    last = np.where(np.isnan(window), -np.inf, window).max(axis=1, initial=-np.inf)
    within = last <= high + (high - low)
    rare = special.gammaln(steps[:, 0] + 2.0) > np.log(2 / ORDERED_BY_CHANCE)
    return Sign("sorted", (up | down)[:, 0] & within & ~usual & rare, np.where(up[:, 0], 1.0, -1.0))


def _one_way(cut: Floats) -> tuple[Ints, Bools, Bools]:
    """Steps of each window, and whether all go up or all go down (level ones are neither), each (S, m)."""
    step = np.diff(cut, axis=2)
    up, down = (step > 0).sum(axis=2), (step < 0).sum(axis=2)
    steps = (~np.isnan(step)).sum(axis=2)
    return steps, (down == 0) & (2 * up > steps), (up == 0) & (2 * down > steps)


def _beyond(count: Floats, trials: Floats, marks: Floats, n: int, chance: Floats | float = 0.0) -> Bools:
    """More coincidences than history's allow: at least two, and a binomial tail at history's share below chance.

    The share is no less than ``chance``, what the window's own rounding gives.

    Counts and trials are divided by τ, the variance of the counts in history's windows of n rows over the binomial
    one, ``CLUSTERS`` where there are too few windows to tell (Rao and Scott 1992).
    """
    rate = _rate(marks)
    cut = windows(marks, n)
    m = cut.shape[1]
    if m >= FEWEST_WINDOWS:
        counts = np.nansum(cut, axis=2)
        binomial = np.maximum((~np.isnan(cut)).sum(axis=2).mean(axis=1) * rate * (1 - rate), np.finfo(np.float64).tiny)
        per = np.maximum(counts.var(axis=1, ddof=1) / binomial, 1.0)
    else:
        per = np.full(len(marks), CLUSTERS)
    per = np.where(np.nansum(marks, axis=1) >= FEW, per, 1.0)
    k, trials = count / per, trials / per
    tail = special.betainc(np.maximum(k, 1e-9), np.maximum(trials - k, 0) + 1, np.maximum(rate, chance))
    return np.asarray((count >= 2) & (tail < BEYOND_CHANCE))


def _long_run(marks: Floats, longest: Floats, n: int, chance: Floats) -> Bools:
    """A run of ``longest`` equal values is too long for n rows: 1 − exp(−n p01 p11^(r−1)), r its marks.

    p01 is history's chance that an equal value follows an unequal one, p11 that one follows an equal one; neither is
    less than ``chance``, what the window's own rounding gives.
    """
    before, now = marks[:, :-1], marks[:, 1:]
    told = ~np.isnan(before) & ~np.isnan(now)
    after = (told & (before == 1)).sum(axis=1)
    p11 = ((told & (before == 1) & (now == 1)).sum(axis=1) + 0.5) / (after + 1)
    p01 = ((told & (before == 0) & (now == 1)).sum(axis=1) + 0.5) / ((told & (before == 0)).sum(axis=1) + 1)
    p01, p11 = np.maximum(p01, chance), np.maximum(p11, chance)
    r = np.maximum(longest - 1, 0)
    return np.asarray((r >= LEAST_RUN) & (-np.expm1(-n * p01 * p11 ** (r - 1)) < BEYOND_CHANCE))


def _by_rounding(step: Floats, within: Floats) -> Floats:
    """Chance that a normal difference lies within ``within`` of 0 and so coincides with it, shape (S,).

    Its scale is read from the differences that do not coincide, whose median is the (1 + q)/2 quantile of all absolute
    ones when a share of q coincides: rows that were filled in leave it as it is. Solved by repetition.

    Args:
        step: differences, NaN where they coincide or are not known, shape (S, m).
        within: half the width of what coincides, shape (S,).
    """
    size = np.sort(np.abs(step), axis=1)  # missing ones last
    count = (~np.isnan(size)).sum(axis=1)
    if not size.shape[1]:
        return np.zeros(len(step))
    middle = np.take_along_axis(size, np.maximum(count[:, None] - 1, 0) // 2, axis=1)[:, 0]
    q = np.zeros(len(step))
    for _ in range(ROUNDS):
        with np.errstate(divide="ignore", invalid="ignore"):
            q = 2 * special.ndtr(within / (middle / special.ndtri((3 + q) / 4))) - 1
        q = np.where((count > 0) & np.isfinite(q), q, 0.0)
    return np.asarray(q)


def _rounding(values: Floats, start: int) -> Floats:
    """Decimal step to which both the window and history are rounded, 0 where one is not, shape (S,)."""
    return np.minimum(rounding(values[:, start:]), rounding(values[:, max(start - LONGEST_HISTORY, 0) : start]))


def _rate(marks: Floats) -> Floats:
    """History's share of marked rows, one half added so that nothing is impossible."""
    seen = (~np.isnan(marks)).sum(axis=1)
    return np.asarray((np.nansum(marks, axis=1) + 0.5) / (seen + 1))


def _runs(values: Floats, start: int, grain: Floats) -> list[Sign]:
    """Equal neighbours: rows twice, data spread evenly, a stuck value, or values filled forward."""
    marks = equal_to_earlier(values)
    rest = resting_value(values[:, :start])
    with np.errstate(invalid="ignore"):
        marks = np.where(values == rest[:, None], np.nan, marks)
    past, now = marks[:, :start], marks[:, start:]
    window_steps = now.shape[1]
    told = (~np.isnan(now)).sum(axis=1).astype(np.float64)
    equal = np.nansum(now, axis=1)
    step = np.diff(values[:, start:], axis=1)
    by_rounding = _by_rounding(np.where(step == 0, np.nan, step), grain / 2)
    found = _beyond(equal, told, past, window_steps, by_rounding)
    lengths = _run_lengths(now == 1)  # at a run's last row its number of values, 0 elsewhere
    runs = (lengths > 0).sum(axis=1)
    longest = lengths.max(axis=1, initial=0).astype(np.float64)
    whole = np.maximum(runs, 1)
    pairs = ((lengths == 2).sum(axis=1) >= EVEN * whole) & (2 * runs >= EVEN * (told - 1)) & (runs >= 3)
    even = (lengths == longest[:, None]).sum(axis=1) >= np.maximum(EVEN * (whole - 1), 2)
    long = _long_run(past, longest, window_steps, by_rounding)
    spread = even & (longest >= 3) & (lengths.sum(axis=1) >= EVEN * told)
    spread |= _usual_mean(values, start)
    rest_rows = told - (longest - 1)
    others = np.maximum(equal - (longest - 1), 1) / np.maximum(rest_rows, 1)
    chance = told * np.minimum(others, 1.0) ** (longest - 1)
    stuck = (longest > LEAST_RUN) & (chance < UNLIKELY) | (longest >= EVEN * told)
    share = equal / np.maximum(told, 1)
    return [
        Sign("repeated", found & pairs, share),
        Sign("spread", found & spread & ~pairs, longest),
        Sign("stuck", (found | long) & ~pairs & ~spread & stuck, longest),
        Sign("filled", found & ~pairs & ~spread & ~stuck, share),
    ]


def _usual_mean(values: Floats, start: int) -> Bools:
    """One value all through the window that is not history's last and lies among the means of history's windows."""
    window, history = values[:, start:], values[:, :start]
    constant = ((window == window[:, :1]) | np.isnan(window)).all(axis=1)
    cut = windows(history, window.shape[1])
    seen = ~np.isnan(cut)
    mean = np.where(seen, cut, 0.0).sum(axis=2) / np.maximum(seen.sum(axis=2), 1)
    low, high = mean.min(axis=1, initial=np.inf), mean.max(axis=1, initial=-np.inf)
    value = window[:, 0]
    with np.errstate(invalid="ignore"):
        last = history[:, -1] if start else np.full(len(values), np.nan)
        return np.asarray(constant & (value != last) & (value >= low) & (value <= high))


def _run_lengths(equal: Bools) -> np.ndarray:
    """Values in the run that ends at each row (marks of equality to the row before), 0 where none ends."""
    wide = np.pad(equal, ((0, 0), (1, 1)))
    count = np.cumsum(wide, axis=1)
    reset = np.maximum.accumulate(np.where(~wide, count, 0), axis=1)
    inside = (count - reset) * wide
    ends = wide[:, :-1] & ~wide[:, 1:]
    return np.where(ends, inside[:, :-1] + 1, 0)


def _again(values: Floats, start: int) -> Sign:
    """Stretches that were delivered before; rows of one stretch recur together, so stretches are counted.

    One stretch is enough where hardly any value of history came twice.
    """
    seen = seen_before(values, start)
    window_steps = values.shape[1] - start
    ordered = np.sort(values[:, :start], axis=1)
    ties = (ordered[:, 1:] == ordered[:, :-1]).sum(axis=1)
    least = np.where(ties < COMMON * start, 2.0, 0.0)
    told = (~np.isnan(seen.batch)).sum(axis=1).astype(np.float64)
    count = np.nansum(seen.batch, axis=1)
    pieces = np.where(count > 0, np.maximum(count / seen.length, least), 0.0)
    unusual = _beyond(pieces, told / seen.length, seen.history, window_steps)
    return Sign("again", unusual & (count >= np.minimum(SOME * told, SEAM)), count / np.maximum(told, 1))


def _midpoints(window: Floats, history: Floats, grain: Floats) -> Sign:
    """Rows half-way between their neighbours.

    A bend is a multiple of half the rounding; 0 and both halves are within it, three halves in all.
    """
    marks = midpoints(window)
    told = (~np.isnan(marks)).sum(axis=1).astype(np.float64)
    count = np.nansum(marks, axis=1)
    bend = window[:, 1:-1] - (window[:, :-2] + window[:, 2:]) / 2
    chance = _by_rounding(np.where(marks[:, 1:-1] == 1, np.nan, bend), 0.75 * grain)
    found = _beyond(count, told, midpoints(history), window.shape[1], chance)
    return Sign("interpolated", found, count / np.maximum(told, 1))


def coarser(window: Floats, history: Floats) -> tuple[Bools, Floats]:
    """Values that are whole multiples of a coarser step than history's are, and that step; both (S,).

    Steps are 1, 2 and 5 times powers of ten. The window must vary, and on history's scale: a change of unit has its own
    name.
    """
    now, before = _step(window), _step(history[:, -LONGEST_HISTORY:])
    ordered = np.sort(window, axis=1)
    different = 1 + (np.diff(ordered, axis=1) > 0).sum(axis=1)
    scale, usual = _reach(window), _reach(history[:, -LONGEST_HISTORY:])
    alike = (scale < 5 * usual) & (scale > usual / 20)
    with np.errstate(divide="ignore"):
        chance = different * np.log10(now / np.maximum(before, FINEST))
    return (now > before) & alike & (chance >= BY_CHANCE), now


def _reach(x: Floats) -> Floats:
    seen = ~np.isnan(x)
    return np.asarray(np.where(seen, np.abs(x), 0.0).max(axis=1, initial=0.0))


def _step(x: Floats) -> Floats:
    """The coarsest step that all values are whole multiples of, 0 where there is none, shape (S,)."""
    found = np.zeros(len(x))
    size = np.where(np.isnan(x), 0.0, np.abs(x))
    largest = size.max(axis=1, initial=0.0)
    able = (largest > 0) & (largest < EXACT)
    x, size = np.where(able[:, None], x, np.nan), np.where(able[:, None], size, 0.0)
    for power in range(-8, 7):
        for digit in (1.0, 2.0, 5.0):
            count = x / digit * 10.0**-power if power < 0 else x / (digit * 10.0**power)
            slack = np.minimum(FLOAT_SLACK * (1 + size / digit * 10.0**-power), 0.01)
            whole = (np.abs(count - np.round(count)) <= slack) | np.isnan(x)
            found = np.where(whole.all(axis=1) & able, digit * 10.0**power, found)
    return found
