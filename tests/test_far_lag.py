"""A cycle that evolves beyond a model's order, and cycles that a window takes out of itself."""

from __future__ import annotations

import numpy as np
import pytest
from processes import autoregressive, make
from scipy import special

from sercheck.serial.autoregression import burg, innovations, model_autocorrelation
from sercheck.serial.far_lag import with_far_lag
from sercheck.serial.lag_law import bound_law, forward, lagged_alone
from sercheck.serial.own_models import alone
from sercheck.serial.partial_law import PartialLaws
from sercheck.serial.sampling_error import autocorrelation_bias, mean_bias
from sercheck.serial.season import phase_means

DAY = 24


def too_often(z, risk):
    """Share of statistics beyond the risk on the two sides."""
    return np.mean(z > -special.ndtri(risk)), np.mean(z < special.ndtri(risk))


def test_an_echo_is_found_where_it_is():
    """In seven evolving cycles the echo is found a cycle back, about as strong as it is."""
    x = make("seasonal_ar", 1, 400, 7 * DAY)
    near = burg(x, max_order=16)
    model, e, phi = with_far_lag(x, near)
    found = model.order > near.order
    assert found.mean() > 0.85
    assert (model.order[found] - near.order[found] == DAY).mean() > 0.97
    assert abs(np.median(phi[found]) - 0.6) < 0.1
    np.testing.assert_allclose(e, innovations(x, model), rtol=1e-9, atol=1e-12)
    rho = model_autocorrelation(model, 2 * DAY)
    assert (rho[found, DAY] > rho[found, DAY - 12] + 0.1).mean() > 0.97


def test_the_product_of_both_filters_is_the_model():
    """The model's coefficients are those of (1 - a_1 B - ..)(1 - Φ B^L), and its innovations those of both filters."""
    x = make("seasonal_ar", 2, 20, 10 * DAY)
    near = burg(x, max_order=3)
    model, e, phi = with_far_lag(x, near)
    first = innovations(x, near)
    for row in np.flatnonzero(phi):
        lag = model.order[row] - near.order[row]
        both = np.polymul(
            np.r_[1, -near.coefficients[row, : near.order[row]]], np.r_[1, np.zeros(lag - 1), -phi[row]]
        )
        np.testing.assert_allclose(-model.coefficients[row, : model.order[row]], both[1:], atol=1e-12)
        np.testing.assert_allclose(e[row, lag:], first[row, lag:] - phi[row] * first[row, :-lag], atol=1e-9)
    assert (phi > 0).sum() > 15


@pytest.mark.parametrize("kind", ["white", "ar0.6", "ar0.9", "ma", "garch", "t3"])
def test_hardly_any_series_without_a_cycle_gets_an_echo(kind):
    """At most about one series in a hundred is given an echo that is not there."""
    x = make(kind, 3, 1500, 7 * DAY)
    near = burg(x, max_order=16)
    assert (with_far_lag(x, near)[2] > 0).mean() < 0.02


def test_gaps_scale_and_emptiness():
    """Gaps do not hide an echo, the unit does not matter, and series without anything have none."""
    x = make("seasonal_ar", 4, 60, 10 * DAY)
    x[:, 100:110] = np.nan
    near = burg(x, max_order=16)
    model, _, phi = with_far_lag(x, near)
    assert (phi > 0).mean() > 0.8
    for unit in (1e-300, 1e250):
        scaled = with_far_lag(x * unit, burg(x * unit, max_order=16))
        np.testing.assert_array_equal(scaled[0].order, model.order)
        np.testing.assert_allclose(scaled[2], phi, rtol=1e-6)
    for dull in (np.full((2, 100), np.nan), np.full((2, 100), 7.0), np.zeros((2, 1)), np.zeros((0, 50))):
        assert not alone(dull, 1).wanders.any()


def test_a_cycle_that_never_fades_has_no_level():
    """A fixed cycle left in is no healthy echo: the series counts as one without a level."""
    noise = autoregressive(5, 50, 30 * DAY, 0.3)
    cycle = 8 * np.sin(2 * np.pi * np.arange(30 * DAY) / DAY)
    assert alone(noise + cycle, 1).wanders.all()
    assert not alone(noise, 1).wanders.any()


def test_the_means_of_one_place_are_the_mean():
    """Taking out a cycle of one step is taking out the mean; the general sum says the same."""
    rho = model_autocorrelation(burg(make("ar0.6", 6, 3, 400), max_order=4), 200)
    for lag in (1, 5):
        plain = -(1 - rho[:, lag]) * (2 * rho.sum(axis=1) - 1)
        np.testing.assert_allclose(mean_bias(rho, lag), plain)
        even, odd = rho[:, ::2], rho[:, 1::2]
        at = 2 * even.sum(axis=1) - 1
        ahead = 2 * odd.sum(axis=1)  # both lags are odd
        np.testing.assert_allclose(mean_bias(rho, lag, 2), -2 * (ahead - rho[:, lag] * at), rtol=1e-9)
    np.testing.assert_allclose(autocorrelation_bias(0.6 ** np.arange(400.0), 1), -(1 + 4 * 0.6), rtol=1e-9)


@pytest.mark.parametrize("cycles", [4, 7])
@pytest.mark.parametrize("phi", [0.0, 0.6])
def test_means_of_few_cycles_taken_out_keep_the_risk(cycles, phi):
    """Autocorrelations of a window without its own few cycles fail no more often than asked; unallowed for, they do."""
    n = cycles * DAY
    x = autoregressive([7, cycles], 4000, n, phi)
    phase = np.arange(n) % DAY
    y = x - phase_means(x, phase, DAY)[0][:, phase]
    lags = np.array([1])
    seen, bare = lagged_alone(y, lags, DAY), lagged_alone(y, lags)
    z = [((forward(one.r) - law.centre) / law.scale)[:, 0] for one in (seen, bare) for law in [bound_law(one, phi)]]
    assert max(too_often(z[0], 0.05)) < 0.06
    assert max(too_often(z[0], 0.01)) < 0.016
    assert max(too_often(z[1], 0.01)) > 0.016
    laws = PartialLaws(y, lags, DAY)
    law = laws.under(phi)
    partial = ((forward(laws.estimate.k) - law.centre) / law.scale)[:, 0]
    assert max(too_often(partial, 0.05)) < 0.06
    assert max(too_often(partial, 0.01)) < 0.016


def test_an_evolving_cycle_keeps_the_risk():
    """The first autocorrelation of seven evolving cycles fails no more often than asked."""
    x = make("seasonal_ar", 8, 4000, 7 * DAY)
    seen = lagged_alone(x, np.array([1]))
    law = bound_law(seen, 0.4)  # of (1 - .4 B)(1 - .6 B^24), but for terms of .4^22
    z = ((forward(seen.r) - law.centre) / law.scale)[~seen.wanders, 0]
    assert len(z) > 3800
    assert max(too_often(z, 0.05)) < 0.06
    assert max(too_often(z, 0.01)) < 0.016
