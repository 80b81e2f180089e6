"""The autocorrelation against a number and against history."""

import numpy as np
import pytest
from processes import SEASONAL, agrees, autoregressive, look, make, p_values
from pydantic import ValidationError

from sercheck.measure import Stays
from sercheck.measures._lags import LagFields
from sercheck.measures.autocorrelation import Autocorrelation
from sercheck.serial.lag_law import history_law

TRUTH = {"white": 0.0, "ar0.6": 0.6, "ar0.9": 0.9, "ma": 0.6 / 1.36}
ALLOWED = {0.05: 0.065, 0.01: 0.017, 0.001: 0.003}
"""Largest false-alarm rates that count as healthy at each risk; season and trend removed, 168 rows or more."""


def rates(kind, n, risks, series, blocks=1):
    """False-alarm rates of `below` and `above` at the true value, and those of limits for independent rows."""
    truth = TRUTH[kind]
    honest, naive = np.zeros((2, len(risks))), np.zeros((2, len(risks)))
    for block in range(blocks):
        seen = look(Autocorrelation(), make(kind, [41, n, block], series, n), 0, Stays("between", truth, truth), lag=1)
        assert (seen.undecided >= 0).mean() < 0.005
        for place, risk in enumerate(risks):
            asked = np.full(seen.observed.shape, risk)
            honest[0, place] += (seen.upper.p_value("upper") <= risk).mean()
            honest[1, place] += (seen.lower.p_value("lower") <= risk).mean()
            naive[0, place] += (seen.observed > seen.upper.naive_limit("upper", asked)).mean()
            naive[1, place] += (seen.observed < seen.lower.naive_limit("lower", asked)).mean()
    return honest / blocks, naive / blocks


@pytest.mark.parametrize("n", [168, 336])
@pytest.mark.parametrize("kind", TRUTH)
def test_false_alarms_at_a_bound(kind, n):
    """A series whose autocorrelation is the bound is held no more often than .065 at .05 and .017 at .01."""
    honest, naive = rates(kind, n, (0.05, 0.01), 4000)
    assert (honest[:, 0] <= 0.065).all()
    assert (honest[:, 1] <= 0.017).all()
    # an allowance that was merely wide would pass the lines above: it must come near the risk as well
    assert (honest[:, 0] >= 0.027).all()
    assert (honest[:, 1] >= 0.003).all()
    if kind == "ar0.9":
        # z/√n does not know that r scatters little near 1: it would hardly ever hold anything
        assert naive[0, 0] < 0.002


@pytest.mark.parametrize("phi, lag, truth", [(0.9, 3, 0.729), ([1.5, -0.75], 2, 15 / 28), (0.0, 24, 0.0)])
def test_false_alarms_at_later_lags(phi, lag, truth):
    """The rates hold beyond lag one too, where strong earlier autocorrelations forbid to bend one coefficient alone."""
    seen = look(Autocorrelation(), autoregressive(71, 3000, 168, phi), 0, Stays("between", truth, truth), lag=lag)
    for side in ("upper", "lower"):
        p = getattr(seen, side).p_value(side)
        assert 0.02 <= (p <= 0.05).mean() <= 0.065
        assert (p <= 0.01).mean() <= 0.017


@pytest.mark.calibration
@pytest.mark.parametrize("n", [168, 336])
@pytest.mark.parametrize("kind", TRUTH)
def test_calibration_at_a_bound(kind, n):
    """The same on 40,000 series, down to a risk of .001."""
    honest, naive = rates(kind, n, tuple(ALLOWED), 10_000, 4)
    for side, name in enumerate(("below", "above")):
        table = " ".join(f"{rate:.4f} ({plain:.4f})" for rate, plain in zip(honest[side], naive[side], strict=True))
        print(f"{kind:6} n {n} {name}: {table}")
        assert (honest[side] <= list(ALLOWED.values())).all()


@pytest.mark.parametrize("kind, n", [("ar0.6", 168), ("ar0.9", 168), ("white", 48)])
def test_false_alarms_against_history(kind, n):
    """A batch like its history of nine batches is held no more often than .065 at .05 and .017 at .01."""
    p = p_values(look(Autocorrelation(), make(kind, 43, 2000, 10 * n), 9 * n, lag=1))
    told = ~np.isnan(p)
    assert told.mean() > 0.98
    assert 0.03 <= (p[told] <= 0.05).mean() <= 0.065
    assert 0.004 <= (p[told] <= 0.01).mean() <= 0.017


def test_false_alarms_of_a_season_against_history():
    """Cycles that history knows are taken out before a batch is compared with it."""
    p = p_values(look(Autocorrelation(), make("seasonal", 44, 1500, 168 * 10), 168 * 9, lengths=SEASONAL, lag=1))
    assert 0.03 <= np.nanmean(p <= 0.05) <= 0.065


@pytest.mark.calibration
@pytest.mark.parametrize("kind", ["white", "ar0.6", "ar0.9", "lognormal", "seasonal"])
def test_calibration_against_history(kind):
    """History of twelve batches of 168 rows, 20,000 series, down to a risk of .001."""
    lengths = SEASONAL if kind == "seasonal" else {}
    p = np.concatenate([
        p_values(look(Autocorrelation(), make(kind, [45, b], 4000, 168 * 13), 168 * 12, lengths=lengths, lag=1))
        for b in range(5)
    ])  # fmt: skip
    told = p[~np.isnan(p)]
    rate = [(told <= risk).mean() for risk in ALLOWED]
    print(kind, " ".join(f"{r:.4f}" for r in rate), f"undecided {np.isnan(p).mean():.4f}")
    assert (np.array(rate) <= list(ALLOWED.values())).all()


@pytest.mark.parametrize("bound, phi, least", [(0.3, 0.5, 0.55), (0.6, 0.8, 0.70)])
def test_power_at_a_bound(bound, phi, least):
    """At a risk of .01 and 168 rows, .5 is found above a bound of .3 and .8 above one of .6 as often as demanded."""
    seen = look(Autocorrelation(), autoregressive(46, 4000, 168, phi), 0, Stays("below", high=bound), lag=1)
    assert np.nanmean(p_values(seen) <= 0.01) >= least


def test_power_against_history():
    """A fall from .6 to .3 is found four times in five at a risk of .01."""
    values = np.hstack([autoregressive(47, 600, 2016, 0.6), autoregressive(48, 600, 168, 0.3)])
    assert np.nanmean(p_values(look(Autocorrelation(), values, 2016, lag=1)) <= 0.01) >= 0.8


@pytest.mark.parametrize("gap", ["scattered", "one stretch"])
@pytest.mark.parametrize("phi, share", [(0.0, 0.3), (0.6, 0.2), (0.9, 0.1)])
def test_false_alarms_with_gaps(gap, phi, share):
    """Gaps widen the allowance: neither scattered missing rows nor a missing stretch raise false alarms."""
    x = autoregressive(49, 2000, 240, phi)
    rng = np.random.default_rng(50)
    if gap == "scattered":
        x[rng.random(x.shape) < share] = np.nan
    else:
        first = rng.integers(0, 240 - int(240 * share), size=(2000, 1))
        steps = np.arange(240)
        x[(steps >= first) & (steps < first + int(240 * share))] = np.nan
    seen = look(Autocorrelation(), x, 0, Stays("between", phi, phi), lag=1)
    told = seen.undecided[:, 0] < 0
    for side in ("upper", "lower"):
        p = getattr(seen, side).p_value(side)[told, 0]
        assert (p <= 0.05).mean() <= 0.065
        assert (p <= 0.01).mean() <= 0.017
    assert told.any()


STAYS = [Stays("like_history"), Stays("below", high=0.5), Stays("between", -0.2, 0.9), Stays("above", low=0.7)]


@pytest.mark.parametrize("stays", STAYS)
@pytest.mark.parametrize("missing", [0.0, 0.1])
def test_limit_and_p_value_agree(stays, missing):
    """The observation is beyond the limit exactly when the p-value is within the risk."""
    x = make("ar0.6", 51, 300, 168 * 11)
    x[np.random.default_rng(1).random(x.shape) < missing] = np.nan
    x[:50] = make("ar0.6", 51, 50, 168 * 11)
    agrees(look(Autocorrelation(), x, 168 * 10, stays, lags=(1, 2, 5)))


def test_naive_limits():
    """The limit for independent rows is b ± z/√n, against history r ± z √(1/n + 1/N)."""
    x = make("white", 52, 5, 168 * 13)
    risk = np.full((5, 1), 0.05)
    seen = look(Autocorrelation(), x[:, -168:], 0, Stays("between", -0.1, 0.2), lag=1)
    np.testing.assert_allclose(seen.upper.naive_limit("upper", risk), 0.2 + 1.6448536 / np.sqrt(168), rtol=1e-7)
    np.testing.assert_allclose(seen.lower.naive_limit("lower", risk), -0.1 - 1.6448536 / np.sqrt(168), rtol=1e-7)
    seen = look(Autocorrelation(), x, 168 * 12, lag=1)
    wide = 1.6448536 * np.sqrt(1 / 168 + 1 / (168 * 12))
    np.testing.assert_allclose(seen.upper.naive_limit("upper", risk) - seen.upper.bound, wide, rtol=1e-7)


def test_effective_size_is_that_of_the_variance_used():
    """White rows count about one each; near an autocorrelation of .9 a row tells more of it, far from it less."""
    white = look(Autocorrelation(), make("white", 53, 500, 300), 0, Stays("below", high=0.0), lag=1)
    assert 230 < np.median(white.n_eff) <= 310
    steep = look(Autocorrelation(), make("ar0.9", 53, 500, 300), 0, Stays("below", high=0.9), lag=1)
    assert 900 < np.median(steep.n_eff) < 1800


def reason(seen):
    """The one reason of a measurement that is undecided everywhere."""
    assert (seen.undecided >= 0).all()
    return seen.reasons[seen.undecided[0, 0]]


def test_reasons():
    """Too few rows, too steep a bound, wandering, ties, constants and missing history each say what is wrong."""
    white, bound = make("white", 54, 3, 400), Stays("below", high=0.3)
    assert "needs 48" in reason(look(Autocorrelation(), white[:, :47], 0, bound, lag=1))
    assert "needs 96" in reason(look(Autocorrelation(), white[:, :95], 0, bound, lag=24))
    assert "needs 168" in reason(look(Autocorrelation(), white[:, :167], 0, Stays("above", low=0.61), lag=1))
    assert "needs 280" in reason(look(Autocorrelation(), white[:, :270], 0, Stays("above", low=0.61), lag=40))
    walk = np.cumsum(white, axis=1) + 1e4 * np.linspace(0, 1, 400)
    assert "difference first" in reason(look(Autocorrelation(), walk, 0, bound, lag=1))
    steep = autoregressive(56, 3, 168, 0.9)
    assert "beyond what" in reason(look(Autocorrelation(), steep, 0, Stays("below", high=0.985), lag=1))
    assert "says nothing" in reason(look(Autocorrelation(), white, 0, Stays("below", high=1.0), lag=1))
    few = np.where(np.arange(400) % 10 == 0, white, 7.0)
    assert "measure rate" in reason(look(Autocorrelation(), few, 0, bound, lag=1))
    ties = np.where(np.random.default_rng(2).random((3, 400)) < 0.4, white, 7.0)
    assert (look(Autocorrelation(), ties, 0, bound, risk=0.01, lag=1).undecided < 0).all()
    assert "more than 50%" in reason(look(Autocorrelation(), ties, 0, bound, risk=0.001, lag=1))
    assert "equal" in reason(look(Autocorrelation(), np.full((2, 400), 0.1), 0, bound, lag=1))
    assert "no values" in reason(look(Autocorrelation(), np.full((2, 400), np.nan), 0, bound, lag=1))
    assert "no history" in reason(look(Autocorrelation(), white, 0, lag=1))
    assert "needs 24" in reason(look(Autocorrelation(), white, 380, lag=1))
    assert "windows" in reason(look(Autocorrelation(), white, 200, lag=1))
    every_third = np.where(np.arange(400) % 3 == 0, white, np.nan)
    assert "gaps leave" in reason(look(Autocorrelation(), every_third, 0, bound, lag=1))


def test_undecided_still_tells_what_it_saw():
    """Too short a window has no verdict but a value, its rows and its missing rows."""
    x = make("white", 55, 2, 30)
    x[0, 3] = np.nan
    seen = look(Autocorrelation(), x, 0, Stays("below", high=0.3), lag=1)
    assert np.isfinite(seen.observed).all()
    assert seen.n[:, 0].tolist() == [29, 30]
    assert seen.n_missing[:, 0].tolist() == [1, 0]


def test_windows_decide_where_the_model_fails():
    """A history whose memory changes from week to week is not what one autoregression says: its windows decide."""
    rng = np.random.default_rng(58)
    changing = np.concatenate(
        [
            autoregressive(int(seed), 200, 168, phi)
            for seed, phi in zip(range(60, 76), rng.uniform(0, 0.9, 16), strict=True)
        ],
        axis=1,
    )
    batch = autoregressive(77, 200, 168, 0.7)
    past = history_law(changing, batch, np.array([1]))
    assert past.by_windows.mean() > 0.95
    assert (past.windows == 16).all()
    np.testing.assert_array_equal(past.law.df[past.by_windows], 15)
    steady = history_law(autoregressive(78, 200, 168 * 16, 0.5), autoregressive(79, 200, 168, 0.5), np.array([1]))
    assert steady.by_windows.mean() < 0.25


def test_each_lag_by_itself():
    """Several lags give the same answers as one after the other, as long as their models may have the same order."""
    x = make("ar0.6", 56, 20, 400)
    together = look(Autocorrelation(), x, 0, Stays("below", high=0.5), lags=(3, 1))
    assert together.lags == (3, 1)
    alone = look(Autocorrelation(), x, 0, Stays("below", high=0.5), lag=3)
    np.testing.assert_array_equal(together.observed[:, :1], alone.observed)
    np.testing.assert_allclose(together.upper.p_value("upper")[:, :1], alone.upper.p_value("upper"), rtol=1e-9)


@pytest.mark.parametrize(
    "fields",
    [{}, {"lag": 1, "lags": [1]}, {"lag": 0}, {"lag": 1.5}, {"lag": True}, {"lags": []}, {"lags": [1, 1]}, {"lg": 1}],
)
def test_fields_that_are_refused(fields):
    """Exactly one of lag and lags, whole and positive, none twice."""
    with pytest.raises(ValidationError):
        LagFields(**fields)


def test_seasons_are_named_where_they_would_decide():
    """The record of a literal bound says that the feed's seasons are supposed to be taken out."""
    x = make("white", 57, 2, 400)
    seen = look(Autocorrelation(), x, 0, Stays("below", high=0.5), lengths=SEASONAL, lag=1)
    assert "day (24 steps)" in seen.assumes
    assert "day" not in look(Autocorrelation(), x, 0, Stays("below", high=0.5), lag=1).assumes
