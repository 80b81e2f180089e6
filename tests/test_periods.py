"""Seasons found unasked: the right ones, none where there is none, harmonics and multiples told apart."""

import numpy as np
import pytest
from reference_values import series
from study_seasons import SEASONAL, SEASONS, feed, noise, right

from sercheck.serial.lines import first_order, lines
from sercheck.serial.periods import find_seasons


def first(found):
    """The clearest season of each series, 0 for none."""
    return found.steps[:, 0] if found.steps.shape[1] else np.zeros(len(found.steps), dtype=np.int64)


@pytest.mark.parametrize("known", [True, False])
def test_the_right_season_is_first(known):
    """With trend and a tenth missing, whether or not a calendar names it, in at least 19 of 20 feeds."""
    rng = np.random.default_rng(1)
    hits = []
    for s in SEASONS:
        x = feed(rng, 40, (s,), "harmonics", 0.6, trend=True, missing=True)
        hits.append(right(x, (s,), known=known).mean())
    assert np.mean(hits) >= 0.95
    assert min(hits) >= 0.85


@pytest.mark.parametrize("pair", [(24, 168), (7, 24)])
def test_two_seasons_are_both_named(pair):
    """The stronger one first."""
    x = feed(np.random.default_rng(5), 20, pair, "harmonics", 0.6)
    assert right(x, pair, known=True).mean() >= 0.9


@pytest.mark.parametrize("phi", [0.0, 0.9, 1.0])
def test_no_season_is_claimed_where_there_is_none(phi):
    """White noise, strong memory and a random walk: at most one feed in a hundred."""
    x = noise(np.random.default_rng(3), 300, 480, phi)
    assert (find_seasons(x, (24, 168)).steps > 0).any(axis=1).mean() <= 0.01


def test_a_pseudo_cycle_is_no_season():
    """An AR(2) that swings about every ten steps but keeps no time."""
    shocks = np.random.default_rng(4).normal(size=(50, 2500))
    x = np.zeros_like(shocks)
    for t in range(2, 2500):
        x[:, t] = 1.5 * x[:, t - 1] - 0.85 * x[:, t - 2] + shocks[:, t]
    assert (find_seasons(x[:, 500:]).steps > 0).any(axis=1).mean() <= 0.02


def test_a_harmonic_is_no_season_of_its_own():
    """A day with two humps is one season of 24 steps; what it is told of is not a season of 12."""
    t = np.arange(24 * 40)
    x = np.sin(2 * np.pi * t / 24) + 1.5 * np.sin(2 * np.pi * t / 12 + 1)
    x = x + np.random.default_rng(6).normal(size=(20, len(t)))
    found = find_seasons(x, (24, 168))
    assert (found.steps == 24).all()
    assert found.steps.shape[1] == 1


def test_neither_a_multiple_nor_a_common_multiple_takes_the_place():
    """Seasons of 7 and of 24 steps are not one of 168, and 24 is not 48."""
    x = feed(np.random.default_rng(8), 20, (7, 24), "draws", 0.0)
    assert not np.isin(find_seasons(x).steps, (168, 48, 14, 21)).any()


def test_an_inner_season_counts_without_the_outer_one():
    """The shares of a day and of the week around it add up to what both explain."""
    x = feed(np.random.default_rng(9), 10, (24, 168), "draws", 0.0)
    found = find_seasons(x, (24, 168))
    assert np.abs(found.share.sum(axis=1) - 0.7).max() < 0.08


@pytest.mark.parametrize("name", ["AirPassengers", "co2", "nottem", "UKgas"])
def test_the_seasons_of_open_series_are_named(name):
    """Their season is that of R's ts objects (R 4.2.2, package datasets)."""
    assert find_seasons(series(name), (SEASONAL[name],)).steps.tolist() == [[SEASONAL[name]]]


@pytest.mark.parametrize(
    ("name", "natural"),
    [("lynx", ()), ("nag_sunspots50", ()), ("LakeHuron", ()), ("Nile", ()), ("lh", ()), ("nist_lew", ()),
     ("nist_random_walk", ()), ("nist_normal_random", ()), ("nist_pidigits", ()), ("nist_michelso", ()),
     ("nist_heat_flow_meter", ()), ("macrodata_realgdp", (4,)), ("presidents", (4,)), ("airquality_ozone", (7,))],
)  # fmt: skip
def test_open_series_without_a_season_get_none(name, natural):
    """Pseudo-cycles (lynx, sunspots), a cycle of no whole number of steps (lew), adjusted and noisy ones."""
    assert find_seasons(series(name), natural).steps.size == 0


def test_nothing_to_look_at_gives_none():
    """Empty, one row, all missing, all equal, a straight line: no season and no warning."""
    for x in (np.zeros((1, 0)), np.ones((1, 1)), np.full((2, 100), np.nan), np.full((1, 200), 7.0),
              np.arange(300.0)[None], np.full((1, 50), 1e300), np.zeros((0, 40))):  # fmt: skip
        found = find_seasons(x, (4, 12))
        assert found.steps.size == 0
        assert len(found.steps) == len(found.harmonics) == len(x)


def test_the_input_stays_and_units_and_neighbours_do_not_matter():
    """Scale and shift change nothing, nor does what else is in the block."""
    x = feed(np.random.default_rng(2), 6, (24,), "harmonics", 0.6, missing=True)
    kept = x.copy()
    one = find_seasons(x, (24,))
    np.testing.assert_array_equal(x, kept)
    moved = find_seasons(1e6 + 1e-3 * x, (24,))
    np.testing.assert_array_equal(one.steps, moved.steps)
    np.testing.assert_allclose(one.share, moved.share, rtol=1e-6)
    alone = find_seasons(x[2:3], (24,))
    np.testing.assert_allclose(alone.share[0], one.share[2, : alone.share.shape[1]], rtol=1e-9)


def test_a_cycle_without_noise_is_as_sure_as_doubles_can_tell():
    """No overflow, no division by zero, one season, nearly all of the variance."""
    found = find_seasons(np.tile([3.0, 1.0, 4.0, 1.0, 5.0, 9.0, 2.0], 40), (7,))
    assert found.steps.tolist() == [[7]]
    assert found.share[0, 0] > 0.99


def test_lines_agree_with_their_definition():
    """For s = 5: F over the neighbours, Fisher's sum, Bonferroni over the sets, step by step."""
    x = np.random.default_rng(1).normal(size=60)
    x -= x.mean()
    power = np.abs(np.fft.rfft(x)) ** 2
    m, logs = 11, []
    for k in (12, 24):
        if k + m > 30:
            floor, half = np.mean(power[k - m : k]), m
        else:
            floor, half = np.mean(np.r_[power[k - m : k], power[k + 1 : k + m + 1]]), 2 * m
        logs.append(-half * np.log(1 + power[k] / floor / half))
    from scipy import stats

    alone = logs[0] + np.log(2)
    both = stats.chi2.logsf(-2 * sum(logs), 4) + np.log(2)
    np.testing.assert_allclose(lines(x[None], 5, np.zeros(1)).log_p[0], min(alone, both, 0.0), rtol=1e-10)


def test_the_tilt_is_a_first_order_autoregression():
    """φ of a long AR(1) to its sampling error."""
    assert first_order(noise(np.random.default_rng(0), 1, 20000, 0.9))[0] == pytest.approx(0.9, abs=0.02)


@pytest.mark.calibration
def test_shares_are_as_promised():
    """At least 95 % right and 99 % without a false season, for each kind of simulated feed (``study_seasons``)."""
    rng = np.random.default_rng(12)
    for phi in (0.0, 0.9, 1.0):
        assert (find_seasons(noise(rng, 4000, 720, phi), (24, 168)).steps > 0).any(axis=1).mean() <= 0.005
    hits = [right(feed(rng, 200, (s,), "harmonics", 0.6), (s,), known=False) for s in SEASONS]
    assert np.mean(hits) >= 0.95
