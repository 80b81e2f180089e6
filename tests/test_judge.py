"""The judge: from p-values and bounds to outcomes and limits."""

import numpy as np
import pytest
from pydantic import BaseModel
from statsmodels.stats.multitest import multipletests

from sercheck.judge import FAIL, PASS, UNDECIDED, Seen, judge
from sercheck.measure import Measurement, Stays
from sercheck.reference import Exact, Larger, Pivot
from sercheck.rulebook.compiled import Rule
from sercheck.serial.risk import benjamini_yekutieli, broken, holm, t_quantile, t_tail


class NoFields(BaseModel):
    """A measure without fields."""


def rule_of(**changes):
    """A rule at a risk of .05."""
    settings = {"name": "r", "measure": "level", "fields": NoFields(), "stays": Stays("below", high=0.0)}
    return Rule(**{**settings, "columns": ("kwh",), "false_alarm": 0.05, **changes})


def pivot(observed, scale=1.0, df=np.inf):
    """T = observed / scale around a bound of 0."""
    observed = np.asarray(observed, dtype=float)
    filled = lambda value: np.full(observed.shape, float(value))
    return Pivot(observed, filled(0), filled(scale), filled(df), filled(0), filled(scale), naive_scale=filled(0.5))


def seen_of(observed, *, upper=True, lower=False, undecided=None, **changes):
    """A measurement of one column."""
    observed = np.atleast_2d(np.asarray(observed, dtype=float))
    reference = changes.pop("reference", None) or pivot(observed)
    measurement = Measurement(
        observed=observed,
        n=np.full(observed.shape, 100),
        n_missing=np.zeros(observed.shape, dtype=int),
        n_eff=np.full(observed.shape, 40.0),
        upper=reference if upper else None,
        lower=reference if lower else None,
        undecided=np.full(observed.shape, -1) if undecided is None else undecided,
        reasons=("too short",) if undecided is not None else (),
        method="m",
        assumes="a",
        **changes,
    )
    return Seen(0, np.array([f"s{i}" for i in range(len(observed))], dtype=object), "kwh", measurement, 0, 1)


def test_one_sided_outcome_and_limit_agree():
    """A cell fails exactly when its observation is beyond the limit told for it."""
    observed = np.linspace(-4, 4, 41)[:, None]
    (told,) = judge(rule_of(), [seen_of(observed)])
    np.testing.assert_array_equal(told.outcome == FAIL, observed >= told.limit)
    assert (told.outcome == FAIL).any()
    assert (told.outcome == PASS).any()


def test_two_sides_share_the_risk():
    """With both sides watched each has half the risk, and the nearer side's limit is told."""
    (told,) = judge(rule_of(across=("series",)), [seen_of([[1.9], [-1.9], [2.0], [-2.0]], lower=True)])
    np.testing.assert_allclose(np.abs(told.limit), 1.959964, rtol=1e-6)
    assert told.outcome.ravel().tolist() == [PASS, PASS, FAIL, FAIL]
    assert told.upper.ravel().tolist() == [True, False, True, False]


def test_holm_agrees_with_statsmodels_and_spans_blocks():
    """The risk is shared over all blocks and columns by Holm's procedure (statsmodels multipletests)."""
    rng = np.random.default_rng(2)
    z = rng.normal(1.0, 1.5, (60, 1))
    parts = [seen_of(z[:25]), seen_of(z[25:])]
    told = np.concatenate([part.outcome for part in judge(rule_of(), parts)])
    rejected = multipletests(t_tail(z.ravel(), np.inf), 0.05, method="holm")[0]
    np.testing.assert_array_equal(told.ravel() == FAIL, rejected)
    assert 0 < rejected.sum() < 60


def test_discoveries_agree_with_statsmodels():
    """Benjamini-Yekutieli rejects what statsmodels' fdr_by rejects."""
    rng = np.random.default_rng(3)
    p = np.concatenate([rng.uniform(size=80), rng.uniform(0, 0.003, size=20)])
    np.testing.assert_array_equal(broken(p, benjamini_yekutieli(p, 0.05)), multipletests(p, 0.05, method="fdr_by")[0])


def test_holm_leaves_undecided_out():
    """What is undecided takes no share of the risk."""
    p = np.array([0.02, np.nan, 0.9])
    level = holm(p, 0.05)
    assert np.isnan(level[1])
    assert level[0] == pytest.approx(0.025)


def test_series_share_only_among_their_lags():
    """``across: series`` gives every series the whole risk, shared among its lags."""
    rng = np.random.default_rng(4)
    z = rng.normal(1.2, 1.2, (8, 3))
    (told,) = judge(rule_of(across=("series",)), [seen_of(z)])
    expected = [multipletests(t_tail(row, np.inf), 0.05, method="holm")[0] for row in z]
    np.testing.assert_array_equal(told.outcome == FAIL, np.array(expected))
    assert 0 < np.sum(expected) < z.size


def test_several_ways_across_share_the_risk():
    """A list of ways gives each an equal part, and a cell fails when any of them says so."""
    (told,) = judge(rule_of(across=("batch", "series")), [seen_of([[2.5], [0.0], [0.0]])])
    assert told.risk_used[0, 0] == pytest.approx(0.025)
    assert told.outcome[0, 0] == FAIL


def test_undecided_keeps_its_reason():
    """A cell the measure cannot say anything about is undecided, whatever its observation."""
    (told,) = judge(rule_of(), [seen_of([[99.0], [0.0]], undecided=np.array([[0], [-1]]))])
    assert told.outcome.ravel().tolist() == [UNDECIDED, PASS]
    assert told.reasons[told.why[0, 0]] == "too short"
    assert np.isnan(told.p_value[0, 0])


def test_a_cell_without_a_value_is_undecided():
    """No observation is never a pass."""
    (told,) = judge(rule_of(), [seen_of([[np.nan], [0.0]])])
    assert told.outcome.ravel().tolist() == [UNDECIDED, PASS]
    assert "no value" in told.reasons[told.why[0, 0]]


def test_matters_turns_a_weak_pass_into_undecided_but_not_a_failure():
    """A pass that could not have seen the change that matters says nothing; a failure stands."""
    (told,) = judge(rule_of(matters=1.0), [seen_of([[0.0], [9.0]])])
    assert told.outcome.ravel().tolist() == [UNDECIDED, FAIL]
    (strong,) = judge(rule_of(matters=9.0), [seen_of([[0.0], [9.0]])])
    assert strong.outcome.ravel().tolist() == [PASS, FAIL]


def test_certified_is_the_other_way_round():
    """Where the p-value is that of 'nothing there', a small one keeps the rule."""
    (told,) = judge(rule_of(across=("series",)), [seen_of([[5.0], [0.0]], certify=True)])
    assert told.outcome.ravel().tolist() == [PASS, FAIL]


def test_exact_has_no_p_value():
    """Without sampling error the limit is the bound, and no p-value or risk is told."""
    observed = np.array([[3.0], [2.0]])
    exact = Exact(observed, np.full(observed.shape, 2.0))
    (told,) = judge(rule_of(), [seen_of(observed, reference=exact, exact=True)])
    assert told.outcome.ravel().tolist() == [FAIL, PASS]
    assert told.limit.ravel().tolist() == [2.0, 2.0]
    assert np.isnan(told.p_value).all()
    assert np.isnan(told.risk_used).all()


def test_two_witnesses_need_both():
    """The larger p-value counts, and so does the farther limit."""
    observed = np.array([[1.7], [3.4]])
    both = Larger(pivot(observed), pivot(observed, scale=2.0))
    (told,) = judge(rule_of(across=("series",)), [seen_of(observed, reference=both)])
    assert told.outcome.ravel().tolist() == [PASS, FAIL]
    np.testing.assert_allclose(told.limit, 2 * t_quantile(0.95, np.inf))


def test_detectable_change_is_found_with_probability_080():
    """A change of the size told as detectable breaks the limit in 80 of 100 cases."""
    (told,) = judge(rule_of(across=("series",)), [seen_of([[0.0]])])
    found = t_tail(told.limit - told.detectable, np.inf)
    np.testing.assert_allclose(found, 0.8, rtol=1e-9)
