"""Long-run variances and effective sizes against twins, closed forms and other programs."""

import json
from pathlib import Path

import numpy as np
import pytest
from naive import long_run as slow
from processes import autoregressive, make

from sercheck.serial.echoed_run import echoed_long_run
from sercheck.serial.effective_sizes import effective_size, effective_size_of, low_frequency_share
from sercheck.serial.long_run import (
    autoregressive_long_run,
    bridge_weights,
    contrast_variance,
    contrast_weights,
    cosine_long_run,
    cosine_spectrum,
    mean_contrast,
    trend_cosine_long_run,
)
from sercheck.serial.own_models import OwnModels

REFERENCE = Path(__file__).parent / "reference"
CLOSED = json.loads((REFERENCE / "closed_form.json").read_text(encoding="utf-8"))
OPEN = json.loads((REFERENCE / "reference_open.json").read_text(encoding="utf-8"))["series"]


@pytest.mark.parametrize("steps", [2, 3, 16, 37])
def test_cosine_powers(steps):
    """Powers by the fast transform are the sums that define them, and sum up to the sum of squares."""
    x = np.random.default_rng(1).normal(size=(3, steps)) + 5
    spectrum = cosine_spectrum(x)
    np.testing.assert_allclose(spectrum.power, [slow.cosine_powers(row) for row in x], rtol=1e-9, atol=1e-12)
    np.testing.assert_allclose(spectrum.power.sum(axis=1), spectrum.variance * steps, rtol=1e-12)


def test_batch_mean_variance():
    """Variance and degrees of freedom of a batch mean follow the spectral formula of overlapping batch means."""
    x = autoregressive(2, 4, 120, 0.5)
    variance, df = contrast_variance(cosine_spectrum(x), mean_contrast(np.ones((4, 12), dtype=bool)))
    for s in range(4):
        np.testing.assert_allclose([variance[s], df[s]], slow.batch_mean_variance(x[s], 12), rtol=1e-10)


def test_overlapping_batch_means():
    """The variance is close to the mean square of all overlapping batch means about the mean (Meketon 1984)."""
    x = autoregressive(3, 200, 960, 0.5)
    variance, _ = contrast_variance(cosine_spectrum(x), mean_contrast(np.ones((200, 48), dtype=bool)))
    means = np.lib.stride_tricks.sliding_window_view(x, 48, axis=1).mean(axis=2)
    direct = ((means - x.mean(axis=1, keepdims=True)) ** 2).mean(axis=1) / (1 - 48 / 960)
    assert abs(variance.mean() / direct.mean() - 1) < 0.05


def test_bridge_weights():
    """Weights of cumulative sums by recursion are those by loops."""
    np.testing.assert_allclose(bridge_weights(7, 30)[0], slow.bridge_weights(7, 30), rtol=1e-9)


def test_weights_of_any_contrast():
    """A contrast's weights at two frequencies are its squared transform there."""
    c = np.random.default_rng(4).normal(size=(2, 9))
    weights = contrast_weights(c, 40)
    for j in (1, 23):
        direct = np.abs(c @ np.exp(1j * np.pi * j / 40 * np.arange(9))) ** 2
        np.testing.assert_allclose(weights[:, j - 1], direct, rtol=1e-10)


def test_gaps_are_put_right():
    """With a third of the rows missing at random the variance of a batch mean stays that of complete rows."""
    x = autoregressive(5, 400, 960, 0.6)
    whole, _ = contrast_variance(cosine_spectrum(x), mean_contrast(np.ones((400, 48), dtype=bool)))
    x[np.random.default_rng(6).random(x.shape) < 1 / 3] = np.nan
    gappy, _ = contrast_variance(cosine_spectrum(x), mean_contrast(np.ones((400, 48), dtype=bool)))
    assert abs(gappy.mean() / whole.mean() - 1) < 0.06


@pytest.mark.parametrize(("phi", "truth"), [(0.0, 1.0), (0.6, 6.25), (-0.5, 0.444)])
@pytest.mark.parametrize("estimate", [autoregressive_long_run, cosine_long_run, trend_cosine_long_run])
def test_long_run_variance_of_autoregressions(estimate, phi, truth):
    """On 600 rows of an AR(1) each estimate lies near 1/(1 - φ)² on average."""
    x = autoregressive(7, 300, 600, phi)
    assert abs(np.mean(estimate(x - x.mean(axis=1, keepdims=True)).variance) / truth - 1) < 0.15


@pytest.mark.parametrize("name", ["LakeHuron", "lh", "lynx", "Nile"])
def test_spectrum_at_zero_of_coda(name):
    """σ²/(1 - Σφ)² of R's fitted coefficients is what coda 0.19-4 prints as spectrum0.ar."""
    told = {entry["name"]: entry["value"] for entry in OPEN[name]["values"]}
    coefficients = np.atleast_1d(np.asarray(told["ar_yw_coef"], dtype=float))
    if told["spectrum0_ar_order"] == told["ar_yw_order"]:
        spectrum = told["ar_yw_var_pred"] / (1 - coefficients.sum()) ** 2
        np.testing.assert_allclose(spectrum, told["spectrum0_ar"], rtol=1e-6)
        np.testing.assert_allclose(told["ess"], OPEN[name]["n"] * told["var"] / spectrum, rtol=1e-6)


def test_effective_size_of_an_autoregression():
    """Closed-form effective sizes of AR(1) (Bayley and Hammersley 1946), 55 cells to 1e-12."""
    for row in CLOSED["ess_ar1"]["rows"]:
        rho = row["phi"] ** np.arange(row["n"])
        np.testing.assert_allclose(effective_size_of(row["n"], rho)[0], row["ess_exact"], rtol=1e-12)


def test_effective_size_of_other_processes():
    """Closed-form effective sizes of moving averages, smoothed noise and AR(2) to 1e-9."""
    for row in CLOSED["ess_other"]["rows"]:
        n = row["n"]
        if row["process"] == "MA(1)":
            rho = [1.0, row["theta"] / (1 + row["theta"] ** 2)]
        elif row["process"] == "AR(2)":
            rho = [1.0, row["phi1"] / (1 - row["phi2"])]
            for _ in range(n - 2):
                rho.append(row["phi1"] * rho[-1] + row["phi2"] * rho[-2])
        else:
            width = row["window"]
            rho = [1 - k / width for k in range(width)]
        np.testing.assert_allclose(effective_size_of(n, rho)[0], row["ess_exact"], rtol=1e-9)


def test_effective_size_of_data():
    """On many series the estimate lies near the closed form for AR(1) at .6."""
    x = autoregressive(8, 500, 336, 0.6)
    truth = effective_size_of(336, 0.6 ** np.arange(336))[0]
    assert abs(np.median(effective_size(x)) / truth - 1) < 0.1


def test_share_has_no_unit():
    """The share of low frequencies does not change with unit, origin and size of the numbers."""
    x = autoregressive(9, 3, 100, 0.3)
    share, count = low_frequency_share(x)
    assert count == 9
    for other in (7 * x + 100, x * 2.0**1000, x * 2.0**-1000):
        np.testing.assert_allclose(low_frequency_share(other)[0], share, rtol=1e-9)


def test_constant_has_no_effective_size():
    """A constant, an empty and a missing series have none."""
    assert np.isnan(effective_size([[3.0] * 50, [np.nan] * 50])).all()
    assert np.isnan(effective_size(np.empty((2, 0)))).all()
    assert np.isnan(effective_size([1.0])).all()


def test_a_cycle_that_evolves_is_in_the_long_run_variance():
    """An undeclared cycle of 24 rows is found by its echo in a week of hours; without it the variance is far too small.

    The long-run variance of (1 - .4 B)(1 - .6 B^24) x = e is 1/(.6 · .4)² = 17.4 (Berk 1974).
    """
    x = make("seasonal_ar", 31, 400, 168)
    seen, near = echoed_long_run(OwnModels(x)), autoregressive_long_run(x)
    assert abs(np.median(seen.variance) * 0.24**2 - 1) < 0.3
    assert np.median(near.variance) * 0.24**2 < 0.3
    assert (seen.df < 40).all()


def test_a_series_without_an_echo_keeps_its_long_run_variance():
    """For hardly a series of an autoregression does the search for echoes change anything; gaps do not matter."""
    x = make("ar0.6; lost clusters", 32, 400, 336)
    seen, plain = echoed_long_run(OwnModels(x)), autoregressive_long_run(x)
    assert (seen.variance == plain.variance).mean() > 0.95
    constant = echoed_long_run(OwnModels(np.ones((2, 100))))
    assert not (constant.variance > 0).any()
