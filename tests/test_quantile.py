"""Quantiles against numbers and against history."""

from statistics import NormalDist

import numpy as np
import pytest
from processes import agrees, alarms, look, make, p_values

from sercheck.measure import Stays
from sercheck.measures.quantile import Quantile
from sercheck.serial.quantiles import in_order, quantile


def test_quantiles_of_numpy():
    """Rows with gaps have numpy's quantiles of what was observed."""
    x = np.random.default_rng(1).normal(size=(6, 40))
    x[np.random.default_rng(2).random(x.shape) < 0.3] = np.nan
    held = (~np.isnan(x)).sum(axis=1)[:, None]
    for q in (0.0, 0.1, 0.5, 0.93, 1.0):
        fast = quantile(in_order(x), held, np.full((6, 1), q))[:, 0]
        np.testing.assert_allclose(fast, np.nanquantile(x, q, axis=1), rtol=1e-12)


@pytest.mark.parametrize("q", [0.5, 0.9])
@pytest.mark.parametrize("kind", ["white", "ar0.9", "t3", "lognormal", "seasonal"])
def test_false_alarms_against_history(q, kind):
    """A healthy batch is held about as often as asked."""
    honest, _ = alarms(Quantile(), kind, 96, 768, risks=(0.01,), series=1500, q=q)
    assert honest[0] <= 0.022


@pytest.mark.parametrize("past", [0, 168 * 8])
@pytest.mark.parametrize("q", [0.5, 0.9])
def test_false_alarms_against_a_number(past, q):
    """At most 1.6 times the risk on clustered rows, with chance; limits for independent rows hold far too many."""
    bound = NormalDist().inv_cdf(q) * 1.25
    for stays in (Stays("below", high=bound), Stays("above", low=bound)):
        honest, naive = alarms(Quantile(), "ar0.6", 168, past, risks=(0.01,), series=1500, stays=stays, q=q)
        assert honest[0] <= 0.016 + 3 * np.sqrt(0.016 / 1500)
    assert naive[0] > 0.03


@pytest.mark.parametrize("past", [0, 960])
@pytest.mark.parametrize("q", [0.2, 0.5, 0.9])
def test_limit_and_p_value_agree(past, q):
    """The observation is beyond the limit exactly when the p-value is within the risk."""
    values = make("ar0.6", 3, 200, past + 96)
    agrees(look(Quantile(), values, past, Stays("between", -1.0, 1.0), q=q))
    agrees(look(Quantile(), values, past, q=q))


def test_raised_top_fails():
    """Rows of the upper fifth doubled are seen by the quantile .9 and not by the median."""
    values = 100 + 10 * make("ar0.6", 4, 100, 1056)
    window = values[:, 960:]
    values[:, 960:] = np.where(window > 110, window + 40, window)
    assert (p_values(look(Quantile(), values, 960, q=0.9)) < 0.01).mean() > 0.9
    assert (p_values(look(Quantile(), values, 960, q=0.5)) < 0.01).mean() < 0.1


def test_whole_cycles_are_compared_as_they_are():
    """With a window of whole days the observed quantile is that of the rows, daily cycle included."""
    values = 50 + make("seasonal", 5, 20, 96 * 11)
    seen = look(Quantile(), values, 960, lengths={"day": 24}, q=0.8)
    np.testing.assert_allclose(seen.observed[:, 0], np.quantile(values[:, 960:], 0.8, axis=1), atol=0.25)
    assert "whole cycles" in seen.assumes


def test_reasons():
    """A quantile so far out that hardly a row lies beyond it is undecided."""
    values = make("white", 6, 2, 1056)
    assert "3 rows" in look(Quantile(), values, 960, q=0.99).reasons[0]
    assert "no history" in look(Quantile(), values, 0, q=0.5).reasons[0]
    mute = look(Quantile(), values, 960, Stays("below", high=2.4), q=0.99)
    assert mute.unsure is not None
    assert (mute.unsure >= 0).all()
    assert "longer window" in mute.reasons[mute.unsure[0, 0]]


def test_a_pass_that_says_nothing_keeps_its_share_of_the_risk():
    """All series take part in sharing the risk, whatever a pass of theirs would say: else the others get too much."""
    values = make("ar0.9", 7, 60, 168 * 13)
    seen = look(Quantile(), values, 168 * 12, Stays("below", high=2.94), q=0.9)
    assert seen.unsure is not None
    assert (seen.unsure >= 0).any()
    assert not np.isnan(p_values(seen)).any()


@pytest.mark.calibration
@pytest.mark.parametrize("q", [0.5, 0.9])
@pytest.mark.parametrize("kind", ["white", "ar0.6", "ar0.9", "t3", "lognormal", "seasonal"])
def test_calibrated_against_history(q, kind):
    """20,000 healthy batches: at most 2.2 and 2.7 times .01 and .001."""
    honest, naive = alarms(Quantile(), kind, 96, 96 * 10, series=1000, blocks=20, q=q)
    print("quantile", q, kind, honest, naive)
    assert (honest[1:] <= np.array([0.022, 0.0027])).all()
