"""Autocovariances, autocorrelations, partial ones and differences."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from naive import autocovariance as naive
from processes import autoregressive
from reference_values import closed, published, season, series, told

from sercheck.serial import autocovariances as module
from sercheck.serial.autocovariances import autocorrelation, autocovariance, differences, partial_autocorrelation
from sercheck.serial.season import detrended

# A correlation near zero is a small difference of terms of size one, each rounded at 1e-16: there relative agreement
# cannot be had of anybody, and 1e-12 absolute is asked instead.
CLOSE = {"rtol": 1e-9, "atol": 1e-12}


def transformed(name, what):
    """The series as the reference's name says it was transformed."""
    x = series(name)
    kind = what.removesuffix("_na_pass").removeprefix("acf").removeprefix("pacf").removeprefix("_")
    return {
        "": lambda: x,
        "diff1": lambda: differences(x),
        "diff2": lambda: differences(differences(x)),
        "seasonal_diff": lambda: differences(x, season(name)),
        "diff1_seasonal_diff": lambda: differences(differences(x, season(name))),
        "linear_detrended": lambda: detrended(x).ravel(),
    }[kind]()


@pytest.mark.parametrize(
    "name, what, expected",
    told(
        "acf", "acf_diff1", "acf_diff2", "acf_seasonal_diff", "acf_diff1_seasonal_diff", "acf_linear_detrended",
        "acf_na_pass", "acf_diff1_na_pass", "acf_seasonal_diff_na_pass",
    ),
)  # fmt: skip
def test_r_autocorrelations(name, what, expected):
    """R's acf (4.2.2, na.pass where values are missing) of every open series, raw, differenced and detrended."""
    r = autocorrelation(transformed(name, what), np.arange(1, len(expected) + 1))
    np.testing.assert_allclose(r, expected, **CLOSE)


@pytest.mark.parametrize("name, what, expected", told("pacf", "pacf_na_pass", "sm_pacf_ywm"))
def test_r_partial_autocorrelations(name, what, expected):
    """R's pacf (4.2.2) and statsmodels' ywm (0.15.0) of every open series."""
    partial = partial_autocorrelation(series(name), np.arange(1, len(expected) + 1))
    np.testing.assert_allclose(partial, expected, **CLOSE)


@pytest.mark.parametrize("name, what, expected", told("acov", "acov_na_pass"))
def test_r_autocovariances(name, what, expected):
    """R's autocovariances (4.2.2) of every open series, relative to the variance."""
    c = autocovariance(series(name), np.arange(len(expected)))
    np.testing.assert_allclose(c / expected[0], expected / expected[0], **CLOSE)


@pytest.mark.parametrize("name, what, expected", told("acf_season_lag"))
def test_r_autocorrelation_at_the_season(name, what, expected):
    """R's acf at the season alone equals what a single lag gives."""
    np.testing.assert_allclose(autocorrelation(series(name), season(name)), expected, **CLOSE)


@pytest.mark.parametrize("entry", [p for p in published() if "certified" in p["source"]], ids=lambda p: p["series"])
def test_nist_certified_values(entry):
    """NIST StRD lag-one autocorrelations, and to 13 digits the exact value of the doubles that the file becomes.

    1000000.2 or 10000000.2 cannot be held exactly: the doubles themselves are off by 6e-11 and 9e-10 of the deviations
    of .1, so that NumAcc3 and NumAcc4 agree with the certified values to that and no better.
    """
    x = series(entry["series"])
    r = float(autocorrelation(x, 1))
    lost = {"nist_numacc3": 1e-11, "nist_numacc4": 1e-10}.get(entry["series"], 1e-13)
    assert r == pytest.approx(entry["acf_lag1"], rel=lost)
    assert r == pytest.approx(naive.exact_lag_one(x), rel=2e-14, abs=1e-15)


def test_published_figures():
    """NAG's sunspots, Stata's GDP and NIST's case studies, to the digits that were printed."""
    for entry in published():
        for key, digits in (("acf_lag1_to_10", 4), ("acf_lag1_to_40", 8)):
            if key in entry:
                r = autocorrelation(series(entry["series"]), np.arange(1, len(entry[key]) + 1))
                np.testing.assert_allclose(r, entry[key], rtol=0, atol=0.51 * 10**-digits)
        if "case study" in entry["source"] and "acf_lag1" in entry:
            assert float(autocorrelation(series(entry["series"]), 1)) == pytest.approx(entry["acf_lag1"], abs=0.0006)


def pattern(row):
    """The series that a row of the closed forms describes."""
    n = row["n"]
    t = np.arange(n, dtype=float)
    kind = row["pattern"]
    if kind.startswith("linear"):
        return t + 1
    if kind.startswith("sin"):
        return np.sin(2 * np.pi * t / row["season"])
    if kind.startswith("alternating"):
        return (-1.0) ** t
    if kind.startswith("step"):
        return (t >= n / 2).astype(float)
    if kind.startswith("zeros"):
        return (t == n // 2).astype(float)
    return np.tile(np.array(row["cycle"], dtype=float), row["repeats"])


@pytest.mark.parametrize("row", closed("sample_patterns"), ids=lambda row: f"{row['pattern'][:12]}-{row['n']}")
def test_deterministic_patterns(row):
    """Trends, sines, steps, spikes and exact cycles have the autocorrelations of their formulas."""
    expected = np.array(row.get("acf") or row["acf_to_season"])
    r = autocorrelation(pattern(row), np.arange(1, len(expected) + 1))
    # the sine itself is rounded at 1e-16 of its size
    np.testing.assert_allclose(r, expected, rtol=1e-12, atol=1e-14)


def difference_of_noise(case):
    """Many stationary series of the case of the closed forms, differenced by ``differences``; None for other cases."""
    noise = np.random.default_rng(31).standard_normal((400, 1000))
    kind = case["case"]
    if kind.startswith("white noise differenced"):
        for _ in range(len(case["acf_from_lag1"]) - 1):
            noise = differences(noise)
        return noise
    if kind.startswith("seasonal difference"):
        return differences(noise, 7)
    if kind.startswith("difference of a linear trend"):
        return differences(noise + 0.3 * np.arange(1000))
    if kind.startswith("difference of a random walk"):
        return differences(noise.cumsum(axis=1))
    if kind.startswith("first and seasonal"):
        return differences(differences(noise, 7))
    if kind.startswith("first difference of AR(1)"):
        return differences(autoregressive(3, 400, 1000, case["phi"]))
    return None


@pytest.mark.parametrize(
    "case", [c for c in closed("transforms") if "difference" in c["case"]], ids=lambda c: c["case"][:40]
)
def test_differenced_noise(case):
    """Differenced noise, trends, walks and AR(1) have the autocorrelations of the closed forms on average."""
    x = difference_of_noise(case)
    expected = np.array(case["decimals"])
    kind = case["case"]
    lags = [7] if kind.startswith("seasonal") else [1, 6, 7, 8] if kind.startswith("first and") else None
    r = autocorrelation(x, lags or np.arange(1, len(expected) + 1))
    assert (np.abs(r.mean(axis=0) - expected) < 4.5 * r.std(axis=0) / 20 + 3 / 1000).all()


@pytest.mark.parametrize("row", closed("random_walk"), ids=lambda row: str(row["n"]))
def test_random_walks(row):
    """Averages of the autocovariances of random walks stand in the ratio that is known exactly."""
    walks = np.random.default_rng(6).standard_normal((40_000, row["n"])).cumsum(axis=1)
    c = autocovariance(walks, np.arange(6)).mean(axis=0)
    np.testing.assert_allclose(c[1:] / c[0], row["ratio_of_expectations_lag_1_to_5"], rtol=0, atol=0.012)


def test_sum_of_all_autocorrelations():
    """Over all lags the autocorrelations of any series sum to minus one half."""
    x = np.random.default_rng(5).gamma(2.0, size=(20, 97))
    total = autocorrelation(x, np.arange(1, 97)).sum(axis=1)
    np.testing.assert_allclose(total, -0.5, rtol=1e-12)


@pytest.mark.parametrize("missing", [0.0, 0.02, 0.4])
@pytest.mark.parametrize("few", [0, 10**6])
def test_twin(missing, few, monkeypatch):
    """Products, transforms and plain loops agree, with values missing or not."""
    monkeypatch.setattr(module, "FEW_LAGS", few)
    rng = np.random.default_rng(11)
    x = rng.standard_normal((6, 90)).cumsum(axis=1)
    x[rng.random(x.shape) < missing] = np.nan
    x[2, 4:] = np.nan
    lags = np.array([0, 1, 2, 7, 30, 88, 89, 90, 200])
    slow = [[naive.autocorrelation(row, int(lag)) if lag < 90 else np.nan for lag in lags] for row in x]
    np.testing.assert_allclose(autocorrelation(x, lags), slow, rtol=1e-10, atol=1e-13)


def test_long_series_in_segments(monkeypatch):
    """A series cut into segments before its transforms has the same autocorrelations."""
    x = np.random.default_rng(2).standard_normal((2, 70_001))
    x[1, 100:5000] = np.nan
    lags = np.arange(0, 300, 7)
    segments = autocorrelation(x, lags)
    monkeypatch.setattr(module, "FEW_LAGS", 10**6)
    np.testing.assert_allclose(segments, autocorrelation(x, lags), rtol=0, atol=1e-14)


@settings(max_examples=60, deadline=None)
@given(
    st.lists(st.one_of(st.just(float("nan")), st.integers(-50, 50).map(float)), min_size=2, max_size=25),
    st.integers(0, 26),
)
def test_any_series(values, lag):
    """Whatever is missing, the value is that of the plain sums, or NaN where nothing varies or no pair is complete."""
    x = np.array(values)
    here = x[~np.isnan(x)]
    r = autocorrelation(x, lag)
    if len(here) == 0 or np.ptp(here) == 0 or lag >= len(x):
        assert np.isnan(r)
    else:
        np.testing.assert_allclose(r, naive.autocorrelation(x, lag), rtol=1e-10, atol=1e-12)


@pytest.mark.parametrize("scale", [1e300, 1e-300, -1.0, 2.0**-1000])
def test_unit_does_not_matter(scale):
    """From 1e-300 to 1e300 the autocorrelations are the same."""
    x = np.random.default_rng(3).uniform(-1, 1, size=(3, 60))
    lags = [1, 2, 25]
    np.testing.assert_allclose(autocorrelation(x * scale, lags), autocorrelation(x, lags), rtol=1e-13, atol=1e-15)
    partial = partial_autocorrelation(x * scale, lags)
    np.testing.assert_allclose(partial, partial_autocorrelation(x, lags), rtol=1e-12, atol=1e-14)


@pytest.mark.parametrize("level", [0.0, 0.1, 1 / 3, 1e16, 1e300])
def test_constant_series(level):
    """A constant has no autocorrelation, however its mean is rounded, and its autocovariance is exactly 0."""
    x = np.full(1001, level)
    assert np.isnan(autocorrelation(x, [0, 1, 5])).all()
    assert np.isnan(partial_autocorrelation(x, [1, 5])).all()
    np.testing.assert_array_equal(autocovariance(x, [0, 1, 5]), 0.0)


@pytest.mark.parametrize("level", [0.1, 1e16, -1e300])
def test_rounding_is_not_measured(level):
    """Values that differ in their last place count as constant."""
    x = np.full(101, level)
    x[::2] = np.nextafter(level, 0)
    assert np.isnan(autocorrelation(x, 1))


def test_rounding_of_a_line_is_not_measured():
    """The differences of .1 t scatter by rounding alone and count as constant; a real wiggle is kept."""
    t = np.arange(200.0)
    assert np.isnan(autocorrelation(differences(0.1 * t), 1))
    assert float(autocorrelation(differences(0.1 * t + 1e-9 * (-1) ** t), 1)) < -0.9


def test_differences_keep_their_place():
    """Differences stay at the later step, and a missing value makes two of them missing."""
    x = np.array([1.0, 4.0, np.nan, 16.0, 25.0, 36.0])
    np.testing.assert_array_equal(differences(x), [np.nan, 3.0, np.nan, np.nan, 9.0, 11.0])
    np.testing.assert_array_equal(differences(x[None], 4), [[np.nan, np.nan, np.nan, np.nan, 24.0, 32.0]])
    assert np.isnan(differences(x, 9)).all()


def test_gaps_are_not_closed():
    """Closing the gaps up would give R's value of the shortened series, which is another number."""
    for name, _, expected in told("acf_gaps_closed"):
        r = autocorrelation(series(name), np.arange(1, len(expected) + 1))
        assert np.abs(r - expected).max() > 0.05


def test_shapes_follow_the_arguments():
    """One series or many, one lag or many: the shape is that of the series without time, then that of the lags."""
    x = np.random.default_rng(1).standard_normal((3, 30))
    for function in (autocorrelation, autocovariance, partial_autocorrelation):
        assert function(x[0], 1).shape == ()
        assert function(x[0], [1, 2]).shape == (2,)
        assert function(x, 1).shape == (3,)
        assert function(x, (1, 2)).shape == (3, 2)
        np.testing.assert_array_equal(function(x, [2, 1])[:, 0], function(x, 2))


@pytest.mark.parametrize("lags", [-1, [1, -2], 1.5, [[1, 2]]])
def test_lags_that_are_none(lags):
    """Negative, fractional and nested lags are refused."""
    with pytest.raises(ValueError, match="lags"):
        autocorrelation(np.arange(5.0), lags)


def test_partial_lag_zero_is_refused():
    """There is no partial autocorrelation at lag 0."""
    with pytest.raises(ValueError, match="at least 1"):
        partial_autocorrelation(np.arange(5.0), 0)


def test_input_stays_as_it_is():
    """Nothing is written into the caller's array."""
    x = np.random.default_rng(1).standard_normal((2, 50))
    x[0, 3] = np.nan
    before = x.copy()
    x.flags.writeable = False
    autocorrelation(x, np.arange(45))
    partial_autocorrelation(x, 3)
    differences(x, 2)
    np.testing.assert_array_equal(x, before)
