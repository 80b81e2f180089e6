"""Faults put into real feeds for seven days; each takes values up to the end of those days and gives broken ones.

Arguments: x of shape (S, T) ending with the seven days, the profile of those days on the judged scale, the unit of
that scale's logarithm (NaN: none), the first broken step, and a generator.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from sercheck.serial.walk_forward import off_scale, on_scale

DAY, WEEK = 24, 168


def _by_day(x: np.ndarray, begin: int, change: Callable[[np.ndarray], np.ndarray]) -> np.ndarray:
    out = x.copy()
    days = x[:, begin:].reshape(len(x), -1, DAY)
    out[:, begin:] = change(days.copy()).reshape(len(x), -1)
    return out


def _filled(x: np.ndarray, empty: np.ndarray) -> np.ndarray:
    """Every empty place takes the last value before it."""
    place = np.where(empty, 0, np.arange(x.shape[1]))
    return np.take_along_axis(x, np.maximum.accumulate(place, axis=1), axis=1)


def shuffled(x, profile, log, begin, rng):
    """Rows of each day in random order."""
    return _by_day(x, begin, lambda days: rng.permuted(days, axis=2))


def filled_forward(x, profile, log, begin, rng):
    """Three rows in ten replaced by the row before."""
    empty = np.zeros(x.shape, dtype=bool)
    empty[:, begin:] = rng.random((len(x), x.shape[1] - begin)) < 0.3
    return _filled(x, empty)


def stuck(x, profile, log, begin, rng):
    """Six hours in a row at one value, each day, at a random hour."""
    empty = np.zeros(x.shape, dtype=bool)
    for day in range(begin, x.shape[1], DAY):
        at = day + int(rng.integers(1, DAY - 6))
        empty[:, at : at + 6] = True
    return _filled(x, empty)


def yesterday(x, profile, log, begin, rng):
    """The day before delivered again."""
    out = x.copy()
    out[:, begin:] = np.tile(x[:, begin - DAY : begin], (x.shape[1] - begin) // DAY)
    return out


def last_week(x, profile, log, begin, rng):
    """The week before delivered again."""
    out = x.copy()
    out[:, begin:] = x[:, begin - WEEK : begin]
    return out


def noise(x, profile, log, begin, rng):
    """Independent values with the day's mean and standard deviation."""

    def change(days: np.ndarray) -> np.ndarray:
        mean, sd = np.nanmean(days, axis=2, keepdims=True), np.nanstd(days, axis=2, keepdims=True)
        floor = np.where(np.nanmin(x, axis=1) >= 0, 0.0, -np.inf)[:, None, None]
        return np.maximum(mean + sd * rng.standard_normal(days.shape), floor)

    return _by_day(x, begin, change)


def flattened(x, profile, log, begin, rng):
    """The season taken out, its mean left."""
    return _season_times(x, profile, log, begin, 0.0)


def halved(x, profile, log, begin, rng):
    """The season at half its strength."""
    return _season_times(x, profile, log, begin, 0.5)


def _season_times(x: np.ndarray, profile: np.ndarray, log: np.ndarray, begin: int, by: float) -> np.ndarray:
    """On the scale that the season lives on: differences in the unit, or percentages."""
    out = x.copy()
    days = profile.reshape(len(x), -1, DAY)
    swing = (days - days.mean(axis=2, keepdims=True)).reshape(len(x), -1) * (1 - by)
    tail = x[:, begin:]
    lower = off_scale(on_scale(tail, log) - swing, log)
    out[:, begin:] = np.where(np.isnan(log)[:, None], lower, np.maximum(lower, 0))
    return out


def smoothed(x, profile, log, begin, rng):
    """Each value the mean of itself and its two neighbours."""
    out = x.copy()
    before, after = x[:, begin - 1 : -1], np.concatenate((x[:, begin + 1 :], x[:, -1:]), axis=1)
    out[:, begin:] = (before + x[:, begin:] + after) / 3
    return out


def slipped(x, profile, log, begin, rng):
    """Stamps an hour late."""
    out = x.copy()
    out[:, begin:] = x[:, begin - 1 : -1]
    return out


def scaled(x, profile, log, begin, rng):
    """Values times 1.2."""
    out = x.copy()
    out[:, begin:] *= 1.2
    return out


FAULTS = {
    "shuffled": shuffled,
    "filled forward 30 %": filled_forward,
    "stuck 6 h": stuck,
    "yesterday again": yesterday,
    "last week again": last_week,
    "noise instead": noise,
    "flattened": flattened,
    "smoothed over 3": smoothed,
    "season halved": halved,
    "slipped by one hour": slipped,
    "times 1.2": scaled,
}
