"""Seasonal profiles, lines and decompositions, and whether there is a season at all."""

from __future__ import annotations

import naive.season as slow
import numpy as np
import pytest
from reference_values import season, series, told
from scipy import stats

from sercheck.serial.autocovariances import autocorrelation
from sercheck.serial.season import (
    cycle_numbers,
    decomposed,
    detrended,
    median,
    phase_means,
    robust_phase_means,
    seasonal_share,
    without_trend_and_season,
)
from sercheck.serial.spectral import spectral_f, spectral_f_power


def holed(seed, shape, share=0.2):
    """Normal values with holes."""
    seeded = np.random.default_rng(seed)
    x = seeded.normal(size=shape)
    x[seeded.random(shape) < share] = np.nan
    return x


@pytest.mark.parametrize(
    "phase",
    [
        np.arange(50) % 7,
        (np.arange(50) + 3) % 7,
        np.arange(4) + 2,
        np.r_[np.arange(20) % 7, (np.arange(21, 51)) % 7],
        np.random.default_rng(1).integers(0, 5, 50),
        np.empty(0, dtype=np.int64),
    ],
    ids=["from 0", "from 3", "less than a cycle", "a skipped hour", "any order", "nothing"],
)
def test_phase_means_are_those_of_one_value_at_a_time(phase):
    """Folding and sorting give the means and counts of a plain loop, whatever the phases."""
    x = holed(2, (3, len(phase)))
    means, counts = phase_means(x, phase, 7)
    for s in range(3):
        want, number = slow.phase_means(x[s], phase, 7)
        np.testing.assert_allclose(means[s], want, rtol=1e-12)
        np.testing.assert_array_equal(counts[s], number)


def test_cycles_are_numbered_by_the_fall_of_the_phase():
    """A short first cycle and one with a skipped step count as one each."""
    np.testing.assert_array_equal(cycle_numbers(np.array([5, 6, 0, 1, 3, 6, 0])), [0, 0, 1, 1, 1, 1, 2])


def test_a_broken_cycle_does_not_bend_the_profile():
    """A day stuck at a far-off value is left out as a whole; without one nothing is left out."""
    seeded = np.random.default_rng(3)
    phase = np.arange(24 * 20) % 24
    x = 3 * np.sin(2 * np.pi * phase / 24) + seeded.normal(size=(200, len(phase)))
    whole = robust_phase_means(x, phase, 24)
    assert whole.kept.mean() > 0.999
    stuck = x.copy()
    stuck[:, 24 * 4 : 24 * 5] = 40.0
    told_apart = robust_phase_means(stuck, phase, 24)
    assert not told_apart.kept[:, 24 * 4 : 24 * 5].any()
    left = np.delete(x, np.s_[24 * 4 : 24 * 5], axis=1)
    calm = robust_phase_means(left, np.delete(phase, np.s_[24 * 4 : 24 * 5]), 24)
    same = calm.kept.all(axis=1)
    np.testing.assert_allclose(told_apart.means[same], calm.means[same], rtol=1e-9, atol=1e-12)


def test_cycles_without_noise_do_not_break_each_other():
    """Exact repetition keeps every cycle, and still leaves out the one that differs."""
    phase = np.arange(24 * 10) % 24
    x = np.tile(np.sin(2 * np.pi * phase / 24), (1, 1))
    assert robust_phase_means(x, phase, 24).kept.all()
    x[0, 24:48] = 0.0
    kept = robust_phase_means(x, phase, 24).kept[0]
    np.testing.assert_array_equal(kept, (np.arange(240) < 24) | (np.arange(240) >= 48))


def test_the_median_takes_no_notice_of_holes():
    """Medians of the observed values, NaN where there is none."""
    x = holed(4, (50, 6), share=0.5)
    x[0] = np.nan
    want = [np.nan if np.isnan(row).all() else np.nanmedian(row) for row in x]
    np.testing.assert_array_equal(median(x), want)


def test_the_line_is_the_least_squares_one():
    """Residuals with holes are those of a regression, and a far-off level costs no digits."""
    x = holed(5, (4, 60)) + np.arange(60) * 0.3
    for s in range(4):
        np.testing.assert_allclose(detrended(x)[s], slow.detrended(x[s]), atol=1e-12)
    np.testing.assert_allclose(detrended(x * 2.0**40), detrended(x) * 2.0**40, rtol=1e-12)
    np.testing.assert_allclose(detrended(x + 1e9), detrended(x), atol=1e-5)


def test_line_and_season_together_are_one_regression():
    """Taking out both at once gives the residuals of a regression on the clock and the places of the cycle."""
    x = holed(6, (3, 45)) + 0.1 * np.arange(45)
    phase = (np.arange(45) + 2) % 7
    design = np.column_stack([np.arange(45.0), phase[:, None] == np.arange(7)])
    for s, rest in enumerate(without_trend_and_season(x, phase, 7)):
        seen = ~np.isnan(x[s])
        beta = np.linalg.lstsq(design[seen], x[s][seen], rcond=None)[0]
        np.testing.assert_allclose(rest, x[s] - design @ beta, atol=1e-12)


@pytest.mark.parametrize(("name", "what", "value"), told("r2_season", "r2_season_given_trend"))
def test_the_share_of_a_season_is_that_of_r(name, what, value):
    """R² of the place in the cycle, alone and given a line, as R's ``lm`` gives it (R 4.2.2)."""
    share = seasonal_share(series(name), season(name), given_trend=what.endswith("trend"))
    np.testing.assert_allclose(share, value, rtol=1e-9)


@pytest.mark.parametrize(("name", "what", "value"), told("season_f_given_trend", "season_f_p_given_trend"))
def test_the_f_of_a_season_is_that_of_r(name, what, value):
    """F and p of the season given a line, from the shares, as R's ``anova`` gives them (R 4.2.2)."""
    x, s = series(name), season(name)
    share = seasonal_share(x, s, given_trend=True)[0]
    f = share / (s - 1) / ((1 - share) / (len(x) - s - 1))
    np.testing.assert_allclose(stats.f.sf(f, s - 1, len(x) - s - 1) if "_p_" in what else f, value, rtol=1e-7)


@pytest.mark.parametrize(("name", "_", "value"), told("decompose_additive_figure", "sm_decompose_additive_figure"))
def test_the_seasonal_figure_is_that_of_r_and_statsmodels(name, _, value):
    """The additive figure of R 4.2.2 (``decompose``) and statsmodels 0.15.0 (``seasonal_decompose``)."""
    figure = decomposed(series(name), season(name))[1][0]
    np.testing.assert_allclose(figure, value, rtol=1e-9, atol=1e-10)


@pytest.mark.parametrize(("name", "_", "value"), told("acf_season_lag"))
def test_the_autocorrelation_at_the_season_is_that_of_r(name, _, value):
    """R's ``acf`` at the season (R 4.2.2)."""
    np.testing.assert_allclose(autocorrelation(series(name), season(name)), value, rtol=1e-10)


@pytest.mark.parametrize(("length", "steps"), [(24, 103), (7, 28), (5, 61), (3, 14)])
def test_the_spectral_f_is_a_sum_of_its_own_at_each_frequency(length, steps):
    """Statistic and p-value equal those of plain Fourier sums and scipy's F and Fisher (scipy 1.17.1)."""
    x = holed(7, (3, steps), share=0.1) + np.sin(2 * np.pi * np.arange(steps) / length) + 0.05 * np.arange(steps)
    seen = spectral_f(x, length)
    for s in range(3):
        f, p = slow.spectral_f(x[s], length)
        np.testing.assert_allclose(seen.f[s], f, rtol=1e-8)
        np.testing.assert_allclose(seen.p_value[s], p, rtol=1e-7)


def spectral_rates(seed, series_count, cycles, phi, share=0.0):
    """How often a season is certified at .05, .01, .001 in AR(1) noise; the season holds a share of the variance."""
    from processes import autoregressive

    x = autoregressive(seed, series_count, 24 * cycles, phi) * np.sqrt(1 - phi**2)
    x = np.sqrt(1 - share) * x + np.sqrt(2 * share) * np.sin(2 * np.pi * np.arange(24 * cycles) / 24)
    p = spectral_f(x, 24).p_value
    return np.array([np.mean(p <= risk) for risk in (0.05, 0.01, 0.001)])


@pytest.mark.parametrize("phi", [0.0, 0.6, 0.9])
@pytest.mark.parametrize("cycles", [4, 7])
def test_without_a_season_none_is_certified(cycles, phi):
    """False certificates keep the risk in white and in correlated noise."""
    rates = spectral_rates(8, 4000, cycles, phi)
    assert (rates <= np.array([0.05, 0.01, 0.001]) + 4 * np.sqrt(np.array([0.05, 0.01, 0.001]) / 4000)).all()


@pytest.mark.calibration
@pytest.mark.parametrize("phi", [-0.5, 0.0, 0.6, 0.9])
@pytest.mark.parametrize("cycles", [4, 7, 14])
def test_calibration_of_the_certificate(cycles, phi):
    """Over 40,000 series false certificates keep .05, .01 and .001."""
    rates = np.mean([spectral_rates([8, block], 4000, cycles, phi) for block in range(10)], axis=0)
    print(f"spectral F, {cycles} cycles, phi {phi}: {rates}")
    assert (rates <= [0.056, 0.0125, 0.0018]).all()


def test_a_strong_season_is_certified_in_four_cycles():
    """A season with four fifths of the variance is found at .01 with probability .8 or more."""
    assert spectral_rates(9, 2000, 4, 0.0, share=0.8)[1] >= 0.87


def test_the_foretold_power_is_near_the_true_one():
    """The power that decides whether an absence may be told is within .15 of the simulated one."""
    for cycles, risk, place in ((4, 0.01, 1), (5, 0.001, 2), (7, 0.001, 2)):
        true = spectral_rates(10, 2000, cycles, 0.0, share=0.5)[place]
        assert abs(spectral_f_power(cycles, 24, 0.5, risk) - true) < 0.15


@pytest.mark.parametrize(("length", "steps"), [(24, 95), (2, 50), (24, 3)])
def test_too_little_for_a_certificate_gives_nothing(length, steps):
    """Under four cycles, or without a harmonic between neighbours, there is no statistic and no power."""
    seen = spectral_f(np.random.default_rng(11).normal(size=(2, steps)), length)
    assert np.isnan(seen.statistic).all()
    assert spectral_f_power(steps // length, length, 0.5, 0.05) == 0.0


def test_extreme_scales_and_exact_cycles():
    """A cycle without noise is certain, a line or a constant tells nothing, and the unit does not matter."""
    t = np.arange(240.0)
    exact = np.sin(2 * np.pi * t / 24)
    assert spectral_f(exact, 24).p_value[0] < 1e-20
    assert np.isnan(spectral_f(np.stack([np.full(240, 7.0), 3 + 2 * t, np.full(240, np.nan)]), 24).statistic).all()
    x = exact + np.random.default_rng(12).normal(size=240)
    for unit in (1e-300, 1e300):
        np.testing.assert_allclose(spectral_f(x * unit, 24).statistic, spectral_f(x, 24).statistic, rtol=1e-9)
