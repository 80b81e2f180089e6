"""Panels for tests: series on an hourly axis with a day and a week, history before the window."""

from __future__ import annotations

import numpy as np

from sercheck.grid import Axis, Grid, Panel, Tally
from sercheck.measure import Clock

HOUR = 3_600_000_000_000
MONDAY = np.datetime64("2026-01-05T00", "ns").astype(np.int64)
LENGTHS = {"day": 24, "week": 168, "year": 672}


def hourly(steps: int) -> Axis:
    """An axis of whole hours from a Monday on; a year has 28 days here, so that short panels hold several."""
    index = np.arange(steps, dtype=np.int64)
    return Axis(
        stamps=MONDAY + index * HOUR,
        index=index,
        lengths=dict(LENGTHS),
        phases={name: index % length for name, length in LENGTHS.items()},
        closed=np.zeros(steps, dtype=bool),
        expected=np.ones(steps, dtype=bool),
    )


def frozen(values: np.ndarray) -> np.ndarray:
    """A copy that nobody can write to."""
    copy = np.array(values, dtype=np.float64)
    copy.flags.writeable = False
    return copy


def panel_of(values: np.ndarray, start: int) -> Panel:
    """A panel of the values (series, time), of which the first ``start`` steps are history."""
    values = frozen(values)
    return Panel(values, start, hourly(values.shape[1]), ~np.isnan(values), "kwh")


def clock_of(panel: Panel) -> Clock:
    """The clock of a panel whose batch was delivered in order and is judged two hours after its last step."""
    window = panel.delivered[:, panel.start :]
    stamps = panel.axis.stamps[panel.start :]
    newest = np.where(window, stamps, np.iinfo(np.int64).min).max(axis=1, initial=np.iinfo(np.int64).min)
    none = np.zeros(len(window), dtype=np.int64)
    tally = Tally(window.sum(axis=1), none, none, none, none, {"kwh": none}, {"kwh": none}, newest)
    keys = np.array([f"s{place}" for place in range(len(window))], dtype=object)
    grid = Grid(keys, panel.axis, panel.start, {"kwh": panel.values}, panel.delivered, tally)
    return Clock(grid, int(panel.axis.stamps[-1]) + 2 * HOUR, HOUR)


def healthy(series: int, steps: int, seed: int, *, memory: float = 0.5) -> np.ndarray:
    """A daily cycle and autoregressive noise about a level of 20, all above 0, shape (series, steps)."""
    from scipy.signal import lfilter

    rng = np.random.default_rng(seed)
    noise = lfilter([1.0], [1.0, -memory], rng.normal(size=(series, steps + 100)), axis=1)[:, 100:]
    return 20.0 + 3.0 * np.sin(2 * np.pi * np.arange(steps) / 24) + noise
