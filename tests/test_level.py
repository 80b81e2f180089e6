"""The level: location against history, mean against a number."""

import numpy as np
import pytest
from processes import SEASONAL, agrees, alarms, look, make, p_values, power_at_detectable

from sercheck.measure import Stays
from sercheck.measures.level import Level
from sercheck.measures.spread import Spread

CELLS = ["white", "ar0.6", "ar0.9", "ma", "t3", "lognormal", "counts", "seasonal"]


@pytest.mark.parametrize("kind", CELLS)
def test_false_alarms_against_history(kind):
    """A healthy batch is held about as often as asked (within .4 to 2 times .05, at most 2.2 times .01)."""
    honest, _ = alarms(Level(), kind, 96, 768, risks=(0.05, 0.01))
    assert 0.02 <= honest[0] <= 0.1
    assert honest[1] <= 0.022


def test_naive_limit_would_fail():
    """Limits for independent rows hold a healthy AR(1) batch far too often, the measure's own do not."""
    honest, naive = alarms(Level(), "ar0.9", 96, 768, risks=(0.01,))
    assert naive[0] > 0.4
    assert honest[0] < 0.022


@pytest.mark.parametrize("kind", ["white", "ar0.6", "ma"])
def test_false_alarms_against_a_number_alone(kind):
    """Without history the two witnesses keep the risk on 336 rows (1.3 times .01, with chance on 3,000 runs)."""
    honest, _ = alarms(Level(), kind, 336, 0, series=3000, stays=Stays("between", 0.0, 0.0), risks=(0.01,))
    assert honest[0] <= 0.013 + 3 * np.sqrt(0.013 / 3000)


def test_false_alarms_against_a_number_with_history():
    """With history the batch's own time scale gives the error about a number."""
    honest, naive = alarms(Level(), "ar0.6", 96, 960, stays=Stays("below", high=0.0), risks=(0.01,))
    assert honest[0] <= 0.022
    assert naive[0] > 0.05


@pytest.mark.parametrize(
    "stays", [Stays("like_history"), Stays("below", high=0.4), Stays("between", -0.5, 0.5), Stays("above", low=50.0)]
)
@pytest.mark.parametrize("of_the", ["location", "mean"])
@pytest.mark.parametrize("past", [0, 960])
def test_limit_and_p_value_agree(stays, of_the, past):
    """The observation is beyond the limit exactly when the p-value is within the risk."""
    agrees(look(Level(), make("ar0.6", 5, 300, past + 96), past, stays, of_the=of_the))


def test_shifted_batch_fails():
    """A batch three standard deviations higher is found, and told in the unit of the rows."""
    values = 100 + 10 * make("ar0.6", 6, 50, 1056)
    values[:, 960:] += 30
    seen = look(Level(), values, 960)
    assert (p_values(seen) < 1e-4).all()
    assert abs(np.median(seen.observed) - 130) < 5
    assert abs(np.median(seen.upper.bound) - 100) < 2


def test_far_batch_is_told_by_its_own_values():
    """A batch beyond all of history is not told as history's largest value."""
    values = make("white", 7, 5, 1056)
    values[:, 960:] += 1000
    seen = look(Level(), values, 960)
    assert (np.abs(seen.observed - 1000) < 1).all()
    assert (p_values(seen) < 1e-6).all()


def test_number_outside_history():
    """A bound that no value of history reached is compared with the mean: kept by history's like, broken beyond."""
    values = make("white", 8, 4, 1056)
    values[2:, 960:] += 1000
    p = p_values(look(Level(), values, 960, Stays("below", high=100.0)))
    assert (p[:2] == 1).all()
    assert (p[2:] < 1e-6).all()


def test_detectable_is_found():
    """A shift of the detectable size is found with probability .8."""
    found = power_at_detectable(Level(), "ar0.6", 96, 768, lambda window, size, _: window + size)
    assert abs(found - 0.8) < 0.06


def test_detectable_with_season():
    """The same holds with a daily cycle in the rows."""
    found = power_at_detectable(Level(), "seasonal", 96, 768, lambda window, size, _: window + size)
    assert abs(found - 0.8) < 0.06


def test_effective_size():
    """Rows of an AR(1) at .6 count for a quarter, those of an alternating series for more than they are."""
    seen = look(Level(), make("ar0.6", 9, 200, 96 * 21), 96 * 20)
    assert abs(np.median(seen.n_eff) - 96 / 4) < 4
    assert np.median(look(Level(), make("ar-0.5", 9, 200, 96 * 21), 96 * 20).n_eff) > 200


def test_unit_and_order_do_not_matter():
    """P-values stay when unit and origin change, and each series is judged by itself."""
    values = make("lognormal", 10, 12, 1056)
    p = p_values(look(Level(), values, 960))
    np.testing.assert_allclose(p_values(look(Level(), 1e6 * values + 1e7, 960)), p, rtol=1e-6)
    np.testing.assert_allclose(p_values(look(Level(), values[::-1], 960))[::-1], p, rtol=1e-12)
    np.testing.assert_allclose(p_values(look(Level(), values[3:4], 960)), p[3:4], rtol=1e-9)


def test_huge_and_tiny_values():
    """Values whose squares no double holds are judged like any others."""
    values = make("white", 11, 6, 1056)
    for of_the in ("location", "mean"):
        p = p_values(look(Level(), values, 960, of_the=of_the))
        for scale in (2.0**1000, 2.0**-1000):
            np.testing.assert_allclose(p_values(look(Level(), values * scale, 960, of_the=of_the)), p, rtol=1e-9)


@pytest.mark.parametrize("gaps", ["random", "stretch"])
def test_gaps_keep_the_risk(gaps):
    """A third of the rows missing, at random or in stretches of a day, does not raise the false alarms."""
    values = make("ar0.6", 12, 1500, 96 * 14)
    seeded = np.random.default_rng(1)
    days = np.repeat(seeded.random((1500, 4 * 14)) < 0.3, 24, axis=1)
    values[seeded.random(values.shape) < 0.3 if gaps == "random" else days] = np.nan
    p = p_values(look(Level(), values, 96 * 13))
    told = p[~np.isnan(p)]
    assert len(told) > 500
    assert (told <= 0.05).mean() < 0.08
    assert (told <= 0.01).mean() < 0.022


def test_reasons():
    """What cannot be said is undecided with its reason, observed and n still told."""
    values = make("white", 13, 3, 1056)
    assert "no history" in look(Level(), values, 0).reasons[0]
    assert "fewer than 8 stretches" in look(Level(), values, 500).reasons[0]
    assert "fewer than 20 stretches" in look(Level(), values, 960, risk=0.001).reasons[0]
    assert "fewer than 24 values" in look(Level(), values, 1036).reasons[0]
    assert "fewer than 96 values" in look(Level(), values[:, :90], 0, Stays("below", high=1.0)).reasons[0]
    seen = look(Level(), values, 500)
    assert np.isfinite(seen.observed).all()
    assert (seen.undecided == 0).all()


def test_strong_memory_needs_more_rows():
    """A literal bound without history is undecided on a strongly dependent short window."""
    seen = look(Level(), make("ar0.95", 14, 100, 96), 0, Stays("below", high=0.0))
    assert (seen.undecided >= 0).mean() > 0.7


def test_mostly_one_value():
    """When nearly all rows are equal, nothing is said about the level."""
    values = np.where(np.random.default_rng(15).random((2, 1056)) < 0.9, 0.0, 1.0)
    assert "use the measure rate" in look(Level(), values, 960).reasons[0]
    assert (look(Level(), np.full((1, 1056), 3.0), 960).undecided >= 0).all()


def test_history_of_some_series():
    """In one block a series with history is judged by it and a new one by its window alone."""
    values = make("ar0.6", 16, 2, 1056)
    values[1, :960] = np.nan
    together = look(Level(), values, 960, Stays("below", high=0.5))
    for s in range(2):
        alone = look(Level(), values[s : s + 1], 960, Stays("below", high=0.5))
        np.testing.assert_allclose(together.upper.p_value("upper")[s], alone.upper.p_value("upper")[0], rtol=1e-9)
    assert (together.undecided < 0).all()


def test_nothing_is_changed():
    """The panel's values stay as they are."""
    values = make("seasonal", 17, 3, 1056)
    before = values.copy()
    look(Level(), values, 960, lengths=SEASONAL)
    np.testing.assert_array_equal(values, before)


@pytest.mark.calibration
@pytest.mark.parametrize("kind", CELLS)
@pytest.mark.parametrize(("n", "past"), [(96, 96 * 8), (96, 96 * 20), (168, 168 * 8), (336, 336 * 8), (24, 24 * 20)])
def test_calibrated_against_history(kind, n, past):
    """20,000 healthy batches: at most 2, 2.2 and 2.7 times .05, .01 and .001."""
    honest, naive = alarms(Level(), kind, n, past, series=1000, blocks=20)
    print(kind, n, past, honest, naive)
    assert (honest <= np.array([0.1, 0.022, 0.0027])).all()


@pytest.mark.calibration
@pytest.mark.parametrize("kind", ["white", "ar0.6", "ar0.9", "ma", "t3"])
def test_calibrated_against_a_number(kind):
    """20,000 healthy windows of 336 rows without history: at most 1.3 and 2 times .01 and .001."""
    honest, naive = alarms(Level(), kind, 336, 0, series=1000, blocks=20, stays=Stays("between", 0.0, 0.0))
    print(kind, honest, naive)
    assert (honest[1:] <= np.array([0.013, 0.002])).all()


def test_a_window_beyond_all_of_history_is_told_as_it_is():
    """A day in another unit fails by its own level; its spread is told and undecided."""
    values = make("ar0.6", 21, 2, 24 * 80) + 100
    values[:, -24:] *= 1000
    level = look(Level(), values, 24 * 79)
    np.testing.assert_allclose(level.observed[:, 0], values[:, -24:].mean(axis=1))
    assert (level.upper.p_value("upper") < 1e-6).all()
    spread = look(Spread(), values, 24 * 79)
    np.testing.assert_allclose(spread.observed[:, 0], values[:, -24:].std(axis=1, ddof=1))
    assert "beyond all of history" in spread.reasons[0]
    assert (spread.undecided == 0).all()
