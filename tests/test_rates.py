"""Shares of clustered marks: exact binomial laws on effective sizes."""

from dataclasses import replace

import numpy as np
import pytest
from clusters import CLUSTERS, markov
from naive.rates import cluster_size as slow_cluster_size
from scipy import stats

from sercheck.serial.clusters import cluster_size, clusters, tally
from sercheck.serial.rates import (
    AgainstPast,
    AgainstShare,
    against_past,
    against_share,
    binomial_tail,
    conditional_tail,
    first_within,
    runs_of,
)

K, N = (grid.ravel().astype(float) for grid in np.meshgrid(np.arange(0, 31, 3), [1, 5, 24, 30]))
K, N = K[K <= N], N[K <= N]


@pytest.mark.parametrize("share", [0.001, 0.05, 0.5, 0.97])
@pytest.mark.parametrize(("side", "alternative"), [("upper", "greater"), ("lower", "less")])
def test_whole_sizes_give_the_exact_binomial_test(share, side, alternative):
    """With whole sizes the tails are those of scipy's exact binomial test."""
    wanted = [stats.binomtest(int(k), int(n), share, alternative=alternative).pvalue for k, n in zip(K, N, strict=True)]
    np.testing.assert_allclose(binomial_tail(K, N, share, side), wanted, rtol=1e-10)


def test_broken_sizes_give_the_beta_law():
    """With broken sizes the tails are scipy's beta distribution functions."""
    k, n = np.array([0.4, 3.7, 11.2]), np.array([8.3, 9.1, 11.9])
    np.testing.assert_allclose(binomial_tail(k, n, 0.2, "upper"), stats.beta.cdf(0.2, k, n - k + 1), rtol=1e-12)
    np.testing.assert_allclose(binomial_tail(k, n, 0.2, "lower"), stats.beta.sf(0.2, k + 1, n - k), rtol=1e-10)


def test_certain_and_impossible_shares():
    """A bound of 0 is broken by the first marked row and of 1 by the first unmarked one, with certainty."""
    k, n = np.array([0.0, 1.0, 9.0, 10.0]), np.full(4, 10.0)
    np.testing.assert_array_equal(binomial_tail(k, n, 0.0, "upper"), [1, 0, 0, 0])
    np.testing.assert_array_equal(binomial_tail(k, n, 1.0, "lower"), [0, 0, 0, 1])


def test_conditional_tail_is_the_binomial_mid_p():
    """Given all marks together, those of the batch are binomial; half of what is observed counts."""
    for k, n, K_, N_ in [(3, 24, 20, 200), (0, 24, 5, 200), (7, 24, 0, 200), (24, 24, 200, 200), (0, 10, 0, 50)]:
        law = stats.binom(k + K_, n / (n + N_))
        upper = law.sf(k) + 0.5 * law.pmf(k)
        sizes = [np.array([float(v)]) for v in (k, n, K_, N_)]
        assert conditional_tail(*sizes, "upper")[0] == pytest.approx(upper, rel=1e-9)
        assert conditional_tail(*sizes, "lower")[0] == pytest.approx(1 - upper, rel=1e-9)


def test_no_rows_are_no_evidence():
    """Without rows in the batch or in history there is no p-value and no limit."""
    zero, some = np.zeros((1, 1)), np.full((1, 1), 20.0)
    for law in (
        AgainstShare(zero, zero, zero + 1, 0.8, np.array(0.1)),
        AgainstPast(zero, zero, zero + 1, 0.8, some, some),
        AgainstPast(zero, some, zero + 1, 0.8, zero, zero),
    ):
        assert np.isnan(law.p_value("upper")).all()
        assert np.isnan(law.limit("upper", np.full((1, 1), 0.05))).all()


def laws():
    """Both laws on every count of 30 rows, at two sizes of clusters."""
    k = np.tile(np.arange(31.0), 2)[:, None]
    rows, tau = np.full(k.shape, 30.0), np.repeat([1.0, 3.3], 31)[:, None]
    half = np.full(k.shape, 240.0)
    yield AgainstShare(k, rows, tau, 0.8, np.array(0.2))
    yield AgainstShare(k, rows, tau, 0.8, np.array(0.2), df=dict.fromkeys(("upper", "lower"), np.full(k.shape, 11.0)))
    yield AgainstPast(k, rows, tau, 0.8, half * 0.2, half)
    yield AgainstPast(k, rows, tau, 0.8, half * 0.9, half)


@pytest.mark.parametrize("side", ["upper", "lower"])
@pytest.mark.parametrize("risk", [0.3, 0.05, 0.001])
def test_limit_is_the_first_share_within_the_risk(side, risk):
    """The p-value is within the risk exactly when the share is at the limit or beyond."""
    for law in laws():
        limit = law.limit(side, np.full(law.rows.shape, risk))
        share = law.hits / law.rows
        beyond = share >= limit if side == "upper" else share <= limit
        np.testing.assert_array_equal(law.p_value(side) <= risk, beyond)


def test_first_within_finds_the_first_count_of_any_falling_tail():
    """The bisection gives the first count within the risk, and NaN when the last one is not."""
    found = first_within(lambda k: 0.5**k, np.array([10.0, 3.0, 0.0]), np.array(0.1))
    np.testing.assert_array_equal(found, [4.0, np.nan, np.nan])
    assert np.isnan(first_within(lambda k: 0.5**k, np.array([10.0]), np.array([np.nan]))).all()


def test_naive_limit_is_that_of_independent_rows():
    """The naive limit is the limit at clusters of one row, and the honest one lies farther out."""
    for law in laws():
        level = np.full(law.rows.shape, 0.01)
        plain = replace(law, tau=np.ones(law.tau.shape), **({"df": {}} if isinstance(law, AgainstShare) else {}))
        np.testing.assert_array_equal(law.naive_limit("upper", level), plain.limit("upper", level))
        assert np.all(~(law.limit("upper", level) < law.naive_limit("upper", level)))


def test_detectable_change_is_found_with_its_power():
    """A share raised by the detectable change is beyond the limit four times in five."""
    law = AgainstShare(np.zeros((1, 1)), np.full((1, 1), 200.0), np.ones((1, 1)), 0.8, np.array(0.1))
    level = np.full((1, 1), 0.01)
    share = 0.1 + law.detectable("upper", level)[0, 0]
    power = stats.binom.sf(law.limit_hits("upper", level)[0, 0] - 1, 200, share)
    assert power == pytest.approx(0.8, abs=1e-9)


def test_clusters_as_the_slow_twin_tells_them():
    """The vectorised cluster size equals the plain sums, with gaps and for short and constant rows."""
    rng = np.random.default_rng(3)
    for steps in (1, 4, 7, 8, 9, 61, 200):
        marks = markov(rng, 12, steps, 0.3, 4)
        marks[rng.random(marks.shape) < 0.15] = np.nan
        marks[0], marks[1] = 1.0, np.nan
        np.testing.assert_allclose(cluster_size(marks), [slow_cluster_size(row) for row in marks], rtol=1e-9)


def test_clusters_of_a_chain_have_their_known_size():
    """A two-state chain with p11 − p01 = ρ has clusters of (1 + ρ)/(1 − ρ) rows."""
    marks = markov(np.random.default_rng(4), 40, 20_000, 0.2, 5)
    rho = 0.8 - 0.2 * 0.2 / 0.8
    assert np.median(cluster_size(marks)) == pytest.approx((1 + rho) / (1 - rho), rel=0.05)


def test_a_gap_is_not_closed_up():
    """Marks on every second step stay two steps apart: what lies between is unknown, not absent."""
    rng = np.random.default_rng(5)
    marks = np.full((50, 4000), np.nan)
    marks[:, ::2] = markov(rng, 50, 2000, 0.2, 5)
    closed = marks[:, ::2]
    assert np.median(cluster_size(closed)) > 5  # adjacent rows: clusters
    assert np.median(cluster_size(marks)) > 5  # two steps apart: the odd lags are empty, the even ones are not


def with_yesterday(seed, series, cycles, stays=0.6):
    """Marks of share .2 at each of 24 hours, each hour's a chain from day to day that does not see the others."""
    chains = markov(np.random.default_rng(seed), series * 24, cycles, 0.2, 1 / (0.8 * (1 - stays)))
    return chains.reshape(series, 24, cycles).transpose(0, 2, 1).reshape(series, -1)


@pytest.mark.parametrize("lost", [0.0, 0.4])
def test_clusters_of_days_have_their_known_size(lost):
    """Chains from day to day with memory ρ have clusters of (1 + ρ)/(1 − ρ) rows, that the steps do not show."""
    marks = with_yesterday(10, 60, 800)
    marks[np.random.default_rng(11).random(marks.shape) < lost] = np.nan
    known = 4.0 if not lost else 1 + 3.0 * (1 - lost)  # what is lost takes its share of the covariances
    assert np.median(cluster_size(marks)) < 1.3
    assert np.median(cluster_size(marks, season=24)) == pytest.approx(known, rel=0.1)


def test_a_fixed_pattern_is_no_cluster_of_days():
    """The same hours marked on every day, rows missing or not, add nothing to what the steps show."""
    marks = np.tile(np.arange(24) < 3, (2, 30)).astype(float)
    marks[1, np.random.default_rng(12).random(720) < 0.3] = np.nan
    np.testing.assert_array_equal(cluster_size(marks, season=24), cluster_size(marks))


def test_few_or_hardly_known_cycles_tell_nothing():
    """Under eight cycles of which half is known the steps alone tell, however the batch begins."""
    marks = with_yesterday(13, 20, 20)
    short, thin = marks[:, : 24 * 8 - 1], marks.copy()
    thin.reshape(20, 20, 24)[:, 7:, :13] = np.nan
    for some in (short, thin):
        for start in (0, 100):
            found = clusters(some, season=24, start=start)
            np.testing.assert_array_equal(found.size, cluster_size(some))
            assert np.isinf(found.behind).all()


def test_a_changed_batch_is_no_long_cluster():
    """A rise in the batch does not hide itself: from its start on cycles have their own mean."""
    rng = np.random.default_rng(14)
    marks = np.hstack([rng.random((200, 24 * 140)) < 0.1, rng.random((200, 168)) < 0.3]).astype(float)
    own, common = (np.median(cluster_size(marks, season=24, start=start)) for start in (24 * 140, 0))
    assert own < 1.4 < 1.8 < common


def test_tally_and_runs():
    """Marks, rows and runs are counted; a missing row ends a run."""
    marks = np.array([[1, 1, 0, np.nan, 0, 1], [np.nan] * 6])
    np.testing.assert_array_equal(tally(marks), [[3, 0], [5, 0]])
    np.testing.assert_array_equal(runs_of(marks), [[2, 0], [2, 0]])


def sizes(name, past, n, series, seed, risks):
    """Actual over nominal risk of both laws, and of independent rows, over both sides."""
    share, generate = CLUSTERS[name]
    marks = generate(np.random.default_rng(seed), series, past + n)
    told = [against_share(marks, past, share, 0.8)] + ([against_past(marks, past, 0.8)] if past else [])
    bare = {"df": {}, "blind": {}}
    plain = [
        replace(law, tau=np.ones(law.tau.shape), **(bare if isinstance(law, AgainstShare) else {})) for law in told
    ]

    def ratios(which):
        return np.array([np.mean(law.p_value(s) <= a) / a for law in which for s in ("upper", "lower") for a in risks])

    return ratios(told), ratios(plain)


@pytest.mark.parametrize("name", CLUSTERS)
@pytest.mark.parametrize(("past", "n"), [(768, 96), (2016, 168)])
def test_healthy_clusters_keep_the_risk(name, past, n):
    """With history no cell fails more than 1.6 times as often as asked, on 2,500 healthy batches."""
    honest, _ = sizes(name, past, n, 2500, 7, (0.05, 0.01))
    assert honest.max() <= 1.6


def test_independent_rows_would_fail_far_too_often():
    """The plain binomial fails more than ten times as often as asked where this one keeps the risk."""
    honest, naive = sizes("Markov .05 in eights", 768, 96, 2500, 8, (0.01,))
    assert naive.max() > 10
    assert honest.max() <= 1.6


@pytest.mark.parametrize("name", CLUSTERS)
def test_without_history_the_law_is_widened(name):
    """The window alone keeps the risk within 1.6 too."""
    honest, _ = sizes(name, 0, 336, 4000, 9, (0.05, 0.01))
    assert honest.max() <= 1.6


def test_few_runs_of_a_rare_mark_prove_nothing():
    """Without history a rare mark that did not come is no evidence against a share: nobody knows its clusters."""
    marks = np.zeros((1, 168))
    assert against_share(marks, 0, 0.1, 0.8).p_value("lower")[0, 0] == 1
    long = np.zeros((1, 168 * 9))
    assert against_share(long, 168 * 8, 0.1, 0.8).p_value("lower")[0, 0] < 1e-6


@pytest.mark.calibration
@pytest.mark.parametrize("name", CLUSTERS)
@pytest.mark.parametrize(("past", "n"), [(2160, 24), (768, 96), (2016, 168)])
def test_sizes_at_small_risks(name, past, n):
    """With history no cell exceeds 1.6 times the risk down to .001, on 20,000 healthy batches."""
    honest, naive = sizes(name, past, n, 20_000, 11, (0.05, 0.01, 0.001))
    print(name, past, n, "honest", honest.round(2), "naive", naive.round(1))
    assert honest.max() <= 1.6


@pytest.mark.calibration
@pytest.mark.parametrize("name", CLUSTERS)
@pytest.mark.parametrize("n", [96, 168, 336, 1000])
def test_sizes_without_history(name, n):
    """Without history no cell exceeds 1.6 times the risk down to .001 either, on 20,000 healthy batches."""
    honest, naive = sizes(name, 0, n, 20_000, 12, (0.05, 0.01, 0.001))
    print(name, n, "honest", honest.round(2), "naive", naive.round(1))
    assert honest.max() <= 1.6
