"""The number that each measure boils a batch down to."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from sercheck.serial import batch_statistics as batch
from sercheck.serial.autoregression import burg, innovations


def cycle(days):
    """A daily cycle."""
    hours = np.arange(24 * days)
    return np.sin(2 * np.pi * hours / 24) + 0.4 * np.cos(4 * np.pi * hours / 24)


def shifted(days, by):
    """The same, late by some steps."""
    return np.roll(cycle(days), by)


def test_level_and_spread_of_known_batches():
    """Mean and variance are those of each batch's observed values, missing where half of them are."""
    z = np.array([[1.0, 2, 3, 4, np.nan, 2, 4, 6, np.nan, np.nan, np.nan, 1]])
    np.testing.assert_allclose(batch.level(z, 4), [[2.5, 4.0, np.nan]])
    np.testing.assert_allclose(batch.spread(z, 4), [[5 / 3 + 0.01, 4.01, np.nan]])
    np.testing.assert_allclose(batch.power(z, 4), [[7.51, 56 / 3 + 0.01, np.nan]])


def test_difference_autocorrelation_of_known_steps():
    """A ramp's steps follow each other, a saw's steps turn back; one value says nothing."""
    ramp, saw, flat = np.arange(8.0), np.tile([0.0, 1], 4), np.zeros(8)
    got = np.tanh(batch.difference_autocorrelation(np.stack([ramp, saw, flat]), 8))
    np.testing.assert_allclose(got[:2, 0], [1, -1])
    assert np.isnan(got[2, 0])


def test_difference_autocorrelation_by_hand():
    """Σ ab / Σ ½(a² + b²) over neighbouring steps of one batch only."""
    y = np.array([[0.0, 1, 3, 2, 9, 9, 8, 6]])
    a = np.arctanh((1 * 2 + 2 * -1) / ((1 + 4 + 4 + 1) / 2))
    b = np.arctanh((0 * -1 + -1 * -2) / ((0 + 1 + 1 + 4) / 2))
    np.testing.assert_allclose(batch.difference_autocorrelation(y, 4), [[a, b]])


def test_smoothing_raises_it():
    """A moving mean over three raises the autocorrelation of the differences."""
    y = np.random.default_rng(1).standard_normal((1, 2400))
    smooth = (y[:, :-2] + y[:, 1:-1] + y[:, 2:]) / 3
    before = batch.difference_autocorrelation(y[:, 2:-22], 24).mean()
    assert batch.difference_autocorrelation(smooth[:, :2376], 24).mean() > before + 0.5


@pytest.mark.parametrize("strength", [0.0, 0.5, 1.0, -1.0])
def test_amplitude_finds_the_strength(strength):
    """The amplitude of a batch is how many times the profile it holds, and its level plays no part."""
    rng = np.random.default_rng(2)
    y = strength * cycle(400)[None] + 7 + 0.3 * rng.standard_normal((1, 9600))
    got = batch.amplitude(y, cycle(400)[None], 24)
    assert got.estimate.mean() == pytest.approx(strength, abs=0.02)
    assert got.error.mean() == pytest.approx(got.estimate.std(), rel=0.1)


def test_scores_of_amplitude_are_normal():
    """With independent noise the scores of a full season are standard normal whatever the few degrees of freedom."""
    rng = np.random.default_rng(3)
    got = batch.amplitude(cycle(4000)[None] + rng.standard_normal((1, 96000)), cycle(4000)[None], 24)
    assert stats.kstest(got.score[0], "norm").pvalue > 0.01


@pytest.mark.parametrize("by", [-1, 0, 1])
def test_slip_finds_the_steps(by):
    """A batch that runs one step late has a slip near one, an early one near minus one."""
    rng = np.random.default_rng(4)
    here, ahead, behind = cycle(400), shifted(400, -1), shifted(400, 1)
    y = shifted(400, by)[None] + 0.1 * rng.standard_normal((1, 9600))
    got = batch.slip(y, here[None], ahead[None], behind[None], 24)
    assert got.estimate.mean() == pytest.approx(by, abs=0.1)


def test_slip_equals_least_squares():
    """Estimate and error are those of ordinary least squares on [1, p, symmetric, antisymmetric]."""
    rng = np.random.default_rng(5)
    y, here, ahead, behind = rng.standard_normal((4, 1, 24))
    got = batch.slip(y, here, ahead, behind, 24)
    X = np.column_stack([np.ones(24), here[0], (ahead + behind)[0] / 2 - here[0], (behind - ahead)[0] / 2])
    coefficients, rest, *_ = np.linalg.lstsq(X, y[0], rcond=None)
    error = np.sqrt(rest[0] / 20 * np.linalg.inv(X.T @ X)[3, 3])
    np.testing.assert_allclose([got.estimate[0, 0], got.error[0, 0], got.df[0, 0]], [coefficients[3], error, 20])
    expected = stats.norm.ppf(stats.t.cdf(coefficients[3] / error, 20))
    assert got.score[0, 0] == pytest.approx(expected)
    assert got.of_score(got.score[:, 0], 0.0)[0] == pytest.approx(coefficients[3])


def test_a_flat_profile_has_no_amplitude():
    """Where the profile does not move nothing is said of its strength."""
    y = np.random.default_rng(6).standard_normal((1, 48))
    assert np.isnan(batch.amplitude(y, np.zeros((1, 48)), 24).score).all()


def test_filter_gives_the_innovations():
    """The filter of a centred series gives what the model does not foresee, also for orders that differ."""
    rng = np.random.default_rng(7)
    x = rng.standard_normal((3, 500)).cumsum(axis=1) * np.array([[1.0], [0], [1]]) + rng.standard_normal((3, 500))
    model = burg(x)
    got = batch.through_filter(x - model.mean[:, None], model)
    np.testing.assert_allclose(got, innovations(x, model), atol=1e-9)


def test_gaps_shorten_the_model():
    """The order is halved until three quarters of the innovations exist."""
    rng = np.random.default_rng(8)
    x = rng.standard_normal((2, 2000)).cumsum(axis=1)
    model = burg(x, min_order=8)
    x[1, ::20] = np.nan
    got = batch.existing(model, x, np.ones(x.shape, dtype=bool))
    assert got.order[0] == model.order[0]
    assert 0 < got.order[1] < model.order[1]
    e = batch.through_filter(x[1:], got.rows(slice(1, 2)))
    assert (~np.isnan(e)).sum() >= 0.75 * (~np.isnan(x[1])).sum()


def test_portmanteau_by_hand():
    """Ln Q of each window is that of the sum written out."""
    e = np.random.default_rng(12).standard_normal((1, 200))
    e[0, 150] = np.nan
    got = batch.portmanteau(e, 70, 10, 3)
    for place, end in enumerate(range(200, 69, -10)):
        q = 0.0
        for k in (1, 2, 3):
            product = [e[0, t] * e[0, t - k] for t in range(max(end - 70, k), end)]
            q += np.nansum(product) ** 2 / np.nansum(np.square(product))
        assert got[0, -1 - place] == pytest.approx(np.log(q))


def test_mean_of_earlier_windows():
    """The mean is over the places seven to thirty-four earlier."""
    table = np.random.default_rng(13).standard_normal((1, 80))
    got = batch.mean_earlier(table)
    np.testing.assert_allclose(got[0, 34:], [table[0, d - 34 : d - 6].mean() for d in range(34, 80)])
    assert np.isnan(got[0, :20]).all()
