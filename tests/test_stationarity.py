"""Return to a level: tests against other programs, the rules of their agreement, sizes and power against history."""

import numpy as np
import pytest
from processes import agrees, autoregressive, look, make, p_values
from reference_values import published, series, told
from scipy import signal

from sercheck.measure import Stays
from sercheck.measures.stationarity import Stationarity
from sercheck.serial.unit_root import augmented_dickey_fuller, dickey_fuller_p, kpss, schwert_lags

MEASURE = Stationarity()
NAN = np.nan
DICKEY = told(*[f"sm_adf_{kind}_{lags}" for kind in ("c", "ct") for lags in ("aic", "lag4")])
KPSS = told(*[f"sm_kpss_{kind}_{lags}" for kind in ("c", "ct") for lags in ("auto", "legacy", "4", "0")])


def observed(name):
    """The series as statsmodels was given it: without its missing values."""
    x = series(name)
    return x[~np.isnan(x)]


@pytest.mark.parametrize(("name", "what", "values"), DICKEY, ids=[f"{n}-{w}" for n, w, _ in DICKEY])
def test_dickey_fuller_equals_statsmodels(name, what, values):
    """The t-value, MacKinnon's p-value and the lags that Akaike's criterion chooses."""
    _, _, kind, lags = what.split("_")
    seen = augmented_dickey_fuller(observed(name), trend=kind == "ct", lags=None if lags == "aic" else 4)
    np.testing.assert_allclose(seen.statistic[0], values[0], rtol=1e-9)
    np.testing.assert_allclose(seen.p_value[0], values[1], rtol=1e-7, atol=1e-12)
    assert seen.lags[0] == values[2]


@pytest.mark.parametrize(("name", "what", "values"), KPSS, ids=[f"{n}-{w}" for n, w, _ in KPSS])
def test_kpss_equals_statsmodels(name, what, values):
    """The statistic, its interpolated p-value and the automatic lags."""
    _, _, kind, lags = what.split("_")
    seen = kpss(observed(name), trend=kind == "ct", lags=None if lags == "auto" else int(values[2]))
    np.testing.assert_allclose(seen.statistic[0], values[0], rtol=1e-9)
    np.testing.assert_allclose(seen.p_value[0], values[1], rtol=1e-9)
    assert seen.lags[0] == values[2]


def test_figures_of_stata_r_and_sas():
    """Stata's dfuller (which keeps six digits), R's kpss.stat and the bandwidths of SAS."""
    gdp = series("macrodata_realgdp")
    for about in published():
        if "adf_constant_lag4" in about:
            for trend, key in ((False, "adf_constant_lag4"), (True, "adf_trend_lag4")):
                seen = augmented_dickey_fuller(gdp, trend=trend, lags=4)
                np.testing.assert_allclose(seen.statistic[0], about[key], rtol=2e-6)
                np.testing.assert_allclose(seen.p_value[0], about[f"{key}_p"], atol=1e-5)
        if "kpss_level_lag3" in about:
            np.testing.assert_allclose(kpss(gdp, lags=3).statistic[0], about["kpss_level_lag3"], rtol=1e-4)
            np.testing.assert_allclose(kpss(gdp, trend=True, lags=3).statistic[0], about["kpss_trend_lag3"], rtol=1e-4)
        if "kpss_auto_lag_level" in about:
            assert kpss(series(about["series"])).lags[0] == about["kpss_auto_lag_level"]


@pytest.mark.parametrize("trend", [False, True])
def test_many_series_at_once_equal_statsmodels_one_by_one(trend):
    """Walks, noise and negative memory of several lengths, to nine digits."""
    from statsmodels.tsa.stattools import adfuller

    for steps in (24, 97, 400):
        x = np.concatenate(
            [make("white", 1, 3, steps).cumsum(axis=1), make("ar0.6", 2, 3, steps), make("ar-0.5", 3, 3, steps)]
        )
        seen = augmented_dickey_fuller(x, trend=trend)
        kind = "ct" if trend else "c"
        other = [adfuller(row, regression=kind, result_object=True) for row in x]
        np.testing.assert_allclose(seen.statistic, [one.statistic for one in other], rtol=1e-8)
        np.testing.assert_allclose(seen.p_value, [one.pvalue for one in other], rtol=1e-6, atol=1e-12)
        np.testing.assert_array_equal(seen.lags, [one.lags for one in other])


def test_gaps_leave_rows_out():
    """With missing values the t-value is that of a least-squares fit on the rows that have all they need."""
    rng = np.random.default_rng(4)
    x = make("ar0.6", 5, 1, 120)[0]
    x[rng.random(120) < 0.1] = NAN
    d = np.r_[NAN, np.diff(x)]
    rows = [(d[t], 1.0, x[t - 1], d[t - 1], d[t - 2]) for t in range(3, 120)]
    table = np.array([row for row in rows if not np.isnan(row).any()])
    y, X = table[:, 0], table[:, 1:]
    beta, power = np.linalg.lstsq(X, y, rcond=None)[:2]
    error = np.sqrt(power[0] / (len(y) - 4) * np.linalg.inv(X.T @ X)[1, 1])
    np.testing.assert_allclose(augmented_dickey_fuller(x, lags=2).statistic[0], beta[1] / error, rtol=1e-9)


def test_nothing_to_test():
    """Constants, lines, short and empty series have no statistic; scale and shift change none."""
    x = np.array([np.full(50, 2.0), np.arange(50.0), np.full(50, NAN)])
    assert np.isnan(augmented_dickey_fuller(x, trend=True).statistic).all()
    assert np.isnan(kpss(x).statistic).tolist() == [True, False, True]
    assert np.isnan(augmented_dickey_fuller(np.arange(4.0)).statistic).all()
    walk = make("white", 6, 2, 200).cumsum(axis=1)
    for change in (walk * 1e250, walk * 1e-250, walk + 1e6):
        np.testing.assert_allclose(augmented_dickey_fuller(change).statistic,
                                   augmented_dickey_fuller(walk).statistic, rtol=1e-6)  # fmt: skip
    assert dickey_fuller_p(np.array([-30.0, 5.0, NAN])).tolist()[:2] == [0.0, 1.0]
    assert schwert_lags(100) == 12


LITERAL = Stays("below", high=0.05)


def test_a_bound_asks_both_tests():
    """Noise passes, a walk fails, and where the tests disagree the answer is undecided."""
    noise = look(MEASURE, make("ar0.6", 7, 200, 400), 0, LITERAL)
    walk = look(MEASURE, make("white", 8, 200, 400).cumsum(axis=1), 0, LITERAL)
    near = look(MEASURE, make("ar0.97", 9, 200, 400), 0, LITERAL)
    for seen, fails in ((noise, False), (walk, True)):
        failed = seen.upper.p_value("upper") == 0
        decided = seen.undecided < 0
        assert decided.mean() > 0.8
        assert np.mean(failed[decided] == fails) > 0.97
    assert (near.undecided >= 0).mean() > 0.2
    assert any("disagree" in text for text in near.reasons)
    p, back = noise.observed[:, 0], kpss(make("ar0.6", 7, 200, 400)).p_value
    np.testing.assert_array_equal(noise.undecided[:, 0] < 0, (p < 0.05) == (back > 0.05))


@pytest.mark.parametrize(
    ("values", "start", "stays", "reason"),
    [
        (make("white", 10, 1, 200), 0, LITERAL, "fewer than 336 values"),
        (make("white", 10, 1, 90), 0, LITERAL, "fewer than 96 values"),
        (make("white", 10, 1, 400), 0, Stays("below", high=0.001), "table of KPSS"),
        (make("ar0.95", 10, 1, 800), 650, LITERAL, "fewer than 336 values"),
        (np.ones((1, 400)), 0, LITERAL, "one value makes up"),
        (make("white", 10, 1, 200), 0, Stays("like_history"), "no history"),
        (make("white", 10, 1, 400), 300, Stays("like_history"), "fewer than 8 stretches"),
        (make("white", 10, 1, 400), 390, Stays("like_history"), "fewer than 24 values"),
    ],
)
def test_too_little_is_undecided_with_its_reason(values, start, stays, reason):
    """Short windows, long memory, a bound beyond the table, no history."""
    seen = look(MEASURE, values, start, stays)
    assert (seen.undecided >= 0).all()
    assert reason in seen.reasons[seen.undecided[0, 0]]


def test_history_of_short_memory_lets_a_shorter_window_be_judged():
    """150 rows suffice where history shows that memory is short."""
    seen = look(MEASURE, make("ar0.6", 11, 50, 950), 800, LITERAL)
    assert (seen.undecided < 0).mean() > 0.5


KINDS = ["white", "ar0.6", "ar0.9", "ma", "t3", "lognormal", "seasonal"]


@pytest.mark.parametrize("around", ["level", "trend"])
@pytest.mark.parametrize("kind", KINDS)
def test_healthy_windows_seldom_fail(kind, around):
    """At .05 and .01 no more than 1.3 and 1.7 times the risk; the same t held against MacKinnon's law says nothing."""
    count = 800
    x = make(kind, [12, 3], count, 768 + 96)
    p = p_values(look(MEASURE, x, 768, lengths={"day": 24} if kind == "seasonal" else {}, around=around))
    for risk, most in ((0.05, 0.065), (0.01, 0.017)):
        assert np.mean(p <= risk) <= most + 2.5 * np.sqrt(most / count)


def test_the_law_of_a_unit_root_alone_alarms_in_healthy_feeds():
    """'The unit root is not rejected' holds for most healthy windows of a feed with memory .95."""
    x = make("ar0.95", 13, 300, 768 + 96)
    assert np.mean(augmented_dickey_fuller(x[:, -96:]).p_value > 0.05) > 0.5
    assert np.mean(p_values(look(MEASURE, x, 768)) <= 0.05) <= 0.09


@pytest.mark.calibration
@pytest.mark.parametrize("n", [96, 168])
@pytest.mark.parametrize("kind", KINDS)
def test_sizes_at_a_thousandth(kind, n):
    """20,000 replications: at most .055, .013 and .0026."""
    rates = np.zeros(3)
    for block in range(10):
        p = p_values(look(MEASURE, make(kind, [14, block], 2000, 9 * n), 8 * n,
                          lengths={"day": 24} if kind == "seasonal" else {}))  # fmt: skip
        rates += [np.mean(p <= risk) / 10 for risk in (0.05, 0.01, 0.001)]
    print(kind, n, rates)
    assert (rates <= (0.055, 0.013, 0.0026)).all()


def test_a_window_that_wanders_is_found():
    """A random walk in place of a feed that returns within hours: more than .7 at .01, in a week of hours."""
    x = make("ar0.6", 15, 300, 1344 + 168)
    x[:, 1344:] = signal.lfilter([1], [1, -1], np.random.default_rng(16).normal(size=(300, 168)), axis=1)
    assert np.mean(p_values(look(MEASURE, x, 1344)) <= 0.01) > 0.7
    returns = x.copy()
    returns[:, 1344:] = autoregressive(17, 300, 168, 0.2)
    assert np.mean(p_values(look(MEASURE, returns, 1344)) <= 0.01) == 0


def test_p_value_and_limit_agree():
    """A p-value is at or under a risk exactly where the observation lies at or beyond the limit."""
    agrees(look(MEASURE, make("ar0.9", 18, 60, 9 * 96), 8 * 96))
