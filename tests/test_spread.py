"""The spread: log variances against history's stretches."""

import numpy as np
import pytest
from cells import PROCESSES
from processes import SEASONAL, agrees, alarms, look, make, p_values, power_at_detectable

from sercheck.measure import Stays
from sercheck.measures.spread import Spread


@pytest.mark.parametrize("kind", ["white", "ar0.9", "t3", "lognormal", "seasonal"])
def test_false_alarms_against_history(kind):
    """A healthy batch is held about as often as asked, where an F test of independent rows holds far too many."""
    honest, naive = alarms(Spread(), kind, 96, 768, risks=(0.01,), series=1500)
    assert honest[0] <= 0.015 + 3 * np.sqrt(0.015 / 1500)
    if kind in ("ar0.9", "lognormal"):
        assert naive[0] > 0.05


SIGMAS = {"white": 1.0, "ar0.6": 1.25, "ar0.9": 0.19**-0.5, "seasonal_ar": PROCESSES["seasonal AR"].deviation}


@pytest.mark.parametrize("kind", SIGMAS)
@pytest.mark.parametrize("side", ["below", "above"])
def test_false_alarms_against_a_number_alone(kind, side):
    """A light-tailed feed's variance scatters by its effective size, too small a one by a careful view of it."""
    bound = SIGMAS[kind]
    stays = Stays("below", high=bound) if side == "below" else Stays("above", low=bound)
    honest, naive = alarms(Spread(), kind, 336, 0, risks=(0.01,), series=3000, stays=stays, tails="light")
    assert honest[0] <= 0.015 + 3 * np.sqrt(0.015 / 3000)
    if kind == "ar0.9":
        assert naive[0] > 0.1


@pytest.mark.parametrize("kind", ["white", "ar0.6"])
def test_a_change_is_found_without_history(kind):
    """A spread a third larger or smaller than allowed is found in two weeks of hours, and never left undecided."""
    x = make(kind, 7, 500, 336)
    for stays in (Stays("below", high=x.std() / 1.33), Stays("above", low=x.std() * 1.33)):
        seen = look(Spread(), x, 0, stays, tails="light")
        assert (seen.undecided < 0).all()
        assert (p_values(seen) <= 0.01).mean() > 0.85


@pytest.mark.parametrize("past", [0, 3360])
def test_limit_and_p_value_agree(past):
    """The observation is beyond the limit exactly when the p-value is within the risk."""
    values = make("ar0.6", 1, 200, past + 336)
    agrees(look(Spread(), values, past, Stays("between", 1.0, 1.3), tails="light"))
    if past:
        agrees(look(Spread(), values, past))


def test_stretched_and_flat_batches_fail():
    """Twice the spread and none at all are found, and told in the unit of the rows."""
    values = 10 * make("ar0.6", 2, 40, 1056)
    values[:20, 960:] *= 2
    values[20:, 960:] = 1.0
    seen = look(Spread(), values, 960)
    assert (p_values(seen)[:20] < 0.01).mean() > 0.9
    assert (p_values(seen)[20:] < 1e-6).all()
    assert abs(np.median(seen.upper.bound) - 12.5) < 1
    assert 18 < np.median(seen.observed[:20]) < 28


def test_detectable_is_found():
    """A spread larger by the detectable amount is found with probability .8."""

    def wider(window, size, seen):
        return window * (1 + size / np.median(seen.upper.bound))

    assert abs(power_at_detectable(Spread(), "white", 96, 960, wider, series=1500) - 0.8) < 0.08


def test_reasons():
    """Heavy tails, missing history and a window's own cycle are told."""
    x = make("seasonal", 8, 30, 336)
    narrow = look(Spread(), x, 0, Stays("above", low=1.0), lengths=SEASONAL, tails="light")
    assert (narrow.undecided >= 0).all()
    assert "needs history" in narrow.reasons[0]
    assert (look(Spread(), x, 0, Stays("below", high=1.0), lengths=SEASONAL, tails="light").undecided < 0).all()
    assert "tails: light" in look(Spread(), make("white", 3, 2, 336), 0, Stays("below", high=2.0)).reasons[0]
    heavy = look(Spread(), make("t3", 4, 30, 1056), 960, Stays("below", high=2.0))
    assert (heavy.undecided >= 0).mean() > 0.8
    assert "no history" in look(Spread(), make("white", 6, 2, 96), 0).reasons[0]


@pytest.mark.calibration
@pytest.mark.parametrize("kind", ["white", "ar0.6", "ar0.9", "ma", "t3", "lognormal", "seasonal"])
@pytest.mark.parametrize(("n", "past"), [(96, 768), (168, 168 * 20)])
def test_calibrated_against_history(kind, n, past):
    """20,000 healthy batches: .01 within 1.5 and .001 within 2.6 times."""
    honest, naive = alarms(Spread(), kind, n, past, series=1000, blocks=20)
    print("spread", kind, n, past, honest, naive)
    assert (honest[1:] <= np.array([0.015, 0.0026])).all()


def test_a_declared_cycle_that_a_window_cannot_show_leaves_its_spread_undecided():
    """Two weeks alone do not show a declared week, and its part of the spread would pass for noise."""
    values = make("two seasons", 3, 20, 336)
    stays, lengths = Stays("below", high=1.25), {"day": 24, "week": 168}
    seen = look(Spread(), values, 0, stays, lengths=lengths, tails="light")
    assert (seen.undecided >= 0).all()
    assert any("week too few times" in reason for reason in seen.reasons)
    assert (look(Spread(), values, 0, stays, lengths={"day": 24, "year": 8760}, tails="light").undecided < 0).all()
