"""Two columns: coefficients against outside values and loops, sizes beside naive, and the way of the second column."""

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from processes import agrees, autoregressive, make, p_values, panel
from pydantic import ValidationError

import sercheck
from sercheck.measure import Question, Stays
from sercheck.measures.cross_correlation import CrossCorrelation
from sercheck.rulebook import load_rules
from sercheck.serial.cross_correlation import cross_correlation, robust_cross

MEASURE = CrossCorrelation()
LIKE, ZERO = Stays("like_history"), Stays("below", high=0.0)
NAN = np.nan


def look(x, y, start, stays=LIKE, lengths=None, risk=0.01, **fields):
    """Run the measure with a second column beside the first."""
    fields = {"lag": 0, **fields} if "lags" not in fields else fields
    beside = replace(panel(x, start, lengths), beside={"flow": panel(y, start, lengths)})
    return MEASURE.run(beside, Question(MEASURE.Fields(**{"with": "flow", **fields}), stays, risk, lengths or {}))


def test_correlations_equal_numpy_at_every_lag():
    """Pairs of x now and y so many steps earlier, missing ones left out one by one; y later for a lag below 0."""
    rng = np.random.default_rng(1)
    x, y = rng.normal(size=(2, 3, 60))
    x[rng.random(x.shape) < 0.1] = NAN
    lags = (0, 1, 7, -2)
    r, pairs = cross_correlation(x, y, lags)
    for row in range(3):
        for column, lag in enumerate(lags):
            both = [(x[row, t], y[row, t - lag]) for t in range(60) if 0 <= t - lag < 60 and not np.isnan(x[row, t])]
            assert pairs[row, column] == len(both)
            np.testing.assert_allclose(r[row, column], np.corrcoef(np.array(both).T)[0, 1], rtol=1e-12)
    np.testing.assert_allclose(cross_correlation(x * 1e200 + 1e201, y * 1e-200, lags)[0], r, rtol=1e-9)


def test_robust_t_equals_its_definition():
    """Σ ef/√Σ(ef)², and its unit turns it into the correlation about 0."""
    rng = np.random.default_rng(2)
    e, f = rng.standard_t(4, size=(2, 2, 80))
    seen = robust_cross(e * 1e150, f, (0, 3))
    for row in range(2):
        for column, lag in enumerate((0, 3)):
            products = [e[row, t] * f[row, t - lag] for t in range(lag, 80)]
            t = sum(products) / np.sqrt(sum(v * v for v in products))
            np.testing.assert_allclose(seen.t[row, column], t, rtol=1e-10)
            r = sum(products) / np.sqrt(sum(e[row, lag:] ** 2) * sum(f[row, : 80 - lag] ** 2))
            np.testing.assert_allclose(seen.t[row, column] * seen.unit[row, column], r, rtol=1e-10)


def test_perfect_relation_is_one():
    """A column against its own copy, its mirror image, and its copy a step later."""
    x = make("ar0.6", 3, 2, 400)
    np.testing.assert_allclose(cross_correlation(x, 2 * x + 1, (0,))[0], 1)
    np.testing.assert_allclose(cross_correlation(x, -x, (0,))[0], -1)
    np.testing.assert_allclose(cross_correlation(x[:, 1:], x[:, :-1], (-1,))[0], 1)


def test_the_fields_ask_for_a_column_and_one_kind_of_lag():
    """No column, no lag, both kinds, a lag twice: refused."""
    for wrong in ({"lag": 0}, {"with": "flow"}, {"with": "flow", "lag": 0, "lags": [1]}, {"with": "f", "lags": [1, 1]}):
        with pytest.raises(ValidationError):
            MEASURE.Fields(**wrong)


KINDS = ["white", "ar0.6", "ar0.9", "ma", "t3", "garch", "lognormal", "seasonal"]


def columns(kind, seed, count, steps, shared):
    """Two columns of a kind, the second with a share of the first."""
    x, y = make(kind, [seed, 1], count, steps), make(kind, [seed, 2], count, steps)
    return x, shared * x + y


def rates(kind, seed, count, past, n, stays, shared, risks=(0.05, 0.01)):
    """False-alarm rates, and that of the limit for independent rows at .01."""
    x, y = columns(kind, seed, count, past + n, shared)
    seen = look(x, y, past, stays, {"day": 24} if kind == "seasonal" else {})
    p = p_values(seen)
    assert not np.isnan(p).any()
    level = 0.01 if seen.lower is None else 0.005
    naive = np.mean(seen.observed > seen.upper.naive_limit("upper", np.full(seen.observed.shape, level)))
    return np.array([np.mean(p <= risk) for risk in risks]), naive


@pytest.mark.parametrize("kind", KINDS)
def test_columns_like_their_history_seldom_fail(kind):
    """At .05 and .01 no more than .06 and .015; limits for independent rows fail up to twenty times too often."""
    honest, naive = rates(kind, 4, 1500, 768, 96, LIKE, 0.5)
    for rate, most in zip(honest, (0.06, 0.015), strict=True):
        assert rate <= most + 2.5 * np.sqrt(most / 1500)
    if kind == "ar0.9":
        assert naive > 0.1


@pytest.mark.parametrize("kind", KINDS)
def test_unrelated_columns_seldom_break_a_bound_of_nothing(kind):
    """At .05 and .01 no more than .06 and .013, from 168 rows alone, where plain correlations of slow columns do."""
    honest, _ = rates(kind, 5, 1500, 0, 168, ZERO, 0.0)
    for rate, most in zip(honest, (0.06, 0.013), strict=True):
        assert rate <= most + 2.5 * np.sqrt(most / 1500)
    if kind == "ar0.9":
        x, y = columns(kind, 5, 1500, 168, 0.0)
        assert np.mean(cross_correlation(x, y, (0,))[0] > 1.645 / np.sqrt(168)) > 0.2


@pytest.mark.calibration
@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize(
    ("past", "n", "stays", "shared"), [(768, 96, LIKE, 0.5), (0, 48, ZERO, 0.0), (0, 168, ZERO, 0.0)]
)
def test_sizes_at_a_thousandth(kind, past, n, stays, shared):
    """20,000 replications: at most .06, .016 and .0027."""
    if kind == "seasonal" and n == 48:
        n = 96
    risks = (0.05, 0.01, 0.001)
    found = np.mean([rates(kind, seed, 2000, past, n, stays, shared, risks)[0] for seed in range(20, 30)], axis=0)
    print(kind, n, found)
    assert (found <= (0.06, 0.016, 0.0027)).all()


@pytest.mark.parametrize(("past", "n"), [(0, 96), (96, 168), (336, 168)])
def test_profiles_taken_out_of_both_columns_are_allowed_for(past, n):
    """Four cycles of the window's own, or of history: their errors meet in the products and are allowed for."""
    x, y = columns("seasonal", 16, 3000, past + n, 0.0)
    p = p_values(look(x, y, past, ZERO, {"day": 24}))
    assert abs(np.mean(p <= 0.05) - 0.05) <= 0.015


def test_a_lost_relation_is_found():
    """The second column comes from somewhere else, or an hour late: found; the lag tells which."""
    x, y = columns("ar0.6", 6, 200, 1344 + 168, 2.0)
    gone, late = y.copy(), y.copy()
    gone[:, 1344:] = columns("ar0.6", 7, 200, 168, 2.0)[1]
    late[:, 1345:] = y[:, 1344:-1]
    assert np.mean(p_values(look(x, gone, 1344)) <= 0.01) > 0.95
    seen = look(x, late, 1344, lags=(0, 1, -1))
    assert seen.observed.shape == (200, 3)
    either = np.minimum(seen.upper.p_value("upper"), seen.lower.p_value("lower"))
    assert (either <= 0.005).mean(axis=0)[[0, 2]].min() > 0.9


def test_a_relation_breaks_a_bound_of_nothing():
    """Innovations that share a fifth of their variance at a lag are found there and not beside it."""
    x = autoregressive(8, 200, 168, 0.6)
    y = autoregressive(9, 200, 168, 0.6)
    y[:, 2:] += 0.8 * x[:, :-2]
    seen = look(y, x, 0, ZERO, lags=(2, -2))
    found = (seen.upper.p_value("upper") <= 0.01).mean(axis=0)
    assert found[0] > 0.95
    assert found[1] < 0.06
    assert seen.lags == (2, -2)


def test_a_bound_with_history():
    """A correlation at the bound fails at its risk, one well below it always; without history it is undecided."""
    x, y = columns("ar0.6", 10, 1500, 1344 + 168, 1.0)
    at = look(x, y, 1344, Stays("above", low=float(np.sqrt(0.5))))
    assert np.mean(p_values(at) <= 0.01) <= 0.015 + 2.5 * np.sqrt(0.015 / 1500)
    below = look(x, y, 1344, Stays("above", low=0.95))
    assert np.mean(p_values(below) <= 0.01) > 0.95
    alone = look(x[:2], y[:2], 0, Stays("above", low=0.5))
    assert (alone.undecided >= 0).all()
    assert "no history" in alone.reasons[alone.undecided[0, 0]]


@pytest.mark.parametrize(
    ("n", "past", "stays", "lengths", "fields", "reason"),
    [
        (40, 0, ZERO, {}, {}, "fewer than 48 rows with both values"),
        (60, 0, ZERO, {}, {"lag": 20}, "lag 20 needs 80"),
        (60, 0, ZERO, {"day": 24}, {}, "4 cycles (96 steps)"),
        (60, 0, LIKE, {}, {}, "no history"),
        (60, 300, LIKE, {}, {}, "fewer than 8 stretches"),
        (60, 600, LIKE, {}, {"lag": -30}, "lag -30 needs 120"),
        (60, 600, Stays("above", low=1.0), {}, {}, "between -1 and 1"),
    ],
)
def test_too_little_is_undecided_with_its_reason(n, past, stays, lengths, fields, reason):
    """Few pairs, far lags, seasons that cannot be taken out, little history."""
    x, y = columns("white", 11, 1, past + n, 0.5)
    seen = look(x, y, past, stays, lengths, **fields)
    assert (seen.undecided >= 0).all()
    assert reason in seen.reasons[seen.undecided[0, 0]]


@pytest.mark.parametrize("stays", [LIKE, ZERO, Stays("between", -0.2, 0.9)], ids=["history", "zero", "bound"])
def test_odd_columns_are_whole_or_undecided(stays):
    """Gaps in either column, constants, huge values, nothing: a finite answer or a reason; order changes nothing."""
    x, y = columns("seasonal", 12, 3, 1344 + 168, 0.5)
    rng = np.random.default_rng(13)
    gaps = np.where(rng.random(x.shape) < 0.3, NAN, x)
    for one, two in (
        (gaps, y),
        (x, gaps),
        (x * 1e299, y),
        (np.ones_like(x), y),
        (x, np.full_like(x, NAN)),
        (x[:0], y[:0]),
    ):
        seen = look(one, two, 1344, stays, {"day": 24})
        decided = seen.undecided < 0
        assert np.isfinite(seen.observed[decided]).all()
        assert np.isfinite(seen.upper.p_value("upper")[decided]).all()
        back = look(one[::-1], two[::-1], 1344, stays, {"day": 24})
        np.testing.assert_allclose(back.observed[::-1], seen.observed, rtol=1e-9)
    agrees(look(x, y, 1344, stays, {"day": 24}))


BOOK = """feed: heat
columns: {time: at, series: house, values: [kwh, flow, outside]}
every: 1h
false_alarm: 0.01
rules:
  - {name: together, measure: cross_correlation, with: flow, lag: 0, after: difference, stays: {like: history}}
  - {name: one, measure: cross_correlation, of: kwh, with: flow, lags: [0, 1], stays: {between: [-0.5, 0.99]}}
"""


def feed(steps, seed):
    """Two houses; flow follows heat, the outside does not."""
    hours = pd.date_range("2026-01-01", periods=steps, freq="h", tz="UTC")
    frames = []
    for house in "ab":
        rng = np.random.default_rng([seed, ord(house)])
        kwh = rng.normal(size=steps).cumsum() * 0.1 + rng.normal(size=steps)
        frames.append(pd.DataFrame({"at": hours, "house": house, "kwh": kwh, "flow": 2 * kwh + rng.normal(size=steps),
                                    "outside": rng.normal(size=steps)}))  # fmt: skip
    return pd.concat(frames)


def test_the_second_column_comes_through_the_whole_line():
    """Every other column is judged against the one named, after the same transforms, and a lost relation is told."""
    rows = feed(1000, 14)
    edge = pd.Timestamp("2026-01-01", tz="UTC") + pd.Timedelta(hours=900)
    old, new = rows[rows["at"] < edge], rows[rows["at"] >= edge].copy()
    book = load_rules(BOOK)
    assert book.rules[0].columns == ("kwh", "outside")
    healthy = sercheck.gate(book, new, history=old, keep=False).records
    assert sorted(set(healthy.loc[healthy["rule"] == "together", "column"])) == ["kwh", "outside"]
    assert sorted(set(healthy.loc[healthy["rule"] == "one", "lag"])) == [0, 1]
    assert set(healthy.loc[healthy["column"] == "kwh", "outcome"]) == {"pass"}
    kwh = np.diff(rows.loc[rows["house"] == "a", "kwh"])[-100:]
    flow = np.diff(rows.loc[rows["house"] == "a", "flow"])[-100:]
    told = healthy[(healthy["rule"] == "together") & (healthy["series"] == "a") & (healthy["column"] == "kwh")]
    assert abs(told["observed"].iloc[0] - np.corrcoef(kwh, flow)[0, 1]) < 0.1  # scores are not values
    new["flow"] = np.random.default_rng(15).permutation(new["flow"].to_numpy())
    broken = sercheck.gate(book, new, history=old, keep=False).records
    failed = broken[(broken["rule"] == "together") & (broken["column"] == "kwh")]
    assert set(failed["outcome"]) == {"fail"}
