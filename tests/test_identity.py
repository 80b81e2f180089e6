"""Keys swapped: the nearest past against loops, sizes beside naive, what is found, and what cannot be told."""

import numpy as np
import pytest
from processes import LIKE, agrees, look, p_values
from scipy import signal

from sercheck.measures.identity import Identity
from sercheck.serial.autoregression import burg
from sercheck.serial.identity import nearest_other, own_or_other, swap_size

MEASURE = Identity()
DAY = {"day": 24}
NAN = np.nan


def town(seed, count, steps, *, memory=0.6, differ=2.0):
    """Houses with a common daily cycle, a part of their own, and noise of standard deviation 1."""
    rng = np.random.default_rng(seed)
    hour = np.arange(24) * 2 * np.pi / 24
    own = sum(
        rng.normal(size=(count, 1)) / k * np.cos(k * hour) + rng.normal(size=(count, 1)) / k * np.sin(k * hour)
        for k in (1, 2, 3)
    )
    noise = signal.lfilter([1], [1, -memory], rng.normal(size=(count, steps + 200)), axis=1)[:, 200:]
    profile = 20 + 3 * np.cos(hour - 3.7) + differ * own
    return profile[:, np.arange(steps) % 24] + noise * np.sqrt(1 - memory**2)


def swapped(x, start, first=0, second=1):
    """Two windows change places."""
    y = x.copy()
    y[[first, second], start:] = x[[second, first], start:]
    return y


def test_the_nearest_other_equals_a_plain_loop():
    """With missing values in the rows, and a profile that is not known."""
    rng = np.random.default_rng(1)
    x, profiles = rng.normal(size=(2, 12, 20))
    x[rng.random(x.shape) < 0.2] = NAN
    profiles[4, 3] = NAN
    found = nearest_other(x, profiles)
    for i in range(12):
        apart = [np.nansum((x[i] - profiles[j]) ** 2) if j not in (i, 4) else np.inf for j in range(12)]
        assert found[i] == int(np.argmin(apart))


def test_sums_of_squares_equal_plain_loops():
    """Both filters begin anew in each window; values without their forerunners take no part."""
    rng = np.random.default_rng(2)
    x = town(3, 6, 24 * 8).reshape(6, 8, 24)
    profile = x + rng.normal(size=x.shape)
    model = burg(rng.normal(size=(6, 300)).cumsum(axis=1) * 0.1 + rng.normal(size=(6, 300)), max_order=3)
    x = np.where(rng.random(x.shape) < 0.05, NAN, x)
    seen = own_or_other(x, profile, model)
    for i in range(6):
        for b in range(8):
            sums = []
            for j in (i, seen.other[i, b]):
                rest, p = x[i, b] - profile[j, b], int(model.order[i])
                e = [rest[t] - sum(model.coefficients[i, k] * rest[t - 1 - k] for k in range(p)) for t in range(p, 24)]
                sums.append(np.nansum(np.square(e)))
            np.testing.assert_allclose(seen.d[i, b], np.log(sums[0] / sums[1]), rtol=1e-9)
    assert (seen.other != np.arange(6)[:, None]).all()


@pytest.mark.parametrize(("memory", "differ"), [(0.6, 2.0), (0.9, 2.0), (0.6, 0.3), (-0.4, 1.0)])
def test_healthy_series_are_themselves(memory, differ):
    """At .05 and .01 no more than 1.4 times the risk; 'nearer to another one' alone fails where profiles are alike."""
    x = town(4, 600, 50 * 24, memory=memory, differ=differ)
    parts = [x[first : first + 30] for first in range(0, 600, 30)]
    seen = [look(MEASURE, part, 49 * 24, LIKE, 0.01, DAY) for part in parts]
    p = np.concatenate([p_values(one) for one in seen])
    assert not np.isnan(p).any()
    for risk, most in ((0.05, 0.06), (0.01, 0.014)):
        assert np.mean(p <= risk) <= most + 2.5 * np.sqrt(most / 600)
    if differ == 0.3:
        assert np.mean([one.observed > 0 for one in seen]) > 0.2


@pytest.mark.calibration
def test_sizes_at_a_ten_thousandth():
    """20,000 series in towns of 20: at most 1.1, 1.5 and 2 times .01, .001 and .0001, and a swap of days is found."""
    p = []
    for seed in range(1000):
        p.append(p_values(look(MEASURE, town([5, seed], 20, 80 * 24, differ=0.5), 79 * 24, LIKE, 0.01, DAY)))
    rates = [np.mean(np.concatenate(p) <= risk) for risk in (0.01, 0.001, 0.0001)]
    print(rates)
    assert (np.array(rates) <= (0.011, 0.0015, 0.0003)).all()


@pytest.mark.parametrize(("n", "least"), [(24, 0.9), (168, 0.99)])
def test_swapped_keys_are_found_and_only_they(n, least):
    """Two of twenty houses change keys: told at a risk of .001 unless marked as too alike, the others never."""
    found, others = [], []
    for seed in range(6):
        steps = 60 * 24 if n == 24 else 35 * 168
        x = swapped(town([6, seed], 20, steps), steps - n, 3, 11)
        seen = look(MEASURE, x, steps - n, LIKE, 0.001, DAY)
        p = p_values(seen)
        found += (p[[3, 11]] <= 0.001 / 20)[seen.unsure[[3, 11], 0] < 0].tolist()
        others.append(np.delete(p, [3, 11]) <= 0.001 / 20)
    assert len(found) >= 6
    assert np.mean(found) >= least
    assert not np.any(others)


def test_a_window_delivered_under_a_second_key_is_found():
    """One house's day arrives under the key of another as well: only the other one fails."""
    x = town(7, 10, 60 * 24)
    x[5, -24:] = x[2, -24:]
    p = p_values(look(MEASURE, x, 59 * 24, LIKE, 0.01, DAY))
    assert np.flatnonzero(p <= 0.001).tolist() == [5]


def test_profiles_that_coincide_are_told():
    """A pass among twins says nothing and is marked so; among houses that differ it stands."""
    twins = look(MEASURE, town(8, 6, 60 * 24, differ=0.0), 59 * 24, LIKE, 0.01, DAY)
    assert (twins.unsure >= 0).all()
    assert "so similar a profile" in twins.reasons[twins.unsure[0, 0]]
    far = look(MEASURE, town(8, 6, 60 * 24, differ=6.0), 59 * 24, LIKE, 0.01, DAY)
    assert (far.unsure < 0).all()
    profile = town(9, 3, 24)
    profile[2] = profile[0]
    sizes = swap_size(profile, burg(np.random.default_rng(10).normal(size=(3, 200))), np.ones(3))
    assert sizes[0] == sizes[2] == 0 < sizes[1]


def test_a_block_knows_only_its_own_series():
    """The limit of blocks: a swap across two blocks is compared with the wrong houses, one within it is found."""
    x = swapped(town(11, 40, 60 * 24, differ=4.0), 59 * 24, 0, 20)
    whole = p_values(look(MEASURE, x, 59 * 24, LIKE, 0.01, DAY))[[0, 20]]
    halves = [p_values(look(MEASURE, part, 59 * 24, LIKE, 0.01, DAY))[0] for part in (x[:20], x[20:])]
    assert (whole <= 0.01 / 40).all()
    assert (np.array(halves) > whole).all()


def test_levels_far_apart_or_far_from_nought_change_nothing():
    """Scale and shift of the whole feed change no p-value; a series of another size disturbs no other."""
    x = swapped(town(12, 8, 60 * 24), 59 * 24)
    p = p_values(look(MEASURE, x, 59 * 24, LIKE, 0.01, DAY))
    for change in (x * 1e200, x * 1e-200, x + 1e6):
        np.testing.assert_allclose(p_values(look(MEASURE, change, 59 * 24, LIKE, 0.01, DAY)), p, rtol=1e-4, atol=1e-12)
    more = np.concatenate([x, x[:1] * 1e9])
    np.testing.assert_allclose(p_values(look(MEASURE, more, 59 * 24, LIKE, 0.01, DAY))[:8], p, rtol=1e-4, atol=1e-12)


@pytest.mark.parametrize(
    ("count", "past", "n", "lengths", "reason"),
    [
        (1, 59 * 24, 24, DAY, "one series only"),
        (3, 0, 240, DAY, "no history"),
        (3, 5 * 24, 24, DAY, "fewer than 8 stretches"),
        (3, 59 * 24, 24, {}, "no season"),
        (3, 59 * 24, 12, DAY, "shorter than a cycle"),
        (3, 12 * 24, 24, DAY, "can be compared"),
    ],
)
def test_too_little_is_undecided_with_its_reason(count, past, n, lengths, reason):
    """One series, no or little history, no season, a piece of a day."""
    seen = look(MEASURE, town(13, count, past + n), past, LIKE, 0.01, lengths)
    assert (seen.undecided >= 0).all()
    assert reason in seen.reasons[seen.undecided[0, 0]]


def test_p_value_and_limit_agree():
    """At or under a risk exactly where D lies at or beyond the limit; at or under 0 it never fails."""
    seen = look(MEASURE, swapped(town(14, 12, 60 * 24, differ=1.0), 59 * 24), 59 * 24, LIKE, 0.01, DAY)
    agrees(seen)
    assert (seen.upper.p_value("upper")[seen.observed <= 0] == 1).all()
    assert (seen.upper.limit("upper", np.full(seen.observed.shape, 0.4)) >= 0).all()
