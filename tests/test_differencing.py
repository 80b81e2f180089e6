"""How much differencing is advised, what the mean is worth, and a trend told from a wandering level."""

import numpy as np
import pytest
from processes import autoregressive
from reference_values import series

from sercheck.serial.differencing import differencing, without_seasons, worth
from sercheck.serial.periods import find_seasons


def advice(x, natural=()):
    """The advice for series whose seasons were found."""
    found = find_seasons(x, natural)
    return differencing(x, found.steps, found.share)


def test_a_random_walk_wants_one_difference():
    """And one more would show -.5."""
    told = advice(np.cumsum(np.random.default_rng(1).normal(size=(50, 600)), axis=1))
    assert told.first.mean() >= 0.9
    assert told.wanders.mean() >= 0.9
    assert np.median(told.r1[told.first]) == pytest.approx(0.0, abs=0.03)
    assert np.median(told.r1_more[told.first]) == pytest.approx(-0.5, abs=0.03)


@pytest.mark.parametrize("phi", [0.0, 0.6, 0.9])
def test_a_stationary_series_wants_none(phi):
    """White noise and short memory; differencing white noise would give -.5."""
    told = advice(autoregressive(2, 60, 800, phi))
    assert told.first.mean() <= 0.05
    assert (told.season == 0).all()
    if phi == 0:
        assert np.median(told.r1_more) == pytest.approx(-0.5, abs=0.02)


def test_a_line_is_a_trend_and_wants_no_difference():
    """The slope is told, and no unit root."""
    x = 0.02 * np.arange(500) + autoregressive(3, 40, 500, 0.3)
    found = find_seasons(x)
    assert (differencing(x, found.steps, found.share).first).mean() <= 0.05
    value = worth(x, found.steps)
    assert (value.slope_p <= 0.01).mean() >= 0.95
    np.testing.assert_allclose(value.slope, 0.02, rtol=0.15)


def test_no_trend_is_claimed_of_memory():
    """AR(1) .9 over 800 steps: at most three in a hundred at a risk of one."""
    value = worth(autoregressive(4, 400, 800, 0.9), np.zeros((400, 0), dtype=np.int64))
    assert (value.slope_p <= 0.01).mean() <= 0.03


def test_the_airline_series_wants_both_differences():
    """Box and Jenkins (1970) difference it at lags 12 and 1."""
    told = advice(series("AirPassengers"), (12,))
    assert (told.season[0], told.first[0]) == (12, True)


def test_the_mean_of_a_strong_memory_is_worth_little():
    """AR(1) with φ of .8 leaves (1 - φ)/(1 + φ) of the values, a ninth; the season does not count."""
    t = np.arange(2400)
    x = 5 * np.sin(2 * np.pi * t / 24) + autoregressive(5, 60, 2400, 0.8)
    value = worth(x, np.full((60, 1), 24))
    assert np.median(value.n_eff) == pytest.approx(2400 / 9, rel=0.15)


def test_seasons_come_out_and_trends_stay():
    """Phase means of what a line leaves are taken out."""
    t = np.arange(240)
    left = without_seasons((0.5 * t + np.tile([3.0, -1.0, -2.0, 0.0], 60))[None], np.array([[4]]))
    np.testing.assert_allclose(np.diff(left[0]), 0.5, atol=0.02)


def test_too_little_is_no_advice():
    """Constant, empty, short and missing series: nothing is advised and nothing warned of."""
    for x in (np.full((1, 50), 3.0), np.zeros((1, 0)), np.ones((1, 1)), np.full((1, 40), np.nan), np.arange(6.0)[None]):
        none = np.zeros((len(x), 0), dtype=np.int64)
        told = differencing(x, none, none.astype(float))
        assert not told.first.any()
        assert np.isnan(worth(x, none).slope_p).all()
