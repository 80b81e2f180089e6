"""Clusters by a model of the marks: a second witness where there is little but the window."""

from __future__ import annotations

import numpy as np
from clusters import markov
from processes import make

from sercheck.grid import Axis, Panel
from sercheck.measures._cycle import clusters_assumed, shortest_cycle
from sercheck.serial.cluster_model import modelled_clusters

HOUR = 3_600_000_000_000


def test_the_size_is_that_of_the_clusters():
    """Runs of four on average weigh 2 · 4 (1 - share) - 1 times as much as single rows; single rows weigh one each."""
    rng = np.random.default_rng(1)
    told = modelled_clusters(markov(rng, 400, 2000, 0.2, 4), None, 2000)
    assert abs(np.median(told.size) / (2 / (1 / 4 + 0.2 / 0.8 / 4) - 1) - 1) < 0.1
    single = modelled_clusters((rng.random((400, 2000)) < 0.2).astype(float), None, 2000)
    assert np.median(single.size) < 1.1
    assert (told.cycles == 1).all()
    assert np.median(told.df) < np.median(single.df)


def test_cycles_that_hang_together_add_to_it():
    """Yesterday's marks make today's likelier: the factor grows with the cycles, and is 1 within one."""
    marks = (make("seasonal_ar", 2, 300, 14 * 24) > 0.5).astype(float)
    factors = [np.median(modelled_clusters(marks, 24, rows).cycles) for rows in (24, 48, 168, 336)]
    assert factors[0] == 1.0
    assert (np.diff(factors) > 0.05).all()
    assert factors[-1] > 1.8
    noise = (np.random.default_rng(3).random(marks.shape) < 0.3).astype(float)
    assert np.median(modelled_clusters(noise, 24, 336).cycles) < 1.2


def test_two_cycles_in_closed_form():
    """With two cycles that agree as strongly as is allowed for, 1 + Φ."""
    half = np.random.default_rng(4).random((1, 200)) < 0.5
    marks = np.hstack([half, half]).astype(float)
    np.testing.assert_allclose(modelled_clusters(marks, 200, 400).cycles, 1.9, rtol=1e-12)


def test_nothing_to_learn_from():
    """No marks, all marks, none known, one row: one row weighs one."""
    for marks in (np.zeros((2, 100)), np.ones((2, 100)), np.full((2, 100), np.nan), np.ones((2, 1)), np.zeros((0, 9))):
        told = modelled_clusters(marks, 24, marks.shape[1])
        assert (told.size == 1).all()
        assert (told.cycles == 1).all()


def of_steps(stamps, lengths=None):
    """A panel of these stamps."""
    steps = len(stamps)
    phases = {name: np.arange(steps) % length for name, length in (lengths or {}).items()}
    every = np.ones(steps, dtype=bool)
    axis = Axis(np.asarray(stamps), np.arange(steps), lengths or {}, phases, ~every, every)
    return Panel(np.zeros((1, steps)), 0, axis, np.ones((1, steps), dtype=bool))


def test_a_day_is_taken_for_the_cycle_where_none_is_declared():
    """The shortest declared season counts; else a day's steps; else none, and the record says so."""
    assert shortest_cycle(of_steps(np.arange(50) * HOUR)) == 24
    assert shortest_cycle(of_steps(np.arange(50) * HOUR // 4)) == 96
    assert shortest_cycle(of_steps(np.arange(50) * HOUR, {"week": 168, "shift": 8})) == 8
    for stamps in (np.arange(50) * HOUR * 24, np.arange(50) * HOUR * 7, np.cumsum(np.arange(50)) * HOUR, [0], []):
        assert shortest_cycle(of_steps(np.asarray(stamps, dtype=np.int64))) is None
    told = clusters_assumed(of_steps(np.arange(50) * HOUR), "gaps", "history")
    assert told.endswith("by no cycle but one of 24 steps")
    assert clusters_assumed(of_steps([0]), "gaps", "history").endswith("by no cycle")
