"""What several series say together about which of several explanations holds; depends on numpy and ``serial``."""

from __future__ import annotations

import numpy as np

from sercheck.serial.arrays import Floats

DIFFERENT = 0.05
"""Prior chance that a series of a batch that failed has another explanation than the batch: one in twenty, a choice."""


def shared_odds(scores: Floats) -> Floats:
    """Prior odds of each explanation for each series, given that most series of a batch share one.

    The batch has one explanation J, all equally likely before. A series has J too but for one in twenty, which has any
    of the others. P(J | all) ∝ Π_s Σ_k P(k | J) exp(score_ks): the evidence is added up over the series, and one that
    is surely different costs J no more than its prior. Then P(k for s | all) ∝ exp(score_ks) · odds_ks with
    odds_ks = Σ_J P(J | all) P(k | J) / Σ_l P(l | J) exp(score_ls). A single series has equal odds.

    Args:
        scores: log-likelihood of every series under every explanation, shape (K, S); -inf is impossible.

    Returns:
        Logarithms, shape (K, S), up to a constant for each series.
    """
    K = len(scores)
    if K < 2:
        return np.zeros(scores.shape)
    top = scores.max(axis=0)
    possible = np.isfinite(top)
    likely = np.where(possible, np.exp(scores - np.where(possible, top, 0.0)), 1.0)  # nothing explains it: says nothing
    rest = DIFFERENT / (K - 1)
    same = 1 - DIFFERENT - rest
    given = same * likely + rest * likely.sum(axis=0)  # of the series given J, shape (K, S); at least ``rest``
    log = np.log(given).sum(axis=1)
    batch = np.exp(log - log.max())
    batch /= batch.sum()
    part = batch[:, None] / given
    return np.asarray(np.log(same * part + rest * part.sum(axis=0)))


def responsibilities(scores: Floats, odds: Floats) -> Floats:
    """Posterior share of each explanation, shape (K, S); all 0 for a series that nothing explains."""
    told = scores + odds
    top = told.max(axis=0, initial=-np.inf)
    possible = np.isfinite(top)
    weight = np.where(possible, np.exp(told - np.where(possible, top, 0.0)), 0.0)
    return np.asarray(weight / np.maximum(weight.sum(axis=0), np.finfo(np.float64).tiny))
