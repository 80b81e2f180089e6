"""Slopes and changes of level within the window."""

import numpy as np
import pytest
from processes import agrees, alarms, look, make, p_values, power_at_detectable

from sercheck.measure import Stays
from sercheck.measures.jump import Jump
from sercheck.measures.trend import Trend

CELLS = ["white", "ar0.6", "ar0.9", "t3", "lognormal", "seasonal"]


@pytest.mark.parametrize("kind", CELLS)
@pytest.mark.parametrize("measure", [Trend(), Jump()])
def test_false_alarms_against_history(measure, kind):
    """A healthy batch is held about as often as asked, where limits for independent rows hold far too many."""
    honest, naive = alarms(measure, kind, 96, 768, risks=(0.01,), series=1000)
    assert honest[0] <= 0.015 + 3 * np.sqrt(0.015 / 1000)
    if kind == "ar0.9":
        assert naive[0] > 0.3


@pytest.mark.parametrize("kind", ["white", "ar0.6", "seasonal"])
@pytest.mark.parametrize("measure", [Trend(), Jump()])
def test_false_alarms_against_a_number(measure, kind):
    """The two witnesses keep the risk on 336 rows alone."""
    honest, _ = alarms(measure, kind, 336, 0, risks=(0.01,), series=1000, stays=Stays("between", 0.0, 0.0))
    assert honest[0] <= 0.015 + 3 * np.sqrt(0.015 / 1000)


@pytest.mark.parametrize("past", [0, 960])
@pytest.mark.parametrize("measure", [Trend(), Jump()])
def test_limit_and_p_value_agree(measure, past):
    """The observation is beyond the limit exactly when the p-value is within the risk."""
    values = make("ar0.6", 1, 200, past + 168)
    values[:100, past:] += np.linspace(0, 3, 168)
    agrees(look(measure, values, past, Stays("between", -0.01, 0.01)))
    if past:
        agrees(look(measure, values, past))


def test_slope_in_the_unit_of_the_rows():
    """A straight line's slope is told per step, exactly without history and nearly against it."""
    values = make("white", 2, 60, 168 * 11)
    values[:, 1680:] += 0.015 * (np.arange(168) - 83.5)
    seen = look(Trend(), values, 1680)
    assert (p_values(seen) < 0.01).all()
    assert abs(np.median(seen.observed) - 0.015) < 0.003
    alone = look(Trend(), values[:, 1680:], 0, Stays("below", high=0.0))
    np.testing.assert_allclose(alone.observed[:, 0], np.polyfit(np.arange(168), values[:, 1680:].T, 1)[0], rtol=1e-9)


def test_jump_in_the_unit_of_the_rows():
    """A step up in the middle is found, told with its sign, and kept apart from one downwards."""
    values = make("white", 3, 60, 168 * 11)
    values[:30, 1764:] += 1.5
    values[30:, 1764:] -= 1.5
    seen = look(Jump(), values, 1680)
    assert (p_values(seen) < 1e-4).all()
    assert abs(np.median(seen.observed[:30]) - 1.5) < 0.25
    assert (look(Jump(), values, 1680, Stays("below", high=0.5)).upper.p_value("upper")[30:] > 0.5).all()


def test_a_jump_within_its_bound_passes():
    """A jump of 1.5 keeps a bound of 2 and breaks one of .5, without history."""
    values = make("white", 4, 60, 336)
    values[:, 168:] += 1.5
    assert (p_values(look(Jump(), values, 0, Stays("below", high=2.0))) > 0.05).all()
    assert (p_values(look(Jump(), values, 0, Stays("below", high=0.5))) < 0.01).mean() > 0.95


def test_detectable_is_found():
    """A slope or jump of the detectable size is found with probability .8."""
    n = 96
    slope = power_at_detectable(Trend(), "ar0.6", n, 768, lambda window, size, _: window + size * (np.arange(n) - 47.5))
    step = power_at_detectable(Jump(), "ar0.6", n, 768, lambda window, size, _: window + size * (np.arange(n) >= 48))
    assert abs(slope - 0.8) < 0.08
    assert abs(step - 0.8) < 0.1


@pytest.mark.parametrize("measure", [Trend(), Jump()])
def test_gaps(measure):
    """Rows missing at random in the window are allowed for."""
    values = make("ar0.6", 5, 1000, 96 * 13)
    values[np.random.default_rng(6).random(values.shape) < 0.25] = np.nan
    p = p_values(look(measure, values, 96 * 12))
    assert (p <= 0.01).mean() <= 0.022


@pytest.mark.calibration
@pytest.mark.parametrize("kind", CELLS)
@pytest.mark.parametrize("measure", [Trend(), Jump()])
def test_calibrated_against_history(measure, kind):
    """20,000 healthy batches: at most 2.2 and 2.7 times .01 and .001."""
    honest, naive = alarms(measure, kind, 96, 960, series=1000, blocks=20)
    print(type(measure).__name__, kind, honest, naive)
    assert (honest[1:] <= np.array([0.022, 0.0027])).all()
