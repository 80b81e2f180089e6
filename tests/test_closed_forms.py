"""Averaged, repeated, smoothed and noisy series have the autocorrelations of the published formulas, on average."""

import numpy as np
import pytest
from reference_values import closed

from sercheck.serial.autocovariances import autocorrelation
from sercheck.serial.effective_sizes import effective_size_of

SERIES, STEPS = 60, 20_000
BIAS = 40 / STEPS
"""Most that estimating the mean moves an autocorrelation: above twice the sum of any case's, over the steps."""
REPEATS, ALPHA = 4, 0.3
"""The formulas' m and alpha, which they leave open."""


def ar1(rng, phi, steps):
    """Stationary first-order autoregressions of variance 1, shape (SERIES, steps)."""
    x = rng.standard_normal((SERIES, steps))
    x[:, 1:] *= np.sqrt(1 - phi**2)
    for t in range(1, steps):
        x[:, t] += phi * x[:, t - 1]
    return x


def weighted(noise, weights):
    """A moving average."""
    return sum(w * noise[:, k : noise.shape[1] - len(weights) + k + 1] for k, w in enumerate(weights))


def simulated(case):
    """Series of the case, and its autocorrelations from lag 1."""
    rng = np.random.default_rng(17)
    kind = case["case"]
    if "point moving average" in kind:
        return weighted(rng.standard_normal((SERIES, STEPS)), np.ones(int(kind.split("-")[0]))), case["decimals"]
    if kind.startswith("1-2-1"):
        return weighted(rng.standard_normal((SERIES, STEPS)), [1, 2, 1]), case["decimals"]
    if kind.startswith("each white-noise value"):
        x = np.repeat(rng.standard_normal((SERIES, STEPS // REPEATS)), REPEATS, axis=1)
        return x, [max(1 - k / REPEATS, 0) for k in range(1, 7)]
    if kind.startswith("exponential smoothing"):
        return ar1(rng, 1 - ALPHA, STEPS), [(1 - ALPHA) ** k for k in range(1, 7)]
    if kind.startswith("AR(1) signal"):
        share = case["signal_share_of_variance"]
        noise = rng.standard_normal((SERIES, STEPS))
        return np.sqrt(share) * ar1(rng, case["phi"], STEPS) + np.sqrt(1 - share) * noise, case["decimals"]
    assert kind.startswith("non-overlapping block means")
    whole = STEPS // case["block"] * case["block"]
    blocks = ar1(rng, case["phi"], whole).reshape(SERIES, -1, case["block"]).mean(axis=2)
    return blocks, case["decimals"]


@pytest.mark.parametrize(
    "case", [c for c in closed("transforms") if "difference" not in c["case"]], ids=lambda c: c["case"][:40]
)
def test_averages_and_noise(case):
    """The mean sample autocorrelation over many series is the formula's, to 4.5 of its standard errors and the bias."""
    x, expected = simulated(case)
    r = autocorrelation(x, np.arange(1, len(expected) + 1))
    off = np.abs(r.mean(axis=0) - np.array(expected, dtype=float))
    assert (off < 4.5 * r.std(axis=0) / np.sqrt(SERIES) + BIAS * STEPS / x.shape[1]).all(), off


@pytest.mark.parametrize(
    "row", closed("newey_west_population"), ids=lambda row: f"{row['phi']}-{row['bandwidth_lags']}"
)
def test_long_run_factor(row):
    """Rows over effective size give the long-run factor of an AR(1); weights cut at a bandwidth stop on the way."""
    n, phi, lags = 10**6, row["phi"], row["bandwidth_lags"]
    rho = phi ** np.arange(2001.0)
    assert n / float(np.ravel(effective_size_of(n, rho))[0]) == pytest.approx(
        row["true_long_run_over_variance"], rel=1e-4
    )
    weights = 1 - np.arange(1, lags + 1) / (lags + 1)
    cut = 1 + 2 * weights @ rho[1 : lags + 1]
    assert cut == pytest.approx(row["population_newey_west_over_variance"], rel=1e-12)
    assert abs(cut - 1) < abs(row["true_long_run_over_variance"] - 1)
