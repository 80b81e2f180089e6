"""Seasonal feeds with known faults, for the tests of the two measures of a season."""

from __future__ import annotations

import numpy as np
from processes import LIKE, autoregressive, p_values, panel

from sercheck.measure import Question
from sercheck.measures import get

CYCLES, DAY = 42, 24
RISKS = (0.05, 0.01, 0.001)
LENGTHS = {"day": DAY}
HOURS = np.arange(DAY)
SHAPE = np.sqrt(2) * np.sin(2 * np.pi * HOURS / DAY) + np.sin(4 * np.pi * HOURS / DAY + 1)


def noise(kind, seed, series, steps):
    """Noise of variance 1: white, AR(1) with .6 or .9, or AR(1) with .6 and innovations of Student's t3."""
    if kind == "t3":
        shocks = np.random.default_rng(seed).standard_t(3, size=(series, steps + 100)) / np.sqrt(3)
        x = shocks.copy()
        for t in range(1, steps + 100):
            x[:, t] += 0.6 * x[:, t - 1]
        return x[:, 100:] * 0.8
    phi = {"white": 0.0, "ar6": 0.6, "ar9": 0.9}[kind]
    return autoregressive(seed, series, steps, phi) * np.sqrt(1 - phi**2)


def feed(kind, seed, series, cycles, *, strength=1.0, fault="healthy", history=CYCLES):
    """A day's cycle in noise, a window of ``cycles`` days with a fault at its end, and the window's first step."""
    start = history * DAY
    steps = start + cycles * DAY
    random = noise(kind, seed, series, steps)
    season = np.broadcast_to(strength * SHAPE[np.arange(steps) % DAY], (series, steps)).copy()
    window = season[:, start:]
    if fault == "gone":
        window[:] = 0.0
    elif fault == "halved":
        window *= 0.5
    elif fault == "late":
        window[:] = np.roll(season, 1, axis=1)[:, start:]
    elif fault == "late from the middle":
        middle = window.shape[1] // 2
        window[:, middle:] = np.roll(season, 1, axis=1)[:, start + middle :]
    x = season + random
    if fault == "flat in a third":
        third = window.shape[1] // 3
        x[:, -third:] = x[:, -third - 1 : -third]
    return x, start


def rates(measure, kind, seed, series, cycles, *, blocks=1, risk=0.01, **about):
    """How often the measure fails at each of ``RISKS``, and how often it says nothing at ``risk``."""
    fails, silent = np.zeros(len(RISKS)), 0.0
    for block in range(blocks):
        x, start = feed(kind, [seed, block], series, cycles, **about)
        given, fields = panel(x, start, LENGTHS), get(measure).Fields(season="day")
        for place, asked in enumerate(RISKS):
            seen = get(measure).run(given, Question(fields, LIKE, asked, LENGTHS))
            fails[place] += np.mean(p_values(seen) <= asked) / blocks
            if asked == risk:
                silent += np.mean(seen.undecided >= 0) / blocks
    return fails, silent
