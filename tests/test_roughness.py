"""The measure ``roughness``: fourth differences beside first ones."""

from __future__ import annotations

import numpy as np
import pytest
from processes import agrees, look, make, p_values

from sercheck.measures import get
from sercheck.serial.batch_statistics import ROUGH_VARIANCE, rough_unit, roughness

MEASURE = get("roughness")


def by_hand(x):
    """The ratio of one series in loops; a difference with a missing value takes no part."""

    def mean_square(weights):
        order = len(weights) - 1
        squares = [sum(w * v for w, v in zip(weights, x[t : t + order + 1], strict=True)) ** 2
                   for t in range(len(x) - order)]  # fmt: skip
        return np.mean([s for s in squares if np.isfinite(s)])

    return mean_square([1, -4, 6, -4, 1]) / mean_square([-1, 1]) / 35


def test_the_ratio_is_that_of_plain_loops():
    """Every batch's ratio is that of its own differences, gaps left open; one without values or changes has none."""
    x = np.random.default_rng(1).normal(size=(2, 96))
    x[0, 30] = np.nan
    x[1, 24:48] = 5.0
    x[1, 48:72] = np.nan
    got = rough_unit(roughness(x, 24))
    np.testing.assert_allclose(got[0], [by_hand(x[0, k : k + 24]) for k in (0, 24, 48, 72)], rtol=1e-12)
    np.testing.assert_allclose(got[1, [0, 3]], [by_hand(x[1, k : k + 24]) for k in (0, 72)], rtol=1e-12)
    assert np.isnan(got[1, [1, 2]]).all()


def test_known_values():
    """1 for independent values with the variance told of its logarithm; g³/35 for a cosine, g = 2 - 2 cos w."""
    x = np.random.default_rng(2).normal(size=(2000, 400))
    logs = roughness(x, 400)[:, 0]
    assert np.exp(logs).mean() / 35 == pytest.approx(1, abs=0.01)
    assert 400 * logs.var() == pytest.approx(ROUGH_VARIANCE, rel=0.12)
    w = 2 * np.pi / 24
    daily = np.cos(w * np.arange(24 * 200))[None]
    assert rough_unit(roughness(daily, 24 * 200))[0, 0] == pytest.approx((2 - 2 * np.cos(w)) ** 3 / 35, rel=0.01)
    np.testing.assert_allclose(roughness(3 + 1e6 * x, 400), roughness(x, 400), rtol=1e-6)


@pytest.mark.parametrize("kind", ["white", "ar.6", "ar.9", "t3", "seasonal"])
def test_a_stationary_history_keeps_the_risk(kind):
    """Forty days of a stationary history: no more false alarms than asked."""
    p = p_values(look(MEASURE, make(kind, [3, 0], 1500, 41 * 24), 40 * 24))
    for risk, most in ((0.05, 0.06), (0.01, 0.016)):
        assert np.mean(p <= risk) <= most + 2 * np.sqrt(risk / 1500)
    assert np.mean(p <= 0.05) > 0.02


def test_smoothing_is_found_and_noise_too():
    """AR(1) .6 about a daily cycle: a day smoothed over three rows is found by its fall, a shuffled one by its rise."""
    x = make("ar.6", [4, 0], 200, 105 * 24) + 15 * np.sin(2 * np.pi * np.arange(105 * 24) / 24)
    smooth = x.copy()
    smooth[:, -24:] = sum(x[:, x.shape[1] - 26 + k : x.shape[1] - 2 + k] for k in range(3)) / 3
    mixed = x.copy()
    mixed[:, -24:] = np.random.default_rng(5).permuted(x[:, -24:], axis=1)
    usual = look(MEASURE, x, 104 * 24)
    for broken, side, least in ((smooth, -1, 0.5), (mixed, 1, 0.95)):
        seen = look(MEASURE, broken, 104 * 24)
        assert np.mean(p_values(seen) <= 0.01) > least
        assert np.median(side * (seen.observed - usual.observed)) > 0
        agrees(seen)


def test_too_little_is_undecided():
    """No history, a short one, a constant window: undecided with the reason."""
    x = make("white", [6, 0], 3, 60 * 24)
    assert "no history" in undecided(look(MEASURE, x[:, :24], 0))
    assert "stretches" in undecided(look(MEASURE, x[:, : 5 * 24], 4 * 24))
    still = x.copy()
    still[:, -24:] = 1.0
    for start in (30 * 24, 59 * 24):
        short = np.concatenate((still[:, :start], still[:, -24:]), axis=1)
        assert undecided(look(MEASURE, short, start))


def undecided(seen):
    """The reason of the first series."""
    assert (seen.undecided >= 0).all()
    return seen.reasons[seen.undecided[0, 0]]
