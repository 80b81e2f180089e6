"""Normal scores against history."""

import numpy as np
import pytest
from naive.scores import normal_score

from sercheck.serial.scores import commonest_share, normal_scores, ranking

SEEDED = np.random.default_rng(20240301)


@pytest.mark.parametrize(
    "history",
    [
        SEEDED.normal(size=60),
        SEEDED.poisson(2.0, size=60).astype(float),
        np.where(SEEDED.random(60) < 0.3, np.nan, SEEDED.normal(size=60)),
        np.full(12, 4.0),
        np.array([1.0, 2.0]),
        np.array([-1.7e308, 0.0, 1.7e308]),
    ],
)
def test_twin(history):
    """Scores by bisection over all series equal those by counting one value at a time."""
    new = np.concatenate([history[~np.isnan(history)][:20] * 0.9, SEEDED.normal(size=20) * 3, [np.inf, -np.inf]])
    fast = ranking(history).of(new[None, :])[0]
    slow = [normal_score(value, history) for value in new]
    np.testing.assert_allclose(fast, slow, rtol=1e-12, atol=1e-12)


def test_published_scores():
    """Ten distinct values have the scores Φ⁻¹((i - ½)/10) that R's qnorm(ppoints(10, a = 1/2)) prints."""
    expected = [-1.6448536, -1.0364334, -0.6744898, -0.3853205, -0.1256613]
    own = ranking(np.arange(10.0)).own[0]
    np.testing.assert_allclose(own, [*expected, *(-np.array(expected[::-1]))], atol=5e-8)


def test_ties_share_the_mid_rank():
    """Counts get Φ⁻¹((less + ½ equal)/N), so 0 0 1 3 has scores of the shares .25, .625 and .875."""
    own = ranking([0.0, 0.0, 1.0, 3.0]).own[0]
    np.testing.assert_allclose(own, [-0.6744898, -0.6744898, 0.3186394, 1.1503494], atol=1e-7)


def test_series_do_not_mix():
    """Each series is scored in its own history, whatever stands beside it."""
    history = SEEDED.normal(size=(7, 50)) * np.arange(1, 8)[:, None]
    history[3, 10:30] = np.nan
    new = SEEDED.normal(size=(7, 9))
    together = normal_scores(new, history)
    alone = np.vstack([normal_scores(new[s], history[s]) for s in range(7)])
    np.testing.assert_array_equal(together, alone)


def test_monotone_map_changes_nothing():
    """Scores of history's own values and of values it holds do not change when the unit is stretched."""
    history = np.round(SEEDED.normal(size=(3, 80)), 1)
    np.testing.assert_array_equal(ranking(history).own, ranking(np.exp(history)).own)


def test_missing_stays_missing():
    """A missing value has no score and does not change the others'."""
    history = np.array([1.0, np.nan, 2.0, 3.0])
    scores = normal_scores([np.nan, 2.0], history)[0]
    assert np.isnan(scores[0])
    assert scores[1] == normal_scores([2.0], history[~np.isnan(history)])[0, 0]


def test_empty_history_scores_nothing():
    """Without history there are no scores and no way back."""
    empty = ranking(np.empty((2, 0)))
    assert np.isnan(empty.of(np.ones((2, 3)))).all()
    assert np.isnan(empty.unit(np.zeros((2, 1)))).all()
    assert np.isnan(ranking(np.full((1, 5), np.nan)).of(np.ones((1, 3)))).all()


def test_way_back():
    """The value of a value's score is that value, to the width of the grid."""
    history = SEEDED.normal(size=(4, 400))
    ordered = ranking(history)
    scores = np.linspace(-2, 2, 41)[None, :].repeat(4, axis=0)
    back = ordered.of(ordered.unit(scores))
    np.testing.assert_allclose(back, scores, atol=0.02)


def test_way_back_increases_beyond_the_extremes():
    """The map to the unit increases strictly, beyond history's extremes too."""
    ordered = ranking(SEEDED.poisson(3.0, size=(2, 300)).astype(float))
    values = ordered.unit(np.linspace(-6, 6, 500)[None, :].repeat(2, axis=0))
    assert (np.diff(values, axis=1) > 0).all()


def test_commonest_share():
    """The share of the commonest value is told, for the measures that say nothing on tied rows."""
    np.testing.assert_allclose(ranking([[0.0, 0.0, 0.0, 1.0], [1.0, 2.0, np.nan, np.nan]]).commonest, [0.75, 0.5])


def test_input_is_untouched():
    """History and new values are not changed."""
    history, new = SEEDED.normal(size=(2, 30)), SEEDED.normal(size=(2, 5))
    before = history.copy(), new.copy()
    normal_scores(new, history)
    np.testing.assert_array_equal(history, before[0])
    np.testing.assert_array_equal(new, before[1])


def test_the_commonest_share_without_places():
    """The share of the commonest value is the one that the ordered history tells, gaps and empty series included."""
    rng = np.random.default_rng(7)
    x = rng.standard_normal((5, 40))
    x[1] = rng.integers(0, 4, 40)
    x[2, 5:30] = np.nan
    x[3] = np.nan
    x[4, ::2] = 0.0
    np.testing.assert_array_equal(commonest_share(x), ranking(x).commonest)
    assert commonest_share(np.empty((2, 0))).tolist() == pytest.approx([np.nan, np.nan], nan_ok=True)


def test_what_rounding_parts_is_tied():
    """Residuals of rounded readings are ties in every unit; outliers elsewhere do not tie what is apart."""
    rng = np.random.default_rng(11)
    readings, cycle = np.round(rng.normal(200, 5, (2, 400)), 1), np.tile(np.round(rng.normal(0, 9, 8), 2) / 7, 50)
    scores = ranking(readings - cycle, (readings, np.broadcast_to(cycle, readings.shape))).own
    for scale, shift in ((3.6, 0.0), (1 / 3.6, 64.0), (1.0, -4096.3)):
        other, profile = readings * scale + shift, np.broadcast_to(cycle * scale + shift, readings.shape)
        np.testing.assert_array_equal(ranking(other - profile, (other, profile)).own, scores)
    exact = ranking(np.round((readings - cycle) * 7, 9)).own
    np.testing.assert_array_equal(scores, exact)
    apart = rng.normal(size=(1, 50))
    apart[0, 7] = 1e15
    np.testing.assert_array_equal(ranking(apart, (apart, np.zeros_like(apart))).own, ranking(apart).own)
