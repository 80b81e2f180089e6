"""Stretches delivered before: exact, and with noise added."""

import numpy as np
import pytest
from naive.replay import seen_before as slow_seen_before
from processes import agrees, autoregressive, look, make, p_values
from scipy import stats

from sercheck.measure import Stays
from sercheck.measures.replay import Replay
from sercheck.serial.repeats import equal_to_earlier, share_of
from sercheck.serial.replay import LENGTHS, near_replay, seen_before


@pytest.mark.parametrize("length", [2, 3, 5])
@pytest.mark.parametrize("values", [2, 4, 30])
def test_rows_seen_before_as_the_slow_twin_tells_them(length, values):
    """The hashes find exactly the rows that comparing all stretches finds, with gaps, ties and constants."""
    rng = np.random.default_rng([length, values])
    x = rng.integers(0, values, size=(12, 70)).astype(float)
    x[rng.random(x.shape) < 0.05] = np.nan
    x[0, 50:62], x[1, 10:40] = x[0, 20:32], 3.0
    seen = seen_before(x, 50, length)
    for row, history, batch in zip(x, seen.history, seen.batch, strict=True):
        slow_history, slow_batch = slow_seen_before(row, 50, length)
        np.testing.assert_array_equal(history, slow_history)
        np.testing.assert_array_equal(batch, slow_batch)


def test_yesterday_again_is_seen_whole():
    """A day that repeats an earlier one is seen in all its rows, a new one in none."""
    x = np.random.default_rng(1).normal(size=(3, 240))
    x[0, -24:], x[1, -24:-12] = x[0, -48:-24], x[1, 40:52]
    np.testing.assert_allclose(share_of(seen_before(x, 216).batch), [1, 0.5, 0])


def test_constants_are_no_replay():
    """A stuck value, however often it was seen, takes no part."""
    x = np.random.default_rng(2).normal(size=(1, 100))
    x[0, 20:40], x[0, -24:] = 5.0, 5.0
    assert np.isnan(seen_before(x, 76).batch).all()


def test_a_repeated_pattern_does_not_overlap_itself():
    """A stretch that overlaps the judged one is not an earlier delivery."""
    x = np.arange(60.0)
    x[-4:] = [1.5, 2.5, 1.5, 2.5]
    assert share_of(seen_before(x, 56, 3).batch)[0] == 0
    x[-6:] = [1.5, 2.5, 1.5, 1.5, 2.5, 1.5]
    assert share_of(seen_before(x, 54, 3).batch)[0] == 0.5


def test_both_zeros_are_one_value():
    """Zero and minus zero are the same reading."""
    x = np.random.default_rng(3).normal(size=(1, 60))
    x[0, 10:13], x[0, -3:] = [0.0, 1.0, 2.0], [-0.0, 1.0, 2.0]
    assert np.nansum(seen_before(x, 40).batch) == 3


def test_coarse_values_are_compared_over_longer_stretches():
    """Where short stretches recur by chance, longer ones are compared, and a replay is still seen whole."""
    x = np.random.default_rng(4).integers(0, 4, size=(2, 2184)).astype(float)
    x[0, -24:] = x[0, 500:524]
    seen = seen_before(x, 2160)
    assert np.all(seen.length > LENGTHS[0])
    np.testing.assert_allclose(share_of(seen.batch), [1, 0], atol=0.3)
    assert np.all(share_of(seen.history) <= 0.02)


def test_a_stretch_has_at_least_two_values():
    """A length of one is refused."""
    with pytest.raises(ValueError, match="at least 2 values"):
        seen_before(np.arange(9.0), 6, 1)


@pytest.mark.parametrize("shape", [(0, 30), (2, 2), (2, 0)])
def test_too_short_series_say_nothing(shape):
    """Where no stretch fits, no row can be compared."""
    seen = seen_before(np.ones(shape), 0)
    assert np.isnan(seen.batch).all()
    assert seen.batch.shape == shape


def test_same_rows_as_a_day_ago():
    """Rows equal to those 24 steps before are all of a replayed day."""
    x = np.random.default_rng(5).normal(size=(1, 72))
    x[0, 48:] = x[0, 24:48]
    assert share_of(equal_to_earlier(x, 24)[:, 48:])[0] == 1


def test_near_replay_keeps_its_size():
    """On independent scores p ≤ .05 and ≤ .01 come about as often (the largest of many correlations, Bonferroni)."""
    p = near_replay(np.random.default_rng(6).normal(size=(3000, 700)), 24).p_value
    assert 0.03 <= np.mean(p <= 0.05) <= 0.06
    assert np.mean(p <= 0.01) <= 0.017


def test_near_replay_finds_a_noisy_copy():
    """An old day with a tenth of noise is found, and where it came from."""
    rng = np.random.default_rng(7)
    x = rng.normal(size=(200, 700))
    x[:, -24:] = x[:, 300:324] + 0.1 * rng.normal(size=(200, 24))
    x[:, 310] = np.nan
    near = near_replay(x, 24)
    assert np.mean(near.p_value < 0.001) >= 0.98
    assert np.all(near.steps_back[near.p_value < 0.001] == 700 - 24 - 300)


def test_near_replay_equals_numpy_correlations():
    """The best correlation and its p-value are those of comparing the stretches one by one over complete pairs."""
    x = np.random.default_rng(8).normal(size=90)
    x[70:] += 2 * x[10:30]
    x[[5, 40, 80]] = np.nan
    newest, found = x[-20:], []
    for at in range(90 - 2 * 20 + 1):
        both = ~np.isnan(x[at : at + 20]) & ~np.isnan(newest)
        r = np.corrcoef(x[at : at + 20][both], newest[both])[0, 1]
        found.append((stats.t.sf(r * np.sqrt((both.sum() - 2) / (1 - r * r)), both.sum() - 2), r, 70 - at))
    p, r, back = min(found)
    near = near_replay(x, 20)
    assert near.correlation[0] == pytest.approx(r, rel=1e-9)
    assert near.steps_back[0] == back
    assert near.p_value[0] == pytest.approx(p * len(found), rel=1e-7)


@pytest.mark.parametrize("length", [4, 60])
def test_near_replay_without_room_is_undecided(length):
    """Too short a stretch, or no earlier one, gives no p-value."""
    near = near_replay(np.random.default_rng(9).normal(size=(2, 100)), length)
    assert np.isnan(near.p_value).all()


# -- the measure


def readings(seed, series, steps, step):
    """Autoregressive readings rounded to a step."""
    return np.round(autoregressive(seed, series, steps, 0.8) / step) * step


@pytest.mark.parametrize("step", [0.01, 0.3, 1.0])
def test_healthy_readings_keep_the_risk(step):
    """Chance recurrences of rounded readings fail no more often than asked."""
    p = p_values(look(Replay(), readings(10, 1000, 24 * 71, step), 24 * 70))
    assert np.mean(p <= 0.05) <= 0.05 + 2 * np.sqrt(0.05 * 0.95 / 1000)
    assert np.mean(p <= 0.01) <= 0.01 + 2 * np.sqrt(0.01 * 0.99 / 1000)


@pytest.mark.parametrize("step", [0.01, 0.3, 1.0])
def test_an_old_day_is_found_however_coarse(step):
    """Yesterday again, or an old day, is found at 1/720 in fine and in coarse readings."""
    x = readings(11, 200, 24 * 71, step)
    x[:100, -24:], x[100:, -24:] = x[:100, -48:-24], x[100:, 500:524]
    assert np.mean(p_values(look(Replay(), x, 24 * 70)) <= 1 / 720) >= 0.97


@pytest.mark.parametrize("days", [9, 30, 70])
def test_limit_and_p_value_agree(days):
    """The observation is at the limit or beyond exactly when the p-value is within the risk."""
    x = make("counts", 12, 200, 24 * (days + 1))
    x[:50, -24:-12] = x[:50, -48:-36]
    agrees(look(Replay(), x, 24 * days))


def test_literal_bounds_are_exact():
    """Half a day delivered again is not below .5 and is below .6."""
    x = np.random.default_rng(13).normal(size=(1, 240))
    x[0, -24:-12] = x[0, 40:52]
    for bound, p in ((0.5, 0.0), (0.6, 1.0)):
        seen = look(Replay(), x, 216, Stays("below", high=bound))
        assert seen.observed[0, 0] == 0.5
        assert seen.upper.p_value("upper")[0, 0] == p


def test_without_history_a_pass_says_nothing():
    """Without history a stretch that comes twice within the window is a fact, but its absence is none."""
    x = np.random.default_rng(14).normal(size=(2, 48))
    x[0, 24:] = x[0, :24]
    seen = look(Replay(), x, 0, Stays("below", high=0.3))
    np.testing.assert_array_equal(seen.upper.p_value("upper")[:, 0], [0, 1])
    assert "no history" in seen.reasons[seen.unsure[1, 0]]


def test_a_feed_that_always_recurs_is_undecided():
    """Where history itself recurs all the time no replay can stand out, and the reason asks for a greater length."""
    x = np.tile([0.0, 1.0, 0.0, 2.0], 24 * 71 // 4)[None, :]
    seen = look(Replay(), x, 24 * 70, length=3)
    assert "greater length" in seen.reasons[seen.undecided[0, 0]]
