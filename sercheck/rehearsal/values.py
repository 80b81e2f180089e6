"""Faults of the values: noise, smoothing, differences, units, sign and season; pure seeded functions on numpy arrays.

Each takes what is ``Given`` and gives the broken window; what comes in is never written to. NaN stays NaN. Where
history holds no negative value, noise and a season taken out make none either.
"""

from __future__ import annotations

import numpy as np

from sercheck.rehearsal.rows import Given, with_before
from sercheck.serial.arrays import Floats
from sercheck.serial.season import robust_phase_means


def _mean(x: Floats) -> Floats:
    """Mean over time of what is there, shape (S, 1); 0 for an empty series."""
    return np.asarray(np.nansum(x, axis=1, keepdims=True) / np.maximum((~np.isnan(x)).sum(axis=1, keepdims=True), 1))


def _deviation(x: Floats) -> Floats:
    """Standard deviation over time of what is there, shape (S, 1)."""
    return np.sqrt(_mean((x - _mean(x)) ** 2))


def _as_low_as_history(x: Floats, history: Floats) -> Floats:
    negative = (history < 0).any(axis=1, keepdims=True)
    return np.where(negative, x, np.maximum(x, 0.0))


def noise(given: Given) -> Floats:
    """Independent normal values with the window's mean and standard deviation."""
    drawn = _mean(given.window) + _deviation(given.window) * given.rng.standard_normal(given.window.shape)
    return np.where(np.isnan(given.window), np.nan, _as_low_as_history(drawn, given.history))


def smoothed(given: Given) -> Floats:
    """Each value the mean of ``size`` successive ones around it (of those there are, at the end)."""
    reach = int(given.size) // 2
    x = with_before(given.window, given.history, reach)
    n = given.window.shape[1]
    total, count = np.zeros(given.window.shape), np.zeros(given.window.shape)
    for k in range(2 * reach + 1):
        part = x[:, k : k + n]
        seen = ~np.isnan(part)
        total[:, : part.shape[1]] += np.where(seen, part, 0.0)
        count[:, : part.shape[1]] += seen
    return np.where(np.isnan(given.window), np.nan, total / np.maximum(count, 1))


def exponentially_smoothed(given: Given) -> Floats:
    """s_t = size · x_t + (1 − size) s_{t−1}, from history's last value on; a missing row leaves s as it is."""
    s = with_before(given.window, given.history, 1)[:, 0]
    out = np.empty(given.window.shape)
    for t in range(given.window.shape[1]):
        x = given.window[:, t]
        s = np.where(np.isnan(s), x, np.where(np.isnan(x), s, given.size * x + (1 - given.size) * s))
        out[:, t] = np.where(np.isnan(x), np.nan, s)
    return out


def interleaved(given: Given) -> Floats:
    """Every second row from another source: the cycle before, ``size`` standard deviations of history higher."""
    other = with_before(given.window, given.history, given.steps)[:, : given.window.shape[1]]
    out = given.window.copy()
    out[:, 1::2] = (other + given.size * _deviation(given.history if given.history.shape[1] else given.window))[:, 1::2]
    return out


def differenced(given: Given) -> Floats:
    """Changes since the row before in place of values; ``size`` times over."""
    return np.diff(with_before(given.window, given.history, int(given.size)), int(given.size), axis=1)


def running_total(given: Given) -> Floats:
    """The total since the window began in place of each value."""
    return np.where(np.isnan(given.window), np.nan, np.nancumsum(given.window, axis=1))


def spread_evenly(given: Given) -> Floats:
    """Means of coarser stretches (``size`` cycles, at least three rows) given to each of their rows."""
    n = given.window.shape[1]
    length = max(round(given.size * given.steps), 3)
    starts = np.arange(0, n, length)
    seen = ~np.isnan(given.window)
    total = np.add.reduceat(np.where(seen, given.window, 0.0), starts, axis=1)
    mean = total / np.maximum(np.add.reduceat(seen, starts, axis=1, dtype=np.int64), 1)
    return np.where(seen, np.repeat(mean, length, axis=1)[:, :n], np.nan)


def sign_turned(given: Given) -> Floats:
    """Every value with the other sign."""
    return -given.window


def mirrored(given: Given) -> Floats:
    """Every value as far below the window's mean as it was above."""
    return 2 * _mean(given.window) - given.window


def unit_changed(given: Given) -> Floats:
    """Every value times ``size``."""
    return given.window * given.size


def unit_changed_from_middle(given: Given) -> Floats:
    """Values times ``size`` from the middle of the window on."""
    out = given.window.copy()
    out[:, given.window.shape[1] // 2 :] *= given.size
    return out


def level_shifted(given: Given) -> Floats:
    """Every value higher by ``size`` standard deviations of history."""
    return given.window + given.size * _deviation(given.history if given.history.shape[1] else given.window)


def rounded(given: Given) -> Floats:
    """Values to whole multiples of 1, 2 or 5 times a power of ten, the nearest to ``size`` standard deviations."""
    wanted = np.log10(np.maximum(given.size * _deviation(given.window), np.finfo(np.float64).tiny))
    known = np.log10([1.0, 2.0, 5.0, 10.0])
    nearest = np.argmin(np.abs(wanted % 1 - known), axis=1)[:, None]
    step = np.array([1.0, 2.0, 5.0, 10.0])[nearest] * 10.0 ** np.floor(wanted)
    return np.asarray(np.round(given.window / step) * step)


def season_weakened(given: Given) -> Floats:
    """The season at ``size`` times its strength (0: gone); what is left of the values stays."""
    N, n = given.history.shape[1], given.window.shape[1]
    learned = robust_phase_means(given.history, np.arange(-N, 0) % given.steps, given.steps)
    profile = np.nan_to_num(learned.means - np.nanmean(learned.means, axis=1, keepdims=True))
    weaker = given.window - (1 - given.size) * profile[:, np.arange(n) % given.steps]
    return _as_low_as_history(weaker, given.history)
