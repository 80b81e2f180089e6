"""Values that stick: exact evidence, and the laws of a batch's share and longest run."""

from dataclasses import replace

import numpy as np
import pytest
from clusters import markov
from panels import clock_of, panel_of
from processes import agrees, autoregressive, look, p_values
from reference_values import closed, series, told
from scipy import stats

from sercheck.measure import Question, Stays
from sercheck.measures.repeats import Repeats
from sercheck.serial.recurrence import beta_binomial_share, spread_of_counts
from sercheck.serial.repeats import (
    equal_share,
    equal_to_earlier,
    longest_equal_run,
    midpoint_share,
    midpoints,
    odd_minus_even,
    resting_value,
    rise_share,
    rounding,
    runs_test,
)
from sercheck.serial.runs import chain_runs, longest_run, past_runs, run_lengths

NAN = np.nan
STUCK = np.array([4.0, 4.0, 4.0, 1.0, 2.0, NAN, 2.0, 2.0, 0.0])


def test_rows_equal_to_an_earlier_one():
    """A row is marked when it equals the row so many steps before; a missing one on either side says nothing."""
    np.testing.assert_array_equal(equal_to_earlier(STUCK), [[NAN, 1, 1, 0, 0, NAN, NAN, 1, 0]])
    np.testing.assert_array_equal(equal_to_earlier(STUCK, 2)[0, :4], [NAN, NAN, 1, 0])
    assert equal_share(STUCK)[0] == 0.5


def test_longest_run_of_equal_values():
    """The longest run counts values; a missing value breaks it, and without values there is none."""
    np.testing.assert_array_equal(longest_equal_run([STUCK, np.arange(9.0), np.full(9, NAN)]), [3, 1, NAN])
    np.testing.assert_array_equal(run_lengths(equal_to_earlier(STUCK)), [[0, 1, 2, 0, 0, 0, 0, 1, 0]])


def test_runs_against_a_plain_loop():
    """Run lengths equal those counted one row at a time."""
    rng = np.random.default_rng(1)
    marks = np.where(rng.random((20, 60)) < 0.2, NAN, rng.random((20, 60)) < 0.6)
    for row, lengths, longest in zip(marks, run_lengths(marks), longest_run(marks), strict=True):
        count, best = 0, 0
        for mark, length in zip(row, lengths, strict=True):
            count = count + 1 if mark == 1 else 0
            best = max(best, count)
            assert length == count
        assert longest == best


def test_every_second_value_interpolated_shows_as_half_midpoints():
    """A line through every second value is seen at every second row, rounded or not; noise shows hardly any."""
    x = np.random.default_rng(2).normal(20, 3, size=(4, 201))
    x[1] = np.round(x[1], 2)
    filled = x.copy()
    filled[:, 1::2] = (x[:, :-1:2] + x[:, 2::2]) / 2
    filled[1] = np.round(filled[1], 2)
    np.testing.assert_allclose(midpoint_share(filled), 0.5, atol=0.03)
    assert midpoint_share(x).max() < 0.03


def test_midpoints_leave_out_constants_and_missing_neighbours():
    """Three equal values are no line, and a missing neighbour says nothing."""
    np.testing.assert_array_equal(midpoints([1.0, 1, 1, 3, 5, NAN, 7]), [[NAN, 0, 0, 1, NAN, NAN, NAN]])


def test_rounding_of_a_series():
    """The decimal step that a series is rounded to; none for values of full length."""
    x = np.random.default_rng(3).normal(1000, 30, size=50)
    np.testing.assert_array_equal(rounding([np.round(x), np.round(x, 1), np.round(x, 3), x]), [1.0, 0.1, 0.001, 0.0])


def test_rises_of_a_sorted_series():
    """A sorted series rises at every step, noise at about half of them."""
    x = np.random.default_rng(4).normal(size=(1, 500))
    assert rise_share(np.sort(x, axis=1))[0] == 1
    assert rise_share(x)[0] == pytest.approx(0.5, abs=0.08)


def test_two_sources_that_take_turns():
    """The odd rows' mean above the even ones' is told whatever cycle or trend lies beneath."""
    t = np.arange(168.0)
    beneath = 5 * np.sin(2 * np.pi * t / 24) + 0.3 * t
    assert odd_minus_even(beneath)[0] == pytest.approx(0.0, abs=0.05)
    assert odd_minus_even(beneath + 4 * (t % 2))[0] == pytest.approx(4.0, abs=0.05)


def test_resting_value():
    """Zero at night is a resting value; a common value inside the range, or a rare end, is not."""
    rng = np.random.default_rng(5)
    night = np.where(np.arange(480) % 24 < 8, 0.0, rng.normal(9, 1, 480))
    inside = np.where(np.arange(480) % 24 < 8, 9.0, rng.normal(9, 1, 480))
    top = np.where(night == 0, 50.0, night)
    rare = np.where(np.arange(480) < 10, 0.0, rng.normal(9, 1, 480))
    np.testing.assert_array_equal(resting_value([night, inside, top, rare, np.full(480, NAN)]), [0, NAN, 50, NAN, NAN])


def test_runs_test_against_published_moments():
    """Runs, mean, variance and p-value are those of the closed forms (Wald and Wolfowitz 1940)."""
    for row in closed("runs_test"):
        n1, n2, runs = row["n1"], row["n2"], row["runs"]
        first = [1] * (n1 - (runs + 1) // 2 + 1)
        rest = [mark for _ in range(runs // 2) for mark in (0, 1)][: runs - 1]
        spare = n2 - rest.count(0)
        at = rest.index(0)
        marks = first + rest[:at] + [0] * (spare + 1) + rest[at + 1 :]
        got = [float(part[0]) for part in runs_test(marks)]
        np.testing.assert_allclose(got, [runs, row["mean"], row["variance"], row["p_two_sided"]], rtol=1e-12)


def test_runs_test_against_statsmodels():
    """On the open series the p-value equals that of statsmodels' runs test about the mean."""
    compared = 0
    for name, _, (_, p) in told("sm_runs_test_mean_z_p"):
        x = series(name)
        if not np.isnan(x).any():
            assert runs_test(x >= x.mean())[3][0] == pytest.approx(p, rel=1e-9, abs=1e-300)
            compared += 1
    assert compared >= 10


def test_beta_binomial_tail_against_scipy():
    """The p-value is scipy's beta-binomial survival function, and the limit its first count within the risk."""
    rng = np.random.default_rng(6)
    past, batch = markov(rng, 30, 1680, 0.15, 3), markov(rng, 30, 24, 0.15, 3)
    law = beta_binomial_share(past, batch, 0.8)
    a, b = (law.rate * law.mixing)[:, 0], ((1 - law.rate) * law.mixing)[:, 0]
    wanted = stats.betabinom.sf(law.hits[:, 0] - 1, 24, a, b)
    np.testing.assert_allclose(law.p_value("upper")[:, 0], wanted, rtol=1e-9)
    hits = law.limit_hits(np.full((30, 1), 0.01))[:, 0]
    assert np.all(stats.betabinom.sf(hits - 1, 24, a, b) <= 0.01)
    assert np.all(stats.betabinom.sf(hits - 2, 24, a, b) > 0.01)


def test_days_that_differ_widen_the_law():
    """Where all repeats come on some days the counts spread more than binomial; where they are even they do not."""
    rng = np.random.default_rng(7)
    days = rng.random((1, 70, 1)) < 0.2
    uneven = (days & (rng.random((1, 70, 24)) < 0.5)).reshape(1, -1).astype(float)
    even = (rng.random((1, 1680)) < 0.1).astype(float)
    assert spread_of_counts(uneven, 24)[0] > 5
    assert spread_of_counts(even, 24)[0] < 1.6
    assert spread_of_counts(even[:, : 24 * 20], 24)[0] == 4.0


def test_chain_law_against_simulated_chains():
    """The chance told of a run in a healthy day is that of simulated chains to 2 times it (runs meet the day's end)."""
    rng = np.random.default_rng(8)
    past, days = markov(rng, 1, 200_000, 0.1, 2), markov(rng, 40_000, 24, 0.1, 2)
    learned = chain_runs(past, days[:1])
    enters, stays = (np.full((1, 24), np.mean(chances)) for chances in (learned.enters, learned.stays))
    law = replace(learned, enters=enters, stays=stays, first=enters[:, 0])
    seen = longest_run(days)
    for marks in (3, 5, 7):
        told_p = law.tail(np.array([[float(marks)]]))[0, 0]
        assert told_p == pytest.approx(1 - np.exp(-24 * enters[0, 0] * stays[0, 0] ** (marks - 1)), rel=1e-9)
        assert 0.9 * np.mean(seen >= marks) < told_p < 2 * np.mean(seen >= marks)


def still_at_night(rng, series_, days):
    """Marks of chains whose rows repeat often in the first eight hours of a day and seldom in the others."""
    enters, stays = (np.where(np.arange(24) < 8, at_night, by_day) for at_night, by_day in ((0.4, 0.05), (0.7, 0.1)))
    marks = np.zeros((series_, 24 * days))
    for t in range(1, 24 * days):
        marks[:, t] = rng.random(series_) < np.where(marks[:, t - 1] == 1, stays[t % 24], enters[t % 24])
    return marks


def test_runs_are_judged_by_the_hour_at_their_risk():
    """Where nights stand still and days do not, a run by day is the odder one, and healthy days keep the risk."""
    marks = still_at_night(np.random.default_rng(5), 4000, 91)
    past, day = marks[:, :-24], marks[:, -24:]
    p = chain_runs(past, day).p_value("upper")[:, 0]
    assert np.mean(p <= 0.05) <= 0.06
    assert np.mean(p <= 0.01) <= 0.013
    assert np.mean(p <= 0.001) <= 0.002
    chance = {}
    for first in (0, 14):
        stuck = np.zeros((200, 24))
        stuck[:, first : first + 7] = 1
        law = chain_runs(past[:200], stuck)
        chance[first] = law.p_value("upper")[:, 0]
        np.testing.assert_array_equal(law.longest, 7.0)
    assert (chance[14] < chance[0]).all()
    assert np.median(chance[14]) < np.median(chance[0]) / 4


def test_a_run_that_goes_on_from_yesterday_is_no_new_one():
    """The first mark of a batch whose last row before was marked counts as one that stays, not as one that enters."""
    past = still_at_night(np.random.default_rng(6), 50, 90)
    day = np.zeros((50, 24))
    day[:, :3] = 1
    after, alone = past.copy(), past.copy()
    after[:, -1], alone[:, -1] = 1, 0
    p_after, p_alone = (chain_runs(history, day).p_value("upper") for history in (after, alone))
    assert (p_after > p_alone).all()


def test_law_of_runs_in_a_stationary_history():
    """Beyond the longest common length runs follow the geometric tail with its rate unknown."""
    past = np.zeros((1, 1000))
    past[0, 5:200:15] = 1  # 13 runs of one
    past[0, 300:303] = 1  # one of three
    law = past_runs(past, np.zeros((1, 24)))
    K, e, u, L = 14.0, 2.0, 1.0, 5.0
    from scipy.special import beta

    expected = K * beta(e + 1 + L - u, K + 0.5) / beta(e + 1, K + 0.5)
    assert law.tail(np.array([[L]]))[0, 0] == pytest.approx(1 - np.exp(-24 * expected / 1000), rel=1e-12)
    assert law.tail(np.array([[1.0]]))[0, 0] == pytest.approx(1 - np.exp(-24 * 14 / 1000), rel=1e-12)


# -- the measure


def readings(seed, series_, steps, step=0.5, phi=0.8):
    """Autoregressive readings rounded to a step, so that neighbours are equal by chance."""
    return np.round(autoregressive(seed, series_, steps, phi) / step) * step


@pytest.mark.parametrize("what", ["run", "share"])
@pytest.mark.parametrize("days", [30, 70])
@pytest.mark.parametrize("step", [0.02, 0.5])
def test_healthy_rounded_readings_keep_the_risk(what, days, step):
    """Ties of healthy rounded readings fail no more than 1.2 times as often as asked at .05, 1.6 times at .01."""
    seen = look(Repeats(), readings(9, 2000, 24 * (days + 1), step), 24 * days, look=what)
    p = p_values(seen)
    assert np.mean(p <= 0.05) <= 0.06
    assert np.mean(p <= 0.01) <= 0.016


@pytest.mark.parametrize("what", ["run", "share"])
@pytest.mark.parametrize("days", [9, 30, 70])
def test_limit_and_p_value_agree(what, days):
    """The observation is at the limit or beyond exactly when the p-value is within the risk."""
    agrees(look(Repeats(), readings(10, 300, 24 * (days + 1)), 24 * days, look=what))


def filled_forward(x, start, share, seed):
    """Rows of the window replaced by the row before them, at random places."""
    x = x.copy()
    hit = np.random.default_rng(seed).random((len(x), x.shape[1] - start)) < share
    for step in range(hit.shape[1]):
        x[:, start + step] = np.where(hit[:, step], x[:, start + step - 1], x[:, start + step])
    return x


def found(x, start, what, risk):
    """Share of series that fail at the risk."""
    return np.mean(p_values(look(Repeats(), x, start, risk=risk, look=what)) <= risk)


def test_filling_and_sticking_are_found():
    """In readings of two decimals a day filled forward by 30 % and one stuck for six hours are found at 1/720."""
    start = 24 * 70
    x = readings(11, 400, start + 24, 0.01)
    stuck = x.copy()
    stuck[:, start + 9 : start + 15] = stuck[:, start + 8 : start + 9]
    assert found(filled_forward(x, start, 0.3, 12), start, "share", 1 / 720) >= 0.95
    assert found(filled_forward(x, start, 0.1, 12), start, "share", 1 / 720) >= 0.25
    assert found(stuck, start, "run", 1 / 720) >= 0.95
    assert found(x, start, "run", 1 / 720) <= 0.01


def test_sticking_is_found_in_a_short_history_without_any_repeat():
    """A month that never repeated a value tells that six stuck hours are no chance, and one tie may be."""
    start = 24 * 30
    x = np.random.default_rng(20).normal(size=(2, start + 24))
    x[0, start + 9 : start + 15], x[1, start + 9] = x[0, start + 8], x[1, start + 8]
    p = p_values(look(Repeats(), x, start, look="run"))
    assert p[0] <= 1 / 720
    assert p[1] == pytest.approx(1 - np.exp(-24 * 0.5 / (start - 1)), rel=1e-12)


def test_coarse_rounding_hides_filling_and_says_so():
    """The coarser the rounding the longer the shortest run that would be seen."""
    limits = []
    for step in (0.01, 0.5, 2.0):
        law = look(Repeats(), readings(13, 50, 24 * 71, step), 24 * 70, look="run").upper
        limits.append(np.nanmedian(law.limit("upper", np.full((50, 1), 1 / 720))))
    assert limits[0] < limits[1] < limits[2]


def test_literal_bounds_are_exact():
    """Against a number the count itself decides: a run of six is not below six, one of five is."""
    x = np.random.default_rng(14).normal(size=(2, 48))
    x[0, 30:36], x[1, 30:35] = 7.0, 7.0
    seen = look(Repeats(), x, 24, Stays("below", high=6), look="run")
    np.testing.assert_array_equal(seen.observed[:, 0], [6, 5])
    np.testing.assert_array_equal(seen.upper.p_value("upper")[:, 0], [0, 1])
    assert seen.exact
    assert seen.integer
    share = look(Repeats(), x, 24, Stays("below", high=0.2), look="share")
    np.testing.assert_allclose(share.observed[:, 0], [5 / 24, 4 / 24])
    np.testing.assert_array_equal(share.upper.p_value("upper")[:, 0], [0, 1])


def test_the_row_before_the_window_starts_its_first_run():
    """A value carried over from history into the window repeats there."""
    x = np.random.default_rng(15).normal(size=(1, 48))
    x[0, 20:27] = 3.0  # three rows of the window equal the last of history
    seen = look(Repeats(), x, 24, Stays("below", high=5), look="run")
    assert seen.observed[0, 0] == 4


def test_zero_at_night_is_not_counted():
    """Nights at zero do not hide a stuck day, and a window of rest alone is undecided."""
    rng = np.random.default_rng(16)
    x = np.round(rng.normal(30, 5, size=(3, 24 * 71)), 2)
    x[:, np.arange(24 * 71) % 24 < 8] = 0.0
    x[1, -10:-4] = x[1, -11]
    x[2, -24:] = 0.0
    seen = look(Repeats(), x, 24 * 70, look="run", risk=0.001)
    p = p_values(seen)
    assert p[0] > 0.5
    assert p[1] < 0.001
    assert "resting value" in seen.reasons[seen.undecided[2, 0]]


@pytest.mark.parametrize(("start", "reason"), [(0, "no history"), (24 * 7, "7 stretches")])
def test_too_little_history_is_undecided(start, reason):
    """Without 8 stretches of history nothing is said, and the reason tells how many there are."""
    x = np.random.default_rng(17).normal(size=(2, start + 24))
    seen = look(Repeats(), x, start, look="share")
    assert all(reason in seen.reasons[why] for why in seen.undecided[:, 0])
    np.testing.assert_array_equal(seen.observed[:, 0], [0, 0])


def test_a_clock_changes_nothing():
    """The measure reads the values only."""
    panel = panel_of(np.random.default_rng(18).normal(size=(2, 24 * 40)), 24 * 39)
    question = Question(Repeats.Fields(), Stays("like_history"), 0.01, {}, clock_of(panel))
    seen = Repeats().run(panel, question)
    assert (seen.undecided < 0).all()


@pytest.mark.calibration
@pytest.mark.parametrize("what", ["run", "share"])
@pytest.mark.parametrize("days", [12, 30, 70, 90])
@pytest.mark.parametrize("step", [0.02, 0.5, 1.0])
def test_sizes_at_small_risks(what, days, step):
    """Healthy ties keep .05, .01 and .001 within 1.2, 1.6 and 2.6 times, on 20,000 batches."""
    sizes = np.zeros(3)
    risks = np.array([0.05, 0.01, 0.001])
    for block in range(5):
        p = p_values(look(Repeats(), readings([19, block], 4000, 24 * (days + 1), step), 24 * days, look=what))
        sizes += [np.mean(p <= risk) for risk in risks]
    print(what, days, step, (sizes / 5).round(4))
    assert np.all(sizes / 5 <= risks * [1.2, 1.6, 2.6])
