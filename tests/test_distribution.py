"""Distances of distributions, and the effective size as a measure."""

import json

import numpy as np
import pytest
from naive.long_run import distance as slow_distance
from processes import agrees, alarms, look, make, p_values

from sercheck.measure import Stays
from sercheck.measures.distribution import Distribution, distance
from sercheck.measures.effective_size import EffectiveSize
from sercheck.serial.effective_sizes import effective_size_of
from sercheck.serial.scores import ranking


def test_distance_twin():
    """The distance is the largest over all values, ties and gaps included."""
    seeded = np.random.default_rng(1)
    for draw in (seeded.normal, lambda size: seeded.poisson(2.0, size=size).astype(float)):
        history, window = draw(size=(5, 80)), draw(size=(5, 30))
        window[0, 3:9] = np.nan
        fast = distance(window, ranking(history))
        for s in range(5):
            np.testing.assert_allclose(fast[s], slow_distance(window[s][~np.isnan(window[s])], history[s]), atol=1e-12)


@pytest.mark.parametrize("kind", ["white", "ar0.6", "ar0.9", "lognormal", "seasonal"])
def test_false_alarms_of_distances(kind):
    """Conservative on dependent rows, where the plain two-sample test holds far too many."""
    honest, naive = alarms(Distribution(), kind, 96, 768, risks=(0.01,), series=1000)
    assert honest[0] <= 0.011 + 3 * np.sqrt(0.011 / 1000)
    if kind == "ar0.9":
        assert naive[0] > 0.3


def test_another_shape_is_found():
    """Rows with the same mean and spread but two values far apart are found."""
    values = make("white", 2, 40, 96 * 11)
    values[:, 960:] = np.sign(values[:, 960:])
    assert (p_values(look(Distribution(), values, 960)) < 0.001).all()


@pytest.mark.parametrize("kind", ["white", "ar0.6", "ar0.9", "ma", "lognormal"])
def test_false_alarms_of_effective_size(kind):
    """A healthy batch is held about as often as asked."""
    honest, _ = alarms(EffectiveSize(), kind, 96, 768, risks=(0.01,), series=1000)
    assert honest[0] <= 0.018 + 3 * np.sqrt(0.018 / 1000)


@pytest.mark.parametrize("phi", [0.0, 0.6, 0.9])
def test_false_alarms_of_effective_size_against_a_number(phi):
    """About the true size neither side is broken too often."""
    bound = float(effective_size_of(336, phi ** np.arange(336))[0])
    for stays in (Stays("below", high=bound), Stays("above", low=bound)):
        honest, _ = alarms(EffectiveSize(), f"ar{phi}", 336, 0, risks=(0.01,), series=1000, stays=stays)
        assert honest[0] <= 0.018 + 3 * np.sqrt(0.018 / 1000)


def test_smoothed_rows_count_for_less():
    """A batch smoothed over five rows has a smaller effective size than history."""
    values = make("white", 3, 40, 336 * 11)
    window = values[:, 3360:]
    values[:, 3362:-2] = np.lib.stride_tricks.sliding_window_view(window, 5, axis=1).mean(axis=2)
    seen = look(EffectiveSize(), values, 3360)
    assert (seen.lower.p_value("lower") < 0.05).mean() > 0.8
    assert np.median(seen.observed) < np.median(seen.upper.bound) / 2


@pytest.mark.parametrize("stays", [Stays("like_history"), Stays("between", 30.0, 60.0)])
def test_limit_and_p_value_agree(stays):
    """The observation is beyond the limit exactly when the p-value is within the risk."""
    agrees(look(EffectiveSize(), make("ar0.6", 4, 200, 168 * 11), 1680, stays))
    if stays.kind == "like_history":
        agrees(look(Distribution(), make("ar0.6", 5, 200, 168 * 11), 1680))


def test_reasons():
    """A bound above the number of rows, a short window and a constant one are undecided."""
    values = make("white", 6, 2, 168)
    assert "not between 0" in look(EffectiveSize(), values, 0, Stays("below", high=500.0)).reasons[0]
    assert "fewer than 168" in look(EffectiveSize(), values[:, :100], 0, Stays("below", high=50.0)).reasons[0]
    seen = look(EffectiveSize(), np.ones((1, 168)), 0, Stays("above", low=50.0))
    assert (seen.undecided >= 0).all()
    assert "no history" in look(Distribution(), values, 0).reasons[0]


@pytest.mark.calibration
@pytest.mark.parametrize("kind", ["white", "ar0.6", "ar0.9", "t3", "lognormal", "seasonal"])
@pytest.mark.parametrize("measure", [Distribution(), EffectiveSize()])
def test_calibrated_against_history(measure, kind):
    """20,000 healthy batches: distances at most 1.1 times .001, effective size at most 3.1 times."""
    honest, naive = alarms(measure, kind, 96, 960, series=1000, blocks=20)
    print(json.dumps([type(measure).__name__, kind, honest.tolist(), naive.tolist()]))
    assert honest[2] <= (0.0011 if isinstance(measure, Distribution) else 0.0031) + 3e-4
