"""Innovations: sums over lags against outside values and twins, sizes beside naive, and what faults do to them."""

import numpy as np
import pytest
from naive import portmanteau as naive
from panels import clock_of, panel_of
from processes import agrees, autoregressive, look, make, p_values
from pydantic import ValidationError
from reference_values import closed, series, told
from scipy import signal, stats

from sercheck.measure import Question, Stays
from sercheck.measures.innovations import Innovations, InnovationsFields
from sercheck.serial.portmanteau import (
    box_pierce,
    box_pierce_of,
    cumulative,
    learned_portmanteau,
    ljung_box,
    ljung_box_of,
    robust_autocorrelations,
)

MEASURE = Innovations()
NAN = np.nan
LAGS = {name: lags.astype(int).tolist() for name, _, lags in told("ljung_box_lags")}


def garch(seed, count, steps, memory=0.0):
    """Variance in bursts: h = .1 + .2 e² + .7 h, with an autoregression on top."""
    z = np.random.default_rng(seed).normal(size=(count, steps + 300))
    e, h = np.empty_like(z), np.ones(count)
    for t in range(z.shape[1]):
        e[:, t] = np.sqrt(h) * z[:, t]
        h = 0.1 + 0.2 * e[:, t] ** 2 + 0.7 * h
    return signal.lfilter([1], [1, -memory], e, axis=1)[:, 300:]


@pytest.mark.parametrize("row", closed("portmanteau"))
def test_sums_equal_the_closed_forms(row):
    """From given autocorrelations, Q and its p-value have all the digits of a computation with forty."""
    r, n = np.array([row["r"]]), np.array([row["n"]])
    for name, of in (("box_pierce", box_pierce_of), ("ljung_box", ljung_box_of)):
        seen = of(r, n, row["lost_df"])
        assert seen.df == row["df"]
        np.testing.assert_allclose(seen.statistic[0], row[name], rtol=1e-13)
        np.testing.assert_allclose(seen.p_value[0], row[f"{name}_p"], rtol=1e-11)


OUTSIDE = told("ljung_box_stat", "ljung_box_p", "box_pierce_stat", "box_pierce_p", "sm_ljung_box_stat",
               "sm_ljung_box_p", "sm_box_pierce_stat", "sm_box_pierce_p")  # fmt: skip


@pytest.mark.parametrize(("name", "what", "values"), OUTSIDE, ids=[f"{n}-{w}" for n, w, _ in OUTSIDE])
def test_sums_equal_those_of_other_programs(name, what, values):
    """R's Box.test and statsmodels at one to 24 lags (R's p-values have no digits below 1e-16)."""
    sums = ljung_box if "ljung_box" in what else box_pierce
    ours = [sums(series(name), lag) for lag in LAGS[name]]
    if what.endswith("stat"):
        np.testing.assert_allclose([q.statistic[0] for q in ours], values, rtol=1e-8)
    else:
        np.testing.assert_allclose([q.p_value[0] for q in ours], values, rtol=1e-7, atol=1e-15)


def test_sums_equal_plain_loops_and_know_gaps():
    """Against loops over one series at a time, with missing values and with correlated squares."""
    x = np.concatenate([make("ar0.6", 1, 3, 80), garch(2, 5, 80), make("t3", 3, 3, 80)])
    for row, pierce, box in zip(x, box_pierce(x, 7).statistic, ljung_box(x, 7).statistic, strict=True):
        np.testing.assert_allclose((pierce, box), naive.sums(row, 7), rtol=1e-10)
    gaps = np.where(np.random.default_rng(4).random(x.shape) < 0.1, NAN, x)
    for rows in (x, gaps):
        np.testing.assert_allclose(cumulative(rows, 7).statistic, [naive.cumulative(row, 7) for row in rows], rtol=1e-9)


def test_the_correlation_of_products_matters_where_variance_comes_in_bursts():
    """The cumulative statistic differs from the plain sum of squares there, and scale changes neither."""
    e = garch(5, 50, 400)
    plain = (robust_autocorrelations(e - e.mean(axis=1, keepdims=True), 10) ** 2).sum(axis=1)
    robust = cumulative(e, 10).statistic
    assert 0.3 < (np.abs(robust / plain - 1) > 0.01).mean() < 1
    np.testing.assert_allclose(cumulative(e * 1e200, 10).statistic, robust, rtol=1e-9)


def test_fitted_parameters_take_degrees_of_freedom():
    """The same sum, fewer degrees of freedom; none left is an error; the learned sum shrinks by the model's share."""
    x = make("white", 6, 4, 200)
    assert cumulative(x, 10, 3).df == 7
    np.testing.assert_array_equal(cumulative(x, 10, 3).statistic, cumulative(x, 10).statistic)
    with pytest.raises(ValueError, match="more lags"):
        ljung_box(x, 2, 2)
    free = learned_portmanteau(x, 10, np.zeros(4, dtype=int), np.full(4, 0.5)).statistic
    order = np.array([0, 5, 10, 30])
    np.testing.assert_allclose(
        free / learned_portmanteau(x, 10, order, np.full(4, 0.5)).statistic, [1, 1.25, 1.5, 1.5]
    )


def test_nothing_varies():
    """A constant series and one without pairs have no sum."""
    x = np.array([np.full(60, 3.0), np.where(np.arange(60) == 7, 1.0, NAN), np.full(60, NAN)])
    for sums in (cumulative, ljung_box, box_pierce):
        assert np.isnan(sums(x, 5).statistic).all()
        assert np.isnan(sums(x, 5).p_value).all()


def test_the_fields_refuse_what_leaves_no_freedom():
    """As many fitted parameters as lags, a look that there is none of."""
    for wrong in ({"fitted": 10}, {"lags": 0}, {"look": "colour"}, {"lags": 5, "fitted": 6}):
        with pytest.raises(ValidationError):
            InnovationsFields(**wrong)


def test_a_literal_significance_is_compared_as_it_is():
    """It fails exactly where the data's significance is at or under the author's number, without history or risk."""
    x = make("ar0.6", 7, 100, 96) * 0.2 + make("white", 8, 100, 96)
    p = cumulative(x, 10).p_value
    for bound in (0.01, 0.2):
        seen = look(MEASURE, x, 0, Stays("above", low=bound), risk=1e-9)
        assert seen.exact
        np.testing.assert_array_equal(seen.observed[:, 0], p)
        np.testing.assert_array_equal(seen.lower.p_value("lower")[:, 0] == 0, p <= bound)
        assert (seen.undecided < 0).all()
    told = look(MEASURE, x, 0, Stays("above", low=1.5))
    assert (told.undecided >= 0).all()
    assert "between 0 and 1" in told.reasons[0]


@pytest.mark.parametrize(("kind", "most"), [("white", 0.065), ("garch", 0.065), ("t3", 0.065)])
def test_healthy_residuals_seldom_break_a_literal_significance(kind, most):
    """At .05 no more than .065 of healthy residual columns break it; Ljung and Box's sum does under bursts."""
    x = garch(9, 2000, 336) if kind == "garch" else make(kind, 9, 2000, 336)
    broken = np.mean(look(MEASURE, x, 0, Stays("above", low=0.05)).observed <= 0.05)
    assert broken <= most + 2.5 * np.sqrt(0.05 * 0.95 / 2000)
    if kind == "garch":
        assert np.mean(ljung_box(x, 10).p_value <= 0.05) > 0.15


CASES = ["white", "ar0.6", "ar0.9", "t3", "ma", "seasonal", "garch"]


@pytest.mark.parametrize("kind", CASES)
@pytest.mark.parametrize("what", ["whiteness", "variance"])
def test_healthy_batches_seldom_fail(kind, what):
    """At .05 and .01 no more than .065 and .017, for windows of a week after eight."""
    honest, naive_rate = sizes(kind, what, 1344, 168, 1000)
    for rate, most in zip(honest, (0.065, 0.017), strict=True):
        assert rate <= most + 2.5 * np.sqrt(most * (1 - most) / 1000)
    if what == "variance" and kind == "garch":
        assert naive_rate > 0.02


def sizes(kind, what, past, n, count, seed=10, risks=(0.05, 0.01)):
    """False-alarm rates at the risks, and that of the limits for independent rows at .01."""
    x = garch([seed, 1], count, past + n, 0.6) if kind == "garch" else make(kind, [seed, 1], count, past + n)
    seen = look(MEASURE, x, past, lengths={"day": 24} if kind == "seasonal" else {}, look=what)
    p = p_values(seen)
    assert not np.isnan(p).any()
    assert (seen.lower is None) == (what == "whiteness")
    alone = np.full(seen.observed.shape, 0.005)
    naive_rate = np.mean(seen.observed > seen.upper.naive_limit("upper", alone))
    return [np.mean(p <= risk) for risk in risks], naive_rate


@pytest.mark.calibration
@pytest.mark.parametrize("kind", [*CASES, "lognormal"])
@pytest.mark.parametrize("what", ["whiteness", "variance"])
def test_sizes_at_a_thousandth(kind, what):
    """20,000 replications: at most .065, .017 and .003 (whiteness on lognormal rows: .005, a weak cell)."""
    rates = np.mean(
        [sizes(kind, what, 2016, 168, 2000, seed, (0.05, 0.01, 0.001))[0] for seed in range(20, 30)], axis=0
    )
    print(kind, what, rates)
    most = (0.065, 0.017, 0.005 if (kind, what) == ("lognormal", "whiteness") else 0.003)
    assert (rates <= most).all()


def smoothed(w):
    """Running means of three."""
    out = w.copy()
    out[:, 1:-1] = (w[:, :-2] + w[:, 1:-1] + w[:, 2:]) / 3
    return out


def interpolated(w):
    """Every second value from its neighbours."""
    out = w.copy()
    out[:, 1:-1:2] = (w[:, :-2:2] + w[:, 2::2])[:, : out[:, 1:-1:2].shape[1]] / 2
    return out


def shuffled(w):
    """Rows in any order."""
    return np.random.default_rng(11).permuted(w, axis=1)


@pytest.mark.parametrize("weeks", [12, 60])
@pytest.mark.parametrize(
    ("kind", "fault", "least"),
    [("ar0.6", smoothed, 0.95), ("ar0.6", interpolated, 0.95), ("ar0.9", smoothed, 0.95), ("ar0.9", interpolated, 0.95),
     ("ar0.9", shuffled, 0.99), ("seasonal", shuffled, 0.99), ("seasonal", smoothed, 0.95)],
)  # fmt: skip
def test_faults_are_found_by_the_variance(kind, fault, least, weeks):
    """At a risk of .01 in a week of hours: by history's windows, and by the recent past where there is enough."""
    x = make(kind, 12, 150, (weeks + 1) * 168)
    x[:, -168:] = fault(x[:, -168:])
    seen = look(MEASURE, x, weeks * 168, lengths={"day": 24} if kind == "seasonal" else {}, look="variance")
    assert np.mean(p_values(seen) <= 0.01) >= least
    assert ("last batches" in seen.method) == (weeks == 60)


def test_memory_that_comes_back_is_found():
    """Residuals that were white and now are not: against history and by significance."""
    x = make("white", 13, 200, 2016 + 168)
    x[:, -168:] = autoregressive(14, 200, 168, 0.5)
    assert np.mean(p_values(look(MEASURE, x, 2016)) <= 0.01) > 0.95
    assert np.mean(look(MEASURE, x[:, -168:], 0, Stays("above", low=0.01)).observed <= 0.01) > 0.95


@pytest.mark.parametrize("what", ["whiteness", "variance"])
def test_p_value_and_limit_agree(what):
    """A p-value is at or under a risk exactly where the observation lies at or beyond the limit."""
    x = make("ar0.6", 15, 60, 1344 + 168)
    x[:30, -168:] = smoothed(x[:30, -168:])
    agrees(look(MEASURE, x, 1344, look=what))
    agrees(look(MEASURE, x, 1344, Stays("between", 0.8, 1.2), look="variance"))


def test_the_detectable_sum_is_found_with_probability_four_fifths():
    """A sum that has grown by the noncentrality told exceeds its limit in 80 % of cases."""
    law = look(MEASURE, make("white", 16, 2, 1344 + 168), 1344).upper
    size = law.detectable("upper", np.full((2, 1), 0.01))[0, 0]
    limit = law.limit("upper", np.full((2, 1), 0.01))[0, 0]
    np.testing.assert_allclose(stats.ncx2.sf(limit, 10, size), 0.8, atol=1e-6)


def test_a_ratio_may_be_bounded():
    """Innovations twice as large as the bound allows fail, healthy ones and those just under it do not."""
    x = make("ar0.6", 17, 300, 2016 + 168)
    half, tight = Stays("below", high=1.5), Stays("between", 0.5, 1.5)
    healthy = look(MEASURE, x, 2016, half, look="variance")
    np.testing.assert_allclose(np.median(healthy.observed), 1.0, atol=0.05)
    assert np.mean(p_values(healthy) <= 0.01) == 0
    wide = x.copy()
    wide[:, -168:] = 20 + 2 * x[:, -168:]
    assert np.mean(p_values(look(MEASURE, wide, 2016, tight, look="variance")) <= 0.01) > 0.95
    edge = x.copy()
    edge[:, 2016 - 40 :] *= np.sqrt(1.5)
    assert np.mean(p_values(look(MEASURE, edge, 2016, half, look="variance")) <= 0.01) < 0.03


def weekly(values, days):
    """Whiteness of seven batches of a day each, the last ones."""
    panel = panel_of(values, days * 24 - 144)
    clock = clock_of(panel_of(values, days * 24))
    return MEASURE.run(panel, Question(InnovationsFields(), Stays("like_history"), 0.01, {}, clock))


def test_seven_batches_are_compared_with_their_recent_past():
    """A window of seven day batches after ninety: healthy ones seldom fail, returned memory does; fewer: the model."""
    x = make("seasonal", 18, 300, 100 * 24 + 24)
    seen = weekly(x, 100)
    assert "last batches" in seen.method
    assert seen.lower is None
    p = p_values(seen)
    assert np.mean(p <= 0.05) <= 0.065 + 2.5 * np.sqrt(0.05 * 0.95 / 300)
    assert "χ²" in weekly(x[:, -70 * 24 :], 69).method
    other = x.copy()
    other[:, -168:] += 4 * autoregressive(19, 300, 168, -0.8)
    assert np.mean(p_values(weekly(other, 100)) <= 0.01) > 0.9


@pytest.mark.parametrize(
    ("values", "start", "fields", "reason"),
    [
        (make("white", 20, 1, 600), 560, {}, "fewer than 48 values"),
        (make("white", 20, 1, 600), 0, {}, "no history"),
        (make("white", 20, 1, 600), 400, {}, "fewer than 3 windows"),
        (make("white", 20, 1, 600), 500, {"lags": 30}, "fewer than 120 values"),
        (make("white", 20, 1, 600), 500, {"look": "variance"}, "fewer than 8 stretches"),
        (np.ones((1, 600)), 500, {}, "one value makes up"),
    ],
)
def test_too_little_is_undecided_with_its_reason(values, start, fields, reason):
    """A short window, a short history, none, many lags, a constant."""
    seen = look(MEASURE, values, start, **fields)
    assert (seen.undecided >= 0).all()
    assert reason in seen.reasons[seen.undecided[0, 0]]


@pytest.mark.parametrize("stays", [Stays("like_history"), Stays("above", low=0.05)], ids=["history", "literal"])
def test_whiteness_of_odd_input_is_whole_or_undecided(stays):
    """Gaps, constants, huge and tiny values, nothing at all: a finite answer or a reason."""
    base = make("seasonal", 21, 2, 1344 + 168)
    rng = np.random.default_rng(22)
    for values in (np.where(rng.random(base.shape) < 0.3, NAN, base), base * 1e299, base * 1e-301, base + 1e9,
                   np.full(base.shape, NAN), np.zeros(base.shape), base[:0], np.round(base)):  # fmt: skip
        seen = look(MEASURE, values, 1344, stays, lengths={"day": 24})
        decided = seen.undecided < 0
        law, side = (seen.upper, "upper") if seen.upper else (seen.lower, "lower")
        assert np.isfinite(seen.observed[decided]).all()
        assert np.isfinite(law.p_value(side)[decided]).all()
        assert seen.observed.shape == (len(values), 1)
    scaled = look(MEASURE, base * 4.0, 1344, stays, lengths={"day": 24}).observed
    np.testing.assert_allclose(scaled, look(MEASURE, base, 1344, stays, lengths={"day": 24}).observed, rtol=1e-9)
