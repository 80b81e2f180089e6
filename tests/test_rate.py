"""The share of missing, zero, repeated or outlying rows."""

from dataclasses import replace
from functools import lru_cache

import numpy as np
import pytest
from cells import PROCESSES
from clusters import CLUSTERS, markov
from processes import LIKE, SEASONAL, agrees, look, make, p_values, panel
from pydantic import ValidationError
from scipy import stats

from sercheck.judge import FAIL, PASS, UNDECIDED, Seen, judge
from sercheck.measure import Question, Stays
from sercheck.measures.rate import Fields, Rate, marked
from sercheck.rulebook.compiled import Rule

NAN = np.nan


@pytest.mark.parametrize(
    ("of_rows", "wanted"),
    [
        ("zero", [1, NAN, 0, 0, 0, 1]),
        ("equal_to_last", [NAN, NAN, NAN, 1, 0, 0]),
        ({"outside": [0, 4]}, [0, NAN, 0, 0, 1, 0]),
        ({"above": 4}, [0, NAN, 0, 0, 1, 0]),
        ({"below": 4}, [1, NAN, 0, 0, 0, 1]),
    ],
)
def test_which_rows_are_counted(of_rows, wanted):
    """Rows of the kind are marked among the rows that have a value; a bound itself is inside."""
    got = marked(panel([0.0, NAN, 4, 4, 5, 0], 3), Fields(of_rows=of_rows))
    np.testing.assert_array_equal(got, [wanted])


def test_missing_rows_are_delivered_rows_without_a_value():
    """A row that did not come is no missing value: only delivered rows are counted."""
    values = panel([1.0, NAN, NAN, 2.0], 0)
    delivered = np.array([[True, True, False, True]])
    got = marked(replace(values, delivered=delivered), Fields(of_rows="missing"))
    np.testing.assert_array_equal(got, [[0, 1, NAN, 0]])


@pytest.mark.parametrize(
    "of_rows", ["empty", {"outside": [4, 0]}, {"outside": [1]}, {"above": NAN}, {"above": 1, "below": 0}, {}, 3]
)
def test_bad_kinds_are_refused(of_rows):
    """An unknown kind, a range upside down and numbers that are none are refused."""
    with pytest.raises(ValidationError):
        Fields(of_rows=of_rows)


def zeros(marks):
    """Readings that are zero where marked."""
    return np.where(marks == 1, 0.0, 1.0 + np.arange(marks.shape[1]) % 7)


def test_independent_rows_are_judged_by_the_exact_binomial_test():
    """With long history and no clusters the p-value is close to scipy's exact test, and equal where τ is one."""
    rng = np.random.default_rng(1)
    x = zeros((rng.random((200, 24 * 40)) < 0.1).astype(float))
    seen = look(Rate(), x, 24 * 39, Stays("below", high=0.1), of_rows="zero")
    p = seen.upper.p_value("upper")[:, 0]
    exact = [stats.binomtest(round(k * 24), 24, 0.1, alternative="greater").pvalue for k in seen.observed[:, 0]]
    alone = seen.n_eff[:, 0] == 24
    assert alone.sum() > 20
    np.testing.assert_allclose(p[alone], np.array(exact)[alone], rtol=1e-9)


@pytest.mark.parametrize(
    "stays", [LIKE, Stays("below", high=0.1), Stays("above", low=0.1), Stays("between", 0.05, 0.2)]
)
@pytest.mark.parametrize("past", [0, 96, 960])
@pytest.mark.parametrize("of_rows", ["zero", "missing"])
def test_limit_and_p_value_agree(stays, past, of_rows):
    """The observation is at the limit or beyond exactly when the p-value is within the risk."""
    x = zeros(markov(np.random.default_rng(2), 300, past + 96, 0.1, 3))
    if of_rows == "missing":
        values = panel(np.where(x == 0, NAN, x), past)
        values = replace(values, delivered=np.ones(x.shape, dtype=bool))
        seen = Rate().run(values, Question(Fields(of_rows="missing"), stays, 0.01))
    else:
        seen = look(Rate(), x, past, stays, of_rows="zero")
    agrees(seen)


@pytest.mark.parametrize("name", ["Markov .05 in eights", "Markov .2 in fives", "latent .1 at .6"])
@pytest.mark.parametrize("stays", [LIKE, "literal"])
def test_healthy_clusters_keep_the_risk(name, stays):
    """A healthy feed whose zeros come in bursts fails no more than 1.6 times as often as asked."""
    share, generate = CLUSTERS[name]
    x = zeros(generate(np.random.default_rng(3), 2500, 768 + 96))
    bound = stays if stays is LIKE else Stays("between", share, share)
    p = p_values(look(Rate(), x, 768, bound, of_rows="zero"))
    assert np.mean(p <= 0.05) <= 0.08
    assert np.mean(p <= 0.01) <= 0.016


def test_a_real_rise_is_found():
    """A share of five in a hundred that rises to twenty-five is found in a week of hours."""
    rng = np.random.default_rng(4)
    marks = np.hstack([rng.random((300, 2016)) < 0.05, rng.random((300, 168)) < 0.25]).astype(float)
    for stays in (LIKE, Stays("below", high=0.05)):
        assert np.mean(p_values(look(Rate(), zeros(marks), 2016, stays, of_rows="zero")) <= 0.01) >= 0.98


@lru_cache(maxsize=1)
def healthy(name, n, past):
    """2,000 series of a process, simulated once for several questions."""
    return make(PROCESSES[name].kind, [6, n], 2000, (past + 1) * n)


def above_the_tenth(name, n, stays, lengths, shift=0.0, past=20):
    """P-values of 2,000 series of a process whose window is shifted by so many standard deviations."""
    process = PROCESSES[name]
    x = healthy(name, n, past).copy()
    x[:, past * n :] += shift * process.deviation
    return p_values(look(Rate(), x, past * n, stays, lengths=lengths, of_rows={"above": process.tenth}))


@pytest.mark.parametrize(
    ("n", "past", "stays"),
    [
        *((168, 20, stays) for stays in (LIKE, Stays("below", high=0.1), Stays("above", low=0.1))),
        *((n, 0, stays) for n in (168, 336) for stays in (Stays("below", high=0.1), Stays("above", low=0.1))),
    ],
)
def test_a_cycle_that_evolves_keeps_the_risk(n, past, stays):
    """Marks that follow yesterday's are clustered too: within 1.6 times the risk, which the steps alone break."""
    p = above_the_tenth("seasonal AR", n, stays, SEASONAL, past=past)
    another = above_the_tenth("seasonal AR", n, stays, {"year": 8766}, past=past)
    np.testing.assert_array_equal(p, above_the_tenth("seasonal AR", n, stays, {}, past=past))  # a day by itself
    for risk in (0.05, 0.01):
        most = stats.binom.ppf(0.999, len(p), 1.6 * risk) / len(p)
        assert np.mean(p <= risk) <= most
        if past or stays.high is not None:  # too few are not told without history
            assert np.mean(another <= risk) > (most if past else 2 * np.mean(p <= risk))


@pytest.mark.parametrize("name", ["white", "AR .6"])
def test_a_season_costs_little_power(name):
    """Where the cycle has no memory, a rise is found nearly as often as with a cycle too long to look at."""
    below = Stays("below", high=0.1)
    for stays, past, loss in ((LIKE, 20, 0.08), (below, 20, 0.08), (below, 0, 0.15)):
        found, bare = (
            above_the_tenth(name, 168, stays, lengths, 0.4, past) <= 0.01 for lengths in (SEASONAL, {"year": 8766})
        )
        assert bare.mean() > 0.1
        assert found.mean() > bare.mean() - loss


@pytest.mark.parametrize("past", [960, 0])
@pytest.mark.parametrize("stays", [LIKE, Stays("between", 0.05, 0.2)])
def test_limit_and_p_value_agree_with_a_season(stays, past):
    """With a season declared the limit and the p-value tell the same too, with rows missing."""
    x = make("seasonal_ar", 8, 200, past + 240)
    x[np.random.default_rng(9).random(x.shape) < 0.1] = NAN
    agrees(look(Rate(), x, past, stays, lengths=SEASONAL, of_rows={"above": 1.7}))


def test_one_burst_is_one_event():
    """A single burst in a clean feed is told as one event, not as many rows: its p-value is near half of n/(n + N)."""
    marks = np.zeros((1, 24 * 91))
    marks[0, -12:-2] = 1
    p = p_values(look(Rate(), zeros(marks), 24 * 90, of_rows="zero", risk=0.1))[0]
    assert 0.001 < p < 0.02
    short = look(Rate(), zeros(marks), 24 * 90, Stays("below", high=0.01), of_rows="zero")
    assert short.n_eff[0, 0] < 4


def judged(x, past, stays, risk=0.01):
    """Outcomes and reasons of the judge."""
    seen = look(Rate(), x, past, stays, risk, of_rows="zero")
    rule = Rule("r", "rate", Fields(of_rows="zero"), stays, ("kwh",), false_alarm=risk)
    keys = np.array([str(place) for place in range(len(x))], dtype=object)
    (result,) = judge(rule, [Seen(0, keys, "kwh", seen, 0, 1)])
    return result.outcome[:, 0], [result.reasons[why] if why >= 0 else "" for why in result.why[:, 0]]


def test_a_pass_on_few_expected_rows_is_undecided_and_a_failure_stands():
    """With 24 rows at 5 % a clean window says nothing, and a window full of zeros still fails."""
    marks = (np.random.default_rng(5).random((2, 24 * 30)) < 0.04).astype(float)
    marks[0, -24:], marks[1, -24:-8] = 0.0, 1.0
    outcome, why = judged(zeros(marks), 24 * 29, Stays("below", high=0.05))
    np.testing.assert_array_equal(outcome, [UNDECIDED, FAIL])
    assert "fewer than 3 effective rows" in why[0]
    assert "60 rows" in why[0]
    assert "`below: 0` asks for none at all and is exact" in why[0]
    assert "`n_eff`" in why[0]
    assert "`repeats`" in why[0]


def test_bounds_of_none_and_all_are_exact():
    """`below: 0` passes without such a row and fails with the first one."""
    marks = np.zeros((2, 240))
    marks[1, -1] = 1
    outcome, _ = judged(zeros(marks), 216, Stays("below", high=0.0))
    np.testing.assert_array_equal(outcome, [PASS, FAIL])


def test_a_dead_feed_fails_without_history():
    """A batch of zeros alone fails a bound of 5 %."""
    outcome, _ = judged(np.zeros((1, 24)), 0, Stays("below", high=0.05))
    assert outcome[0] == FAIL


@pytest.mark.parametrize(
    ("start", "wipe", "reason"),
    [(0, slice(0, 0), "no history"), (200, slice(200, None), "usable value"), (200, slice(0, 200), "longer --history")],
)
def test_what_cannot_be_compared_is_undecided(start, wipe, reason):
    """Without history, without rows in it or in the window, nothing is said."""
    x = np.ones((1, 224))
    x[:, wipe] = NAN
    seen = look(Rate(), x, start, of_rows="zero")
    assert reason in seen.reasons[seen.undecided[0, 0]]


@pytest.mark.parametrize(
    ("of_rows", "sides"), [("missing", 1), ({"outside": [0, 9]}, 1), ("zero", 2), ({"above": 1}, 2)]
)
def test_only_more_missing_rows_are_a_fault(of_rows, sides):
    """Like history, missing and outlying rows are looked at for too many only, the others both ways."""
    seen = look(Rate(), np.ones((1, 240)), 216, of_rows=of_rows)
    assert (seen.upper is not None) + (seen.lower is not None) == sides
