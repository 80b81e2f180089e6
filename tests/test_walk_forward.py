"""The profile that learns as the feed goes on."""

from __future__ import annotations

import numpy as np
import pytest
from naive import recent as naive

from sercheck.serial.walk_forward import cycles, log_unit, middle, off_scale, on_scale, walk_forward

WEEK = 168


def learn(y, length=24, delay=WEEK, gain=None):
    """A profile by hour of day with all of the series as first history."""
    y = np.atleast_2d(y)
    phase = np.arange(y.shape[1]) % length
    gain = None if gain is None else np.full(len(y), gain)
    return walk_forward(y, phase, length, delay, first=y.shape[1], block=24, gain=gain)


def season(days, length=24):
    """A daily cycle."""
    return np.tile(np.sin(2 * np.pi * np.arange(length) / length), days * 24 // length)


def test_exact_cycle():
    """A series that repeats itself is its own profile, and its neighbours are the steps beside it."""
    y = season(20)
    got = learn(y)
    told = ~np.isnan(got.here[0])
    assert told.sum() == (20 - 8) * 24
    np.testing.assert_allclose(got.here[0, told], y[told], atol=1e-12)
    np.testing.assert_allclose(got.ahead[0, told], np.roll(y, -1)[told], atol=1e-12)
    np.testing.assert_allclose(got.behind[0, told], np.roll(y, 1)[told], atol=1e-12)


@pytest.mark.parametrize("gain", [0.0, 0.1])
@pytest.mark.parametrize(("length", "delay"), [(24, WEEK), (WEEK, WEEK), (10, 25)])
def test_slow_twin(gain, length, delay):
    """The recursion equals the one written out place by place, missing values and all."""
    rng = np.random.default_rng(3)
    y = season(70)[: 1680 // length * length] + rng.standard_t(2, 1680 // length * length)
    y[rng.random(len(y)) < 0.1] = np.nan
    phase = np.arange(len(y)) % length
    got = walk_forward(y[None], phase, length, delay, first=len(y), block=length, gain=np.array([gain])).here[0]
    want = naive.profile(y, phase, length, delay, gain)
    np.testing.assert_array_equal(np.isnan(got), np.isnan(want))
    told = ~np.isnan(want)
    np.testing.assert_allclose(got[told], want[told], atol=1e-9)


def test_never_from_the_last_week():
    """What came within the delay changes nothing of the profile that it is held against."""
    rng = np.random.default_rng(1)
    y = season(60) + rng.standard_normal(1440)
    other = y.copy()
    other[-WEEK:] += 100
    np.testing.assert_array_equal(learn(y, gain=0.1).here, learn(other, gain=0.1).here)


def test_one_broken_cycle_does_not_bend_it():
    """A cycle a thousand times too high moves the profile by no more than its clipped weight."""
    rng = np.random.default_rng(2)
    y = season(60) + 0.1 * rng.standard_normal(1440)
    broken = y.copy()
    broken[30 * 24 : 31 * 24] *= 1000
    moved = np.abs(learn(y, gain=0.1).here - learn(broken, gain=0.1).here)
    assert np.nanmax(moved) < 0.1 * 4 * 0.3 + 0.05


def test_learns_a_season_that_drifts():
    """The gain is none for a fixed season in noise and more than that for one that moves."""
    rng = np.random.default_rng(4)
    fixed = season(90) + rng.standard_normal(2160)
    moving = season(90) * np.linspace(1, 20, 2160)
    got = learn(np.stack([fixed, moving]))
    assert got.gain[0] == 0.0
    assert got.gain[1] > 0.0


def test_missing_values_teach_nothing():
    """A series with a missing cycle has the profile of the series without it from then on, one cycle later."""
    y = season(30)
    y[24 * 10 : 24 * 11] = np.nan
    got = learn(y, gain=0.0).here[0]
    np.testing.assert_allclose(got[-24:], season(1), atol=1e-12)
    assert np.isnan(got[: 8 * 24]).all()


def test_skipped_and_doubled_hours():
    """A phase that never comes leaves its place empty, one that comes twice is taught by the first."""
    phase = np.r_[np.arange(24), np.delete(np.arange(24), 2), np.arange(3), np.arange(2, 24)]
    got = cycles(phase, 24)
    assert got.step.shape == (3, 24)
    assert got.step[1, 2] == -1
    assert got.step[2, 2] == 24 + 23 + 2
    assert (np.diff(got.place) == 0).sum() == 1
    np.testing.assert_array_equal(got.place % 24, phase)


def test_median_of_some_of_five():
    """The median of the finite ones among five equals numpy's."""
    values = np.random.default_rng(5).random((5, 50))
    for count in range(1, 6):
        some = values.copy()
        some[count:] = np.inf
        mixed = list(np.random.default_rng(6).permuted(some, axis=0))
        np.testing.assert_allclose(middle(mixed, np.full(50, float(count))), np.median(values[:count], axis=0))
    assert (middle([np.full(3, np.inf)] * 5, np.zeros(3)) == 0).all()


def multiplicative(rng, days=60):
    """A cycle with a constant percentage of scatter."""
    profile = np.exp(1.5 * season(days))
    return profile * np.exp(0.3 * rng.standard_normal(len(profile)))


def test_logs_where_scatter_grows_with_level():
    """A season with a constant percentage of scatter is judged in logs, one with constant scatter is not."""
    rng = np.random.default_rng(7)
    growing = multiplicative(rng)
    plain = 20 + 5 * season(60) + rng.standard_normal(1440)
    negative = growing.copy()
    negative[5] = -1
    x = np.stack([growing, plain, negative])
    got = log_unit(x, learn(x).here)
    assert got[0] > 0
    assert np.isnan(got[1:]).all()


def test_unit_of_the_logarithm_follows_the_unit_of_the_values():
    """The same series in per mille is judged on the same scale."""
    x = np.stack([multiplicative(np.random.default_rng(8))] * 2) * np.array([[1.0], [1000.0]])
    c = log_unit(x, learn(x).here)
    assert c[1] == pytest.approx(1000 * c[0])
    y = on_scale(x, c)
    np.testing.assert_allclose(y[0], y[1])
    np.testing.assert_allclose(off_scale(y, c), x)


def test_no_logs_leave_the_values():
    """A series without a logarithm passes through both ways."""
    x = np.array([[-1.0, np.nan, 3.0]])
    none = np.array([np.nan])
    np.testing.assert_array_equal(on_scale(x, none), x)
    np.testing.assert_array_equal(off_scale(x, none), x)


def test_series_do_not_touch_each_other():
    """A series has the same profile alone and in a block, in any order."""
    rng = np.random.default_rng(9)
    y = season(40) + rng.standard_normal((4, 960))
    whole = learn(y)
    np.testing.assert_array_equal(learn(y[::-1]).here[::-1], whole.here)
    np.testing.assert_array_equal(learn(y[2]).here[0], whole.here[2])
