"""The measure ``season_phase``: has the clock slipped."""

from __future__ import annotations

import naive.season as slow
import numpy as np
import pytest
from processes import LIKE, agrees, look, p_values
from seasons import CYCLES, DAY, LENGTHS, RISKS, SHAPE, feed, noise, rates

from sercheck.errors import UsageError
from sercheck.judge import FAIL, PASS, UNDECIDED, Seen, judge
from sercheck.measure import Stays
from sercheck.measures import get
from sercheck.rulebook.compiled import Rule
from sercheck.serial.matched_filter import Cycle, learn_season
from sercheck.serial.phase import phase_slip

MEASURE = get("season_phase")
STRONG = 1.6
"""Strength at which a slip of one step in AR(1) .6 noise shows in seven days and seldom in two."""


def outcomes(x, start, stays=LIKE, risk=0.01, **fields):
    """Outcomes of the judge, each series by itself."""
    fields = {"season": "day", **fields}
    seen = look(MEASURE, x, start, stays, risk, LENGTHS, **fields)
    rule = Rule("r", "season_phase", MEASURE.Fields(**fields), stays, ("kwh",), false_alarm=risk, across=("series",))
    keys = np.arange(len(seen.observed)).astype(str)
    return judge(rule, [Seen(0, keys, "kwh", seen, 0, 0)])[0].outcome[:, 0], seen


def reason(seen, place=0):
    """The reason of one series."""
    return seen.reasons[seen.undecided[place, 0]]


@pytest.mark.parametrize("fault", ["healthy", "late"])
def test_the_slip_is_that_of_a_plain_regression(fault):
    """Slip and error equal least squares on hand-whitened values; the whole batch is one of the looks."""
    x, start = feed("ar6", 1, 8, 1, strength=6.0, fault=fault)
    x[:, start + 5] = np.nan
    phase = np.arange(x.shape[1]) % DAY
    model = learn_season(x[:, :start], [Cycle(DAY, phase)], x.shape[1] - start)
    seen = phase_slip(x[:, start:], model, start, 1, 0.05)
    for s in range(8):
        shapes = [model.means[0][s][(phase[start:] + shift) % DAY] for shift in (0, 1, -1)]
        value, error, df = slow.slip(
            x[s, start:], *shapes, model.noise.coefficients[s, : model.noise.order[s]], 1 + DAY / model.taught[s]
        )
        told = [seen.value[s], seen.scale[s], seen.df[s]]
        np.testing.assert_allclose(told, [value, error, df], rtol=1e-7, atol=1e-12)


@pytest.mark.parametrize("kind", ["white", "ar6", "ar9", "t3"])
def test_a_clock_that_runs_well_keeps_the_risk(kind):
    """In seven days no slip is told more often than the risk."""
    fails, _ = rates("season_phase", kind, 2, 1000, 7, strength=STRONG)
    assert (fails <= np.array(RISKS) + 4 * np.sqrt(np.array(RISKS) / 1000)).all()


def test_a_slip_of_one_step_is_found_and_measured():
    """Seven days, one hour late: found at .01 with probability .7 or more, about 1 step, positive is late."""
    fails, _ = rates("season_phase", "ar6", 3, 1000, 7, strength=1.1, fault="late")
    assert fails[1] >= 0.70
    x, start = feed("ar6", 4, 400, 7, strength=3.0, fault="late")
    seen = look(MEASURE, x, start, LIKE, 0.01, LENGTHS, season="day")
    assert abs(np.median(seen.observed) - 1) < 0.1
    early = np.concatenate([x[:, :start], noise("ar6", 5, 400, 7 * DAY) + 3 * np.tile(np.roll(SHAPE, -1), 7)], axis=1)
    assert abs(np.median(look(MEASURE, early, start, LIKE, 0.01, LENGTHS, season="day").observed) + 1) < 0.1


def test_a_slip_in_mid_window_is_found_in_its_later_half():
    """A clock that slips in the middle of eight days is found almost as surely as one of four days."""
    half = rates("season_phase", "ar6", 6, 500, 8, strength=4.0, fault="late from the middle")[0]
    assert half[1] > 0.95


def test_in_one_or_two_days_a_small_slip_cannot_be_seen():
    """Moderate noise and one or two cycles: undecided, for healthy and slipped windows alike."""
    for cycles in (1, 2):
        for fault in ("healthy", "late"):
            x, start = feed("ar6", 7, 100, cycles, strength=1.3, fault=fault)
            told, seen = outcomes(x, start)
            assert (told == UNDECIDED).all()
            assert "could not be seen" in reason(seen)


@pytest.mark.calibration
@pytest.mark.parametrize("kind", ["white", "ar6", "ar9", "t3"])
@pytest.mark.parametrize("cycles", [2, 4, 7])
def test_calibration_of_the_slip(kind, cycles):
    """Over 20,000 series: .05 at most .065, .01 at most .017, .001 at most .003; the power is printed beside."""
    fails, silent = rates("season_phase", kind, 8, 2000, cycles, blocks=10, strength=STRONG)
    power = [
        np.round(rates("season_phase", kind, 8, 2000, cycles, strength=STRONG, fault=fault)[0], 2).tolist()
        for fault in ("late", "late from the middle")
    ]
    print(f"slip, {kind}, {cycles} cycles: healthy {fails}, undecided {silent:.3f}, late/from the middle {power}")
    assert (fails <= [0.065, 0.017, 0.003]).all()


def test_p_value_and_limit_agree_for_every_bound():
    """A slip is beyond the limit exactly where its p-value is within the risk."""
    x, start = feed("ar6", 9, 60, 7, strength=STRONG)
    x[:30, start:] = feed("ar6", 10, 30, 7, strength=STRONG, fault="late")[0][:, start:]
    for stays in (LIKE, Stays("below", high=0.5), Stays("above", low=-0.5), Stays("between", -0.5, 0.5)):
        agrees(look(MEASURE, x, start, stays, 0.01, LENGTHS, season="day"))


def test_a_bound_in_steps_is_kept_or_broken():
    """Three steps late breaks 'below 1' and keeps 'below 5'."""
    x, start = feed("white", 11, 20, 7, strength=4.0)
    x[:, start:] = noise("white", 12, 20, 7 * DAY) + 4 * np.tile(np.roll(SHAPE, 3), 7)
    assert (outcomes(x, start, Stays("below", high=1.0), reach=4)[0] == FAIL).all()
    assert (outcomes(x, start, Stays("below", high=5.0), reach=4)[0] == PASS).all()


def test_a_wider_search_finds_a_larger_slip():
    """Three steps late are measured as three when three are searched."""
    x, start = feed("white", 13, 50, 7, strength=3.0)
    x[:, start:] = noise("white", 14, 50, 7 * DAY) + 3 * np.tile(np.roll(SHAPE, 3), 7)
    told, seen = outcomes(x, start, reach=3)
    assert (told == FAIL).all()
    assert abs(np.median(seen.observed) - 3) < 0.5


def test_a_change_of_strength_is_no_slip():
    """A halved season has no slip more often than the risk."""
    fails, _ = rates("season_phase", "ar6", 15, 1000, 7, strength=3.0, fault="halved")
    assert (fails <= np.array(RISKS) + 4 * np.sqrt(np.array(RISKS) / 1000)).all()


def test_a_season_that_is_gone_has_no_phase():
    """Noise or a constant in place of the season is undecided, not 'no slip'."""
    x, start = feed("white", 16, 100, 7, strength=STRONG, fault="gone")
    told, seen = outcomes(x, start)
    assert (told == UNDECIDED).mean() > 0.9
    assert any("does not hold the season" in text for text in seen.reasons)
    x[:, start:] = 7.0
    assert (outcomes(x, start)[0] == UNDECIDED).all()


def test_an_evolving_season_is_undecided():
    """A slip cannot be told from a shape that wanders."""
    steps = DAY * (CYCLES + 7)
    x = np.random.default_rng(17).normal(size=(20, steps))
    for t in range(DAY, steps):
        x[:, t] += 0.8 * x[:, t - DAY]
    told, seen = outcomes(x + 5 * SHAPE[np.arange(steps) % DAY], CYCLES * DAY)
    assert (told == UNDECIDED).all()
    assert "evolves" in reason(seen)


def test_a_sinusoid_without_noise_is_measured_exactly():
    """A pure cycle, whose symmetric term repeats the profile, has slip 0, and one step late has slip 1 and fails."""
    t = np.arange(DAY * 30)
    x = np.stack([np.sin(2 * np.pi * t / DAY)] * 2)
    start = 23 * DAY
    x[1, start:] = np.sin(2 * np.pi * (t[start:] - 1) / DAY)
    told, seen = outcomes(x, start)
    np.testing.assert_array_equal(told, [PASS, FAIL])
    np.testing.assert_allclose(seen.observed[:, 0], [0, 1], atol=1e-6)


@pytest.mark.parametrize(
    ("start", "days", "words"),
    [(0, 6, "no history"), (3, 6, "fewer than 4 cycles"), (10, 10.3, "fewer than 12 values")],
)
def test_too_little_history_or_window_is_undecided(start, days, words):
    """No history, three cycles of it, or seven rows to judge: undecided, with what is too small."""
    x, _ = feed("white", 18, 3, 1, history=20)
    told, seen = outcomes(x[:, : int(days * DAY)], start * DAY)
    assert (told == UNDECIDED).all()
    assert words in reason(seen)


def test_half_a_cycle_cannot_be_searched():
    """Half a cycle forward is half a cycle back: such a reach is refused."""
    x, start = feed("white", 19, 1, 2)
    with pytest.raises(UsageError, match="less than half"):
        outcomes(x, start, reach=12)


def test_series_without_a_decision_leave_the_others_alone():
    """A constant and an empty series beside a slipped one change nothing of it."""
    x, start = feed("white", 20, 1, 7, strength=3.0, fault="late")
    alone = look(MEASURE, x, start, LIKE, 0.01, LENGTHS, season="day")
    crowd = np.concatenate([x, np.full_like(x, 3.0), np.full_like(x, np.nan)])
    seen = look(MEASURE, crowd, start, LIKE, 0.01, LENGTHS, season="day")
    np.testing.assert_allclose([seen.observed[0, 0], p_values(seen)[0]], [alone.observed[0, 0], p_values(alone)[0]])
    assert (seen.undecided[1:] >= 0).all()
