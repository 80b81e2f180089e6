"""Sampling error and bias of autocorrelations."""

from dataclasses import replace

import numpy as np
import pytest
from naive import autoregression as naive
from processes import autoregressive
from reference_values import closed, opened, published, series, told

from sercheck.serial.autocovariances import autocorrelation
from sercheck.serial.autoregression import burg, innovations, model_autocorrelation, step_up
from sercheck.serial.gap_variance import gapped_variance
from sercheck.serial.sampling_error import (
    Residuals,
    autocorrelation_bias,
    bartlett_error,
    bartlett_variance,
    bartlett_weights,
    moving_average_band,
    white_noise_band,
    white_noise_error,
    white_noise_mean,
)


def powers(phi, lags=2000):
    """Autocorrelations of AR(1)."""
    return float(phi) ** np.arange(lags + 1)


def moving(theta):
    """Autocorrelations of a moving average."""
    weights = np.array([1.0, *np.atleast_1d(theta)])
    c = np.array([weights[: len(weights) - k] @ weights[k:] for k in range(len(weights))])
    return c / c[0]


@pytest.mark.parametrize("row", [r for r in closed("bartlett") if r["process"] == "AR(1)"], ids=lambda r: str(r["phi"]))
def test_bartlett_of_ar1(row):
    """Bartlett's variances, their limit and the usual truncated sums of AR(1)."""
    rho = powers(row["phi"])
    variances = [bartlett_variance(rho, k) for k in range(1, 11)]
    np.testing.assert_allclose(variances, row["n_times_var_r_lag1_to_10"], rtol=1e-12)
    np.testing.assert_allclose(bartlett_variance(rho, 400), row["limit_large_lag"], rtol=1e-12)
    band = moving_average_band(rho[1:11], 1, 0.6826894921370859)
    np.testing.assert_allclose(band**2, row["truncated_sum_1_plus_2_sum_rho2_below_k"], rtol=1e-12)


@pytest.mark.parametrize("row", [r for r in closed("bartlett") if "MA" in r["process"]], ids=lambda r: str(r["theta"]))
def test_bartlett_of_moving_averages(row):
    """Bartlett's variances of moving averages, at their own lags and beyond."""
    rho = moving(row["theta"])
    if "n_times_var_r1" in row:
        np.testing.assert_allclose(rho[1], row["rho1"], rtol=1e-14)
        told_by = [bartlett_variance(rho, k) for k in (1, 2, 9)]
        np.testing.assert_allclose(told_by, [row["n_times_var_r1"], *[row["n_times_var_rk_beyond_1"]] * 2], rtol=1e-12)
    else:
        expected = row["n_times_var_r_lag1_on"]
        variances = [bartlett_variance(rho, k) for k in range(1, len(expected) + 1)]
        np.testing.assert_allclose(variances, expected, rtol=1e-12)


@pytest.mark.parametrize("lag", [1, 2, 5, 13])
def test_one_sided_weights_are_the_two_sided_sum(lag):
    """Σ W_j² over positive distances is Bartlett's sum over all of them, for a pseudo-cycle."""
    rho = model_autocorrelation(burg(autoregressive(1, 1, 500, [1.2, -0.6])), 400)[0]
    slow = naive.bartlett(lambda i: rho[abs(i)] if abs(i) <= 400 else 0.0, lag)
    np.testing.assert_allclose(bartlett_variance(rho, lag), slow, rtol=1e-10)


@pytest.mark.parametrize(
    "name, what, expected", told("band_ma_type_95", "sm_bartlett_half_width_95", "band_white_noise_95")
)
def test_bands_of_statistics_programs(name, what, expected):
    """R's and statsmodels' bands of every open series without gaps."""
    x = series(name)
    if what == "band_white_noise_95":
        band = white_noise_band(len(x))
    else:
        band = moving_average_band(autocorrelation(x, np.arange(1, len(expected) + 1)), len(x))
    np.testing.assert_allclose(band, expected, rtol=1e-9)


def test_stata_bands():
    """Stata's Bartlett bands of US GDP, 40 lags, to the digits printed."""
    (entry,) = [p for p in published() if "bartlett_half_width_95_lag1_to_40" in p]
    expected = entry["bartlett_half_width_95_lag1_to_40"]
    x = series(entry["series"])
    band = moving_average_band(autocorrelation(x, np.arange(1, 41)), len(x))
    np.testing.assert_allclose(band, expected, atol=2e-7)


@pytest.mark.parametrize("row", closed("sampling_moments"), ids=lambda r: str(r["n"]))
def test_white_noise_moments(row):
    """Mean and error of the autocorrelations of white noise (Moran 1948), plain error and band."""
    lags = [1, 2, 10]
    np.testing.assert_allclose(white_noise_mean(row["n"], lags), row["white_noise_mean_of_r_lag_1_2_10"], rtol=1e-13)
    np.testing.assert_allclose(white_noise_error(row["n"], lags), row["moran_se_lag_1_2_10"], rtol=1e-13)
    np.testing.assert_allclose(white_noise_band(row["n"]), row["half_width_95"], rtol=1e-12)


def test_bias_of_ar1():
    """First-order bias of AR(1) at lag one is -(1 + 4φ)/n (Kendall 1954; Marriott and Pope 1954)."""
    for row in opened("closed_form.json")["sampling_moments"]["first_order_bias_ar1"]["rows"]:
        mean = row["phi"] + autocorrelation_bias(powers(row["phi"]), 1) / row["n"]
        np.testing.assert_allclose(mean, row["mean_of_r1_first_order"], rtol=1e-12, atol=1e-15)


def test_bias_by_simulation():
    """The bias formula foretells the mean of r_k of simulated pseudo-cycles."""
    lags = np.array([1, 2, 3, 6])
    truth = np.array([2 / 3, 1 / 6, -1 / 6, -1 / 24])  # x_t = x_{t-1} - x_{t-2}/2 + e_t (Box and Jenkins)
    r = autocorrelation(autoregressive(1, 15_000, 150, [1.0, -0.5], warm=60), lags)
    reflection = np.array([[2 / 3, -0.5]])
    model = replace(
        burg(np.arange(9.0) % 4), order=np.array([2]), reflection=reflection, coefficients=step_up(reflection)
    )
    rho = model_autocorrelation(model, 200)[0]
    bias = np.array([autocorrelation_bias(rho, int(lag)) for lag in lags]) / 150
    error = r.std(axis=0) / np.sqrt(len(r))
    # beyond the first order in 1/n a few units of 150^-2 are left
    assert (np.abs(r.mean(axis=0) - truth - bias) < 4 * error + 5 / 150**2).all()
    assert (np.abs(r.mean(axis=0) - truth)[[0, 2, 3]] > 5 * error[[0, 2, 3]]).all()


def test_bartlett_error_of_samples():
    """The standard error told for a series is the scatter of its autocorrelation over many such series."""
    x = autoregressive(3, 4000, 400, 0.6)
    error = bartlett_error(x, [1, 3, 12])
    scatter = autocorrelation(x, [1, 3, 12]).std(axis=0)
    np.testing.assert_allclose(np.sqrt((error**2).mean(axis=0)), scatter, rtol=0.08)
    assert bartlett_error(x[0], 1).shape == ()
    assert np.isnan(bartlett_error(np.full(60, 3.0), 1))


def test_bartlett_error_refuses_lag_zero():
    """r_0 is 1 by definition and has no error."""
    with pytest.raises(ValueError, match="at least 1"):
        bartlett_error(np.arange(9.0), 0)


@pytest.mark.parametrize("lag", [1, 60])
def test_robust_variance_twin(lag):
    """The filter by Fourier transforms gives what the formula gives in plain loops."""
    x = autoregressive(7, 3, 150, 0.5)
    model = burg(x, max_order=2, min_order=2)
    e = innovations(x, model)
    weights = bartlett_weights(model_autocorrelation(model, 360), lag)
    fast = Residuals(e, model.order).robust_variance(weights, np.full(3, 150), lag)
    slow = [naive.robust_variance(e[s], weights[s], 150, 2, max(100, 2 * lag)) for s in range(3)]
    np.testing.assert_allclose(fast, slow, rtol=1e-10)


def test_robust_variance_sees_bursts():
    """Innovations whose size comes in bursts scatter r_1 more than Bartlett's formula says, and V_h knows."""
    rng = np.random.default_rng(4)
    x = rng.standard_normal((3000, 600)) * np.repeat(np.exp(rng.standard_normal((3000, 60))), 10, axis=1)
    weights = bartlett_weights(np.eye(1, 201), 1).repeat(3000, axis=0)
    told_by = Residuals(x, np.zeros(3000, dtype=int)).robust_variance(weights, np.full(3000, 600))
    scatter = autocorrelation(x, 1).var()
    assert scatter > 3 / 600
    # heavy tails: the average of the estimates is dominated by few series and falls somewhat short
    assert 0.7 * scatter < told_by.mean() < 1.3 * scatter


def test_no_gaps_is_bartlett():
    """Complete rows leave Bartlett's variance as it is."""
    rho = np.vstack([powers(phi, 200) for phi in (0.0, 0.5, -0.7)])
    whole = np.ones((3, 150), dtype=bool)
    np.testing.assert_allclose(gapped_variance(rho, whole, 2), bartlett_variance(rho, 2), rtol=1e-9)


@pytest.mark.parametrize("phi, lag", [(0.0, 1), (0.6, 2), (0.9, 1)])
def test_gaps_by_simulation(phi, lag):
    """With a fifth of the rows missing at random, r scatters as the formula for gaps says, far above Bartlett's."""
    rng = np.random.default_rng(12)
    x = autoregressive(20, 2000, 800, phi)
    seen = rng.random(x.shape) > 0.2
    r = autocorrelation(np.where(seen, x, np.nan), lag)
    rho = np.tile(powers(phi, 200), (2000, 1))
    pairs = (seen[:, lag:] & seen[:, :-lag]).sum(axis=1)
    variance = (gapped_variance(rho, seen, lag) / (pairs + lag)).mean()
    assert 0.9 < r.var() / variance < 1.1
    assert r.var() > 1.1 * bartlett_variance(powers(phi, 200), lag) / 640
