"""Faults put into real feeds for seven days; each takes values up to the end of those days and gives broken ones.

Arguments: x of shape (S, T) ending with the seven days, the profile of those days on the judged scale, the unit of
that scale's logarithm (NaN: none), the first broken step, a generator, and the steps of a day. What the catalogue of
faults has is taken from it, for all seven days at once or for each day by itself; a season is weakened on the scale
that is judged.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from sercheck.rehearsal.faults import BUILT_IN
from sercheck.serial.walk_forward import off_scale, on_scale

KNOWN = {fault.name: fault for fault in BUILT_IN}

RealFault = Callable[[np.ndarray, np.ndarray, np.ndarray, int, np.random.Generator, int], np.ndarray]


def at_once(name: str, size: float, *, hours: bool = False) -> RealFault:
    """A fault of the catalogue put into the seven days as one window; its size in steps, or in hours."""

    def broken(x, profile, log, begin, rng, day):
        out = x.copy()
        out[:, begin:] = KNOWN[name].apply(x[:, begin:], x[:, :begin], size * day / 24 if hours else size, rng, day)
        return out

    return broken


def each_day(name: str, size: float, *, hours: bool = False) -> RealFault:
    """A fault of the catalogue put into every day, with what was delivered right before that day."""

    def broken(x, profile, log, begin, rng, day):
        days = x[:, begin:].reshape(-1, day)
        before = np.lib.stride_tricks.sliding_window_view(x, begin, axis=1)[:, : x.shape[1] - begin : day]
        large = size * day / 24 if hours else size
        out = x.copy()
        out[:, begin:] = KNOWN[name].apply(days, before.reshape(-1, begin), large, rng, day).reshape(len(x), -1)
        return out

    return broken


def yesterday(x, profile, log, begin, rng, day):
    """The day before delivered again, seven times."""
    out = x.copy()
    out[:, begin:] = np.tile(x[:, begin - day : begin], (x.shape[1] - begin) // day)
    return out


def season_times(by: float) -> RealFault:
    """The season at another strength on the scale that it lives on: differences in the unit, or percentages."""

    def broken(x, profile, log, begin, rng, day):
        out = x.copy()
        days = profile.reshape(len(x), -1, day)
        swing = (days - days.mean(axis=2, keepdims=True)).reshape(len(x), -1) * (1 - by)
        lower = off_scale(on_scale(x[:, begin:], log) - swing, log)
        out[:, begin:] = np.where(np.isnan(log)[:, None], lower, np.maximum(lower, 0))
        return out

    return broken


FAULTS: dict[str, RealFault] = {
    "shuffled": each_day("shuffled", 1),
    "filled forward 30 %": at_once("filled forward", 0.3),
    "stuck 6 h": each_day("stuck", 6, hours=True),
    "yesterday again": yesterday,
    "last week again": at_once("batch again", 1),
    "noise instead": each_day("noise", 1),
    "flattened": season_times(0),
    "smoothed over 3": at_once("smoothed", 3),
    "season halved": season_times(0.5),
    "slipped by one hour": at_once("clock slipped", 1, hours=True),
    "times 1.2": at_once("unit changed", 1.2),
}
