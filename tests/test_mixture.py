"""What several series say together about the explanation that they share."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from sercheck.serial.mixture import DIFFERENT, responsibilities, shared_odds


def test_shares_are_those_of_the_whole_sum():
    """Shares equal the plain sum over every assignment of explanations to series and every one of the batch."""
    rng = np.random.default_rng(1)
    scores = 2 * rng.normal(size=(3, 4))
    expected = np.zeros(scores.shape)
    for batch in range(3):
        for kinds in itertools.product(range(3), repeat=4):
            prior = np.prod([1 - DIFFERENT if kind == batch else DIFFERENT / 2 for kind in kinds])
            weight = prior * np.exp(scores[kinds, range(4)].sum())
            expected[kinds, range(4)] += weight
    expected /= expected.sum(axis=0)
    np.testing.assert_allclose(responsibilities(scores, shared_odds(scores)), expected, rtol=1e-12)


def test_a_single_series_is_judged_by_itself():
    """With one series all explanations have equal odds."""
    odds = shared_odds(np.array([[0.3], [-2.0], [1.0], [-np.inf]]))
    np.testing.assert_allclose(odds, odds[0, 0], rtol=1e-12)


def test_undecided_series_follow_and_sure_ones_do_not():
    """Evidence is added up: twelve slight leads make one sure, and a series with strong evidence keeps its own."""
    scores = np.zeros((3, 12))
    scores[0] = 1.0
    scores[1, 1] = 2.0  # slightly for another
    scores[2, 2] = 20.0  # surely different
    share = responsibilities(scores, shared_odds(scores))
    assert np.argmax(share, axis=0).tolist() == [0, 0, 2] + [0] * 9
    assert share[0, 3:].min() > 0.97
    assert share[2, 2] > 0.999


def test_series_that_nothing_explains():
    """A series without any possible explanation says nothing and gets nothing; huge scores do no harm."""
    scores = np.array([[1.0, -np.inf, 1e6, -1e6], [0.0, -np.inf, -1e6, -1e6]])
    odds = shared_odds(scores)
    np.testing.assert_allclose(odds[:, [0, 2, 3]], shared_odds(scores[:, [0, 2, 3]]), rtol=1e-12)
    share = responsibilities(scores, odds)
    assert share[:, 1].tolist() == [0, 0]
    assert share[:, [0, 2, 3]].sum(axis=0) == pytest.approx(1)
    assert shared_odds(np.zeros((3, 0))).shape == (3, 0)
