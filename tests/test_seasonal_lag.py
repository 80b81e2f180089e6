"""The measure ``seasonal_lag``: amplitude against history, a bound on the autocorrelation, is there a season."""

from __future__ import annotations

import naive.season as slow
import numpy as np
import pytest
from processes import LIKE, agrees, autoregressive, look, p_values, panel
from seasons import CYCLES, DAY, LENGTHS, RISKS, SHAPE, feed, rates

from sercheck.errors import UsageError
from sercheck.judge import FAIL, PASS, UNDECIDED, Seen, judge
from sercheck.measure import Question, Stays
from sercheck.measures import get
from sercheck.rulebook.compiled import Rule
from sercheck.serial.autocovariances import autocorrelation
from sercheck.serial.matched_filter import Cycle, learn_season, matched_amplitude
from sercheck.serial.season import detrended

MEASURE = get("seasonal_lag")
PRESENT = Stays("present")


def outcomes(x, start, stays, risk=0.01, lengths=None, **fields):
    """Outcomes of the judge, each series by itself."""
    fields = fields or {"season": "day"}
    seen = look(MEASURE, x, start, stays, risk, LENGTHS if lengths is None else lengths, **fields)
    rule = Rule("r", "seasonal_lag", MEASURE.Fields(**fields), stays, ("kwh",), false_alarm=risk, across=("series",))
    keys = np.arange(len(seen.observed)).astype(str)
    judged = judge(rule, [Seen(0, keys, "kwh", seen, 0, 0)])[0]
    return judged.outcome[:, 0], seen


def reason(seen, place=0):
    """The reason of one series."""
    return seen.reasons[seen.undecided[place, 0]]


def test_the_amplitude_is_that_of_a_plain_regression():
    """Amplitude and error equal least squares on hand-whitened values, holes included."""
    x, start = feed("ar6", 1, 5, 2, strength=2.0)
    x[np.random.default_rng(2).random(x.shape) < 0.05] = np.nan
    phase = np.arange(x.shape[1]) % DAY
    model = learn_season(x[:, :start], [Cycle(DAY, phase)], x.shape[1] - start)
    seen = matched_amplitude(x[:, start:], model, start)
    for s in range(5):
        widening = (1 + max(x.shape[1] - start, DAY) / model.taught[s]) * model.scatter[s]
        value, error, points = slow.amplitude(
            x[s, start:], model.means[0][s][phase[start:]], model.noise.coefficients[s, : model.noise.order[s]],
            model.variance[s], model.count[s], widening,
        )  # fmt: skip
        np.testing.assert_allclose([seen.value[s], seen.scale[s]], [value, error], rtol=1e-9)
        assert seen.points[s] == points


@pytest.mark.parametrize("kind", ["white", "ar6", "t3"])
@pytest.mark.parametrize("cycles", [1, 2, 4, 7])
def test_a_healthy_season_keeps_the_risk(kind, cycles):
    """In windows of one to seven days a season as in history fails no more often than the risk."""
    fails, _ = rates("seasonal_lag", kind, 3, 2000, cycles)
    assert (fails <= np.array(RISKS) + 4 * np.sqrt(np.array(RISKS) / 2000)).all()


def test_a_season_that_is_gone_or_halved_is_found():
    """Gone: two days are enough, .95 at .01; halved: four days, .85 at .01, in a strong season."""
    assert rates("seasonal_lag", "white", 4, 1000, 2, fault="gone")[0][1] >= 0.99
    assert rates("seasonal_lag", "ar6", 4, 1000, 2, fault="gone", strength=1.5)[0][1] >= 0.95
    assert rates("seasonal_lag", "white", 4, 1000, 4, fault="halved")[0][1] >= 0.85


@pytest.mark.calibration
@pytest.mark.parametrize("kind", ["white", "ar6", "ar9", "t3"])
@pytest.mark.parametrize("cycles", [1, 2, 4, 7])
def test_calibration_of_the_amplitude(kind, cycles):
    """Over 20,000 series: .05 at most .08, .01 at most .02, .001 at most .003; the power is printed beside."""
    fails, silent = rates("seasonal_lag", kind, 5, 2000, cycles, blocks=10)
    power = [
        np.round(rates("seasonal_lag", kind, 5, 2000, cycles, fault=fault)[0], 2).tolist()
        for fault in ("gone", "halved", "flat in a third")
    ]
    print(f"amplitude, {kind}, {cycles} cycles: healthy {fails}, undecided {silent:.3f}, gone/halved/flat {power}")
    assert (fails <= [0.08, 0.02, 0.003]).all()


def test_p_value_and_limit_agree_for_every_bound():
    """An observation is beyond the limit exactly where its p-value is within the risk."""
    x, start = feed("ar6", 6, 60, 7, strength=1.5)
    x[:20, start:] = feed("ar6", 7, 20, 7, fault="gone")[0][:, start:]
    x[20:40] = evolving(8, 20, x.shape[1])
    for stays in (LIKE, PRESENT, Stays("below", high=0.3), Stays("above", low=0.3), Stays("between", 0.1, 0.5)):
        agrees(look(MEASURE, x, start, stays, 0.01, LENGTHS, season="day"))


def evolving(seed, series, steps, persistence=0.8):
    """A season whose shape wanders: a seasonal autoregression on top of a fixed cycle."""
    x = np.random.default_rng(seed).normal(size=(series, steps + 240))
    for t in range(DAY, steps + 240):
        x[:, t] += persistence * x[:, t - DAY]
    return x[:, 240:] * np.sqrt(1 - persistence**2) + 2 * SHAPE[np.arange(steps) % DAY]


def test_an_evolving_season_is_judged_by_its_autocorrelation():
    """Where innovations still correlate at the season, r at the season is told, against history's windows."""
    x = evolving(9, 1000, DAY * (CYCLES + 2))
    seen = look(MEASURE, x, CYCLES * DAY, LIKE, 0.01, LENGTHS, season="day")
    assert (seen.undecided < 0).mean() > 0.99
    np.testing.assert_allclose(seen.observed[:, 0], autocorrelation(x[:, CYCLES * DAY :], DAY), rtol=1e-9)
    assert np.mean(p_values(seen) <= 0.05) < 0.05 + 4 * np.sqrt(0.05 / 1000)
    one = look(MEASURE, x[:5, : -DAY], CYCLES * DAY, LIKE, 0.01, LENGTHS, season="day")
    assert (one.undecided >= 0).all()
    assert "evolves" in reason(one)


def test_amplitudes_that_scatter_in_history_may_scatter_in_the_batch():
    """A season whose strength varies by a tenth from day to day fails no more often than the risk."""
    seeded = np.random.default_rng(10)
    x, start = feed("ar6", 11, 2000, 4, strength=0.0)
    strength = 3 * (1 + 0.1 * seeded.normal(size=(2000, CYCLES + 4)))
    x += np.repeat(strength, DAY, axis=1) * SHAPE[np.arange(x.shape[1]) % DAY]
    p = p_values(look(MEASURE, x, start, LIKE, 0.01, LENGTHS, season="day"))
    assert np.nanmean(p <= 0.05) <= 0.075
    assert np.nanmean(p <= 0.01) <= 0.02


def test_a_week_explains_days_of_its_own():
    """Quiet weekends are no fault when the feed declares a week, whose profile foretells better."""
    x, start = feed("ar6", 12, 300, 1, strength=0.0, history=CYCLES + 5)
    steps = np.arange(x.shape[1])
    x += 4 * SHAPE[steps % DAY] * np.where(steps // DAY % 7 < 5, 1.0, 0.3)
    both = look(MEASURE, x, start, LIKE, 0.01, {"day": DAY, "week": 7 * DAY}, season="day")
    assert np.nanmean(p_values(both) <= 0.01) <= 0.03
    assert (both.undecided < 0).mean() > 0.95


def test_a_broken_day_of_history_changes_nothing():
    """One day of history stuck at a far-off value moves the amplitude by less than a tenth of its error."""
    x, start = feed("ar6", 13, 100, 7, strength=1.5)
    before = look(MEASURE, x, start, LIKE, 0.01, LENGTHS, season="day")
    x[:, 5 * DAY : 6 * DAY] = 50.0
    after = look(MEASURE, x, start, LIKE, 0.01, LENGTHS, season="day")
    moved = np.abs(after.observed - before.observed) / before.upper.standard_error
    assert np.median(moved) < 0.1


def test_closed_days_neither_teach_nor_are_judged():
    """A closed day of history and of the window is as if its rows were missing."""
    x, start = feed("ar6", 14, 5, 3, strength=2.0)
    gone = x.copy()
    for day in (4, CYCLES + 1):
        gone[:, day * DAY : (day + 1) * DAY] = np.nan
    shut = panel(x, start, LENGTHS)
    for day in (4, CYCLES + 1):
        shut.axis.closed[day * DAY : (day + 1) * DAY] = True
    question = Question(MEASURE.Fields(season="day"), LIKE, 0.01, LENGTHS)
    np.testing.assert_allclose(
        MEASURE.run(shut, question).observed, MEASURE.run(panel(gone, start, LENGTHS), question).observed, rtol=1e-12
    )


def test_many_series_are_learned_as_each_alone():
    """What is learned block by block is what each series teaches by itself, whichever season it chooses."""
    x, start = feed("ar6", 31, 400, 2, strength=2.0)
    steps = np.arange(x.shape[1])
    x[::2] += 3 * SHAPE[steps % DAY] * (steps // DAY % 7 < 5)
    cycles = [Cycle(DAY, steps % DAY), Cycle(7 * DAY, steps % (7 * DAY))]
    whole = learn_season(x[:, :start], cycles, x.shape[1] - start)
    assert set(whole.choice) == {0, 1}
    for s in (0, 1, 257, 398):
        alone = learn_season(x[s : s + 1, :start], cycles, x.shape[1] - start)
        for name in ("choice", "length", "count", "variance", "spread", "taught", "evolving", "scatter", "windows"):
            np.testing.assert_allclose(getattr(whole, name)[s], getattr(alone, name)[0], rtol=1e-9)
        np.testing.assert_allclose(whole.profile(0, 200)[s], alone.profile(0, 200)[0], rtol=1e-9)


def test_the_unit_does_not_matter():
    """Amplitude and p-value are the same from 1e-200 to 1e200, and on a far-off level."""
    x, start = feed("ar6", 15, 5, 4)
    plain = look(MEASURE, x, start, LIKE, 0.01, LENGTHS, season="day")
    for other in (x * 1e200, x * 1e-200, x + 1e6):
        seen = look(MEASURE, other, start, LIKE, 0.01, LENGTHS, season="day")
        np.testing.assert_allclose(seen.observed, plain.observed, rtol=1e-6)


def test_a_weak_season_passes_nothing_but_may_fail():
    """Where a season that is gone could not be seen, a pass is undecided and says so; a fail stands."""
    x, start = feed("ar6", 16, 400, 1, strength=0.5)
    told, seen = outcomes(x, start, LIKE)
    assert set(told) <= {UNDECIDED, FAIL}
    assert any("weak against its noise" in text for text in seen.reasons)
    x[:, start:] += 8 * SHAPE
    assert (outcomes(x, start, LIKE)[0] == FAIL).all()


@pytest.mark.parametrize(
    ("start", "days", "words"),
    [(0, 6, "no history"), (3, 6, "fewer than 4 cycles"), (10, 10.3, "fewer than 12 values")],
)
def test_too_little_history_or_window_is_undecided(start, days, words):
    """No history, three cycles of it, or seven rows to judge: undecided, with what is too small."""
    x, _ = feed("white", 17, 3, 1, history=20)
    told, seen = outcomes(x[:, : int(days * DAY)], start * DAY, LIKE)
    assert (told == UNDECIDED).all()
    assert words in reason(seen)


def test_a_history_without_a_season_is_undecided():
    """Noise has no profile to compare with."""
    x, start = feed("ar6", 18, 50, 4, strength=0.0)
    told, seen = outcomes(x, start, LIKE)
    assert (told == UNDECIDED).mean() > 0.95
    assert "no season" in reason(seen)


def test_a_bound_is_on_the_autocorrelation_about_a_line():
    """With a number, r at the season after a straight line is observed, at the multiple asked for."""
    x, _ = feed("white", 19, 4, 14, history=0)
    x += 0.05 * np.arange(x.shape[1])
    for multiple in (1, 2):
        seen = look(MEASURE, x, 0, Stays("above", low=0.2), 0.01, LENGTHS, season="day", multiple=multiple)
        np.testing.assert_allclose(seen.observed[:, 0], autocorrelation(detrended(x), DAY * multiple), rtol=1e-9)
        assert seen.lags == (DAY * multiple,)


def seasonal_autoregression(seed, series, cycles, persistence):
    """x_t = P x_{t-24} + e_t, whose autocorrelation at the season is P."""
    return autoregressive(seed, series, cycles * DAY, [0.0] * (DAY - 1) + [persistence])


@pytest.mark.parametrize("cycles", [7, 14])
def test_a_season_at_the_bound_keeps_the_risk(cycles):
    """A seasonal autoregression with ρ at the bound fails 'below' and 'above' no more often than the risk."""
    x = seasonal_autoregression(20, 400, cycles, 0.3)
    for stays in (Stays("below", high=0.3), Stays("above", low=0.3)):
        p = p_values(look(MEASURE, x, 0, stays, 0.01, LENGTHS, season="day"))
        for risk in RISKS:
            assert np.mean(p <= risk) <= risk + 4 * np.sqrt(risk / 400)


def test_a_season_far_from_the_bound_is_found():
    """Fourteen days: no season fails 'above .3', a strong one fails 'below .3', nearly always at .01."""
    none = seasonal_autoregression(21, 200, 14, 0.0)
    strong = seasonal_autoregression(22, 200, 14, 0.8)
    assert np.mean(outcomes(none, 0, Stays("above", low=0.3))[0] == FAIL) > 0.95
    assert np.mean(outcomes(strong, 0, Stays("below", high=0.3))[0] == FAIL) > 0.95


def test_a_strong_fixed_cycle_is_no_wandering_series():
    """A cycle with nine tenths of the variance passes 'above .3'; a random walk is told to be differenced."""
    x, _ = feed("ar6", 23, 50, 14, strength=2.5, history=0)
    assert (outcomes(x, 0, Stays("above", low=0.3))[0] == PASS).all()
    walk = np.cumsum(np.random.default_rng(24).normal(size=(50, 60 * DAY)), axis=1)
    told, seen = outcomes(walk, 0, Stays("above", low=0.3))
    assert (told == UNDECIDED).mean() > 0.8
    assert any("difference first" in text for text in seen.reasons)


@pytest.mark.parametrize(
    ("bound", "days", "enough"), [(0.3, 3, False), (0.3, 4, True), (0.7, 6, False), (0.7, 7, True)]
)
def test_the_least_size_for_a_bound(bound, days, enough):
    """Four cycles up to .6, seven above."""
    x, _ = feed("white", 25, 5, days, history=0)
    _, seen = outcomes(x, 0, Stays("above", low=bound))
    assert any("values in the window" in text for text in seen.reasons) is not enough


def test_a_limit_out_of_reach_is_undecided():
    """With four days and a bound near the top, no correlation could reach the limit."""
    x, _ = feed("white", 26, 5, 7, history=0)
    told, seen = outcomes(x, 0, Stays("below", high=0.95), risk=0.001)
    assert (told == UNDECIDED).all()
    assert "reach" in reason(seen)


def test_presence_is_certified_or_not():
    """A season passes, noise fails, three cycles are undecided."""
    x, _ = feed("ar6", 27, 100, 14, strength=1.5, history=0)
    assert (outcomes(x, 0, PRESENT)[0] == PASS).all()
    bare, _ = feed("ar6", 28, 100, 14, strength=0.0, history=0)
    assert np.mean(outcomes(bare, 0, PRESENT)[0] == FAIL) > 0.95
    told, seen = outcomes(x[:, : 3 * DAY], 0, PRESENT)
    assert (told == UNDECIDED).all()
    assert "4 cycles" in reason(seen)


def test_absence_is_not_told_where_presence_could_not_be_seen():
    """Four cycles cannot certify at .0001, so that noise is undecided there and an exact cycle still passes."""
    bare, _ = feed("white", 29, 20, 4, strength=0.0, history=0)
    assert (outcomes(bare, 0, PRESENT, risk=1e-4)[0] == UNDECIDED).all()
    exact = np.tile(SHAPE, 4)[None, :]
    assert outcomes(exact, 0, PRESENT, risk=1e-4)[0][0] == PASS


def test_a_season_is_named_or_counted():
    """The name, its length in steps, and an unknown name."""
    x, start = feed("ar6", 30, 2, 4, strength=2.0)
    name, steps = (look(MEASURE, x, start, LIKE, 0.01, LENGTHS, season=season) for season in ("day", 24))
    np.testing.assert_array_equal(name.observed, steps.observed)
    assert (name.season, steps.season) == ("day", "24")
    with pytest.raises(UsageError, match="Did you mean day"):
        look(MEASURE, x, start, LIKE, 0.01, LENGTHS, season="dya")
