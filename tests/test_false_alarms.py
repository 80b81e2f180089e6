"""How often healthy batches fail at the gate: the small seeded version of ``python -m tests.calibration``."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from calibration import RISKS, as_text, count, groups, rated, too_many
from cells import ALONE, DAY, LIKE, PAST, PROCESSES, UNASKED, WEEK, Group
from known_weak import KNOWN
from processes import SLOPE, make

from sercheck import measures
from sercheck.reference import Pivot
from sercheck.serial import rates
from sercheck.serial.clusters import Clusters
from sercheck.serial.risk import t_tail

FEW = ("white", "AR .6", "AR .9", "MA(1)", "profile + AR .6", "seasonal AR, declared")
MEASURES = ("level", "autocorrelation", "seasonal_lag", "spread", "rate")
WINDOWS = 12
SERIES = 240
FIVE_AND_ONE = RISKS[:2]

NAIVE = {
    "level": ("AR .6", "AR .9", "profile + AR .6"),
    "spread": ("AR .9",),
    "rate": ("AR .9",),
    "autocorrelation 6": ("AR .9",),
    "seasonal_lag": ("AR .9",),
    "seasonal_lag, amplitude": ("profile + AR .6",),
}
"""Where limits for independent rows fail: variances that memory widens. (At lag 1 they are too wide rather.)"""

MUTE = ("spread", f"above {ALONE}")
"""What is undecided wherever a season is declared: a window's own cycle takes part of the spread with it."""

OTHERS = (
    "quantile", "partial_autocorrelation", "season_phase", "trend", "jump", "distribution", "cross_correlation",
    "effective_size", "stationarity", "innovations", "roughness", "repeats", "replay", "count", "completeness",
)  # fmt: skip
"""The measures beside them; a smaller table of their own."""
FEWER = (
    Group("AR .9", 168, WINDOWS), Group("AR .6", 336, 0), Group("profile + AR .6", 168, WINDOWS),
    Group("GARCH, AR .6", 168, WINDOWS), Group("rounded AR .6", 168, WINDOWS),
    Group("AR .6, clusters lost", 168, WINDOWS),
)  # fmt: skip
FEWER_SERIES = 100


def judged(some: Iterable[Group], risks: Iterable[float], series: int, measures: Iterable[str] = ()) -> pd.DataFrame:
    """The table of these groups."""
    counts = pd.concat([count(group, risks, series, tuple(measures)) for group in some], ignore_index=True)
    return rated(counts)


@pytest.fixture(scope="module")
def table() -> pd.DataFrame:
    """Every cell with its rates and the naive ones."""
    some = [Group(process, n, past) for process in FEW for n in (168, 336) for past in (0, WINDOWS)]
    return judged(some, FIVE_AND_ONE, SERIES, MEASURES)


def told(cells: pd.DataFrame) -> str:
    """Cells as a message."""
    return "\n" + as_text(cells)


@pytest.fixture(scope="module")
def others() -> pd.DataFrame:
    """The cells of the other measures."""
    return judged(FEWER, FIVE_AND_ONE, FEWER_SERIES, OTHERS)


@pytest.mark.parametrize("name", PROCESSES)
def test_the_true_values_are_true(name):
    """What the bounds are set to is what the simulated series have, so that the null hypothesis holds exactly."""
    process = PROCESSES[name]
    x = make(process.kind, 99, 600, 1344)
    if process.kind == "walk":
        x = np.diff(x, axis=1)
        assert abs(x.mean()) < 0.01
        assert abs(x.std() - 1) < 0.01
        return
    if process.kind == "trend":
        x = x - SLOPE * np.arange(x.shape[1])
    assert abs(np.nanmean(x) - process.mean) < 0.03 * process.deviation
    assert abs(np.isnan(x).mean() - process.lost) < 0.005
    if process.tenth is not None:
        assert abs((x > process.tenth).sum() / (~np.isnan(x)).sum() - process.share) < 0.004
    weeks = np.nanmean(x.reshape(-1, WEEK), axis=0)
    z = x - (np.tile(weeks, x.shape[1] // WEEK) if process.season == "fixed" else process.mean)
    assert abs(np.nanstd(z) / process.deviation - 1) < 0.03
    if name != "lognormal of AR .6" and process.location is not None:
        assert abs(np.nanmedian(x) - process.location) < 0.05 or process.season == "fixed"
    for lag in (1, 2, 6, DAY):
        r = np.nanmean(z[:, lag:] * z[:, :-lag]) / np.nanvar(z)
        assert abs(r - process.rho(lag)) < 0.02


def test_every_measure_is_asked():
    """No measure is without cells of its own, unless a reason is given."""
    asked = {question.rule(PROCESSES["white"])["measure"] for question in Group("white", 168, 0).questions.values()}
    assert asked | set(UNASKED) == set(measures.names())
    assert {*MEASURES, *OTHERS} == asked


def test_healthy_batches_fail_no_more_often_than_asked(table):
    """No cell fails more often than its target and chance allow, and hardly any record is left undecided."""
    print(told(table))
    asked = table[table["most"].notna() & ~mute(table)]
    assert len(asked) > 400
    assert not too_many(asked).any(), told(asked[too_many(asked)])
    share = asked["judged"] / asked["records"]
    assert (share > 0.95).all(), told(asked[share <= 0.95])


def test_the_rates_hold_over_all_processes_together(table):
    """Summed over processes and lengths, chance allows little beyond the target; and no rule is merely deaf."""
    asked = table[table["most"].notna()]
    keys = ["question", "asked", "risk"]
    pooled = asked.groupby(keys, sort=False)[["failed", "judged", "most"]].agg(
        {"failed": "sum", "judged": "sum", "most": "max"}
    )
    assert not too_many(pooled).any(), str(pooled[too_many(pooled)])
    pooled = pooled[pooled.index.get_level_values("risk") == 0.05]
    rate = pooled["failed"] / pooled["judged"]
    careful = pooled.index.get_level_values("question") == "rate"  # careful by design
    assert (rate[~careful] > 0.02).all(), str(rate)
    assert (rate[careful] > 0.005).all(), str(rate)


def mute(cells: pd.DataFrame) -> pd.Series:
    """The cells that are undecided by what the rule file declares."""
    seasons = cells["process"].map(lambda name: PROCESSES[name].season is not None)
    return (cells["question"] == MUTE[0]) & (cells["asked"] == MUTE[1]) & seasons


def test_what_a_declared_season_leaves_unsaid_is_undecided(table):
    """All such records are undecided, none of them fails."""
    cells = table[mute(table)]
    assert len(cells) == 4
    assert (cells["undecided"] == 1).all()
    assert (cells["failed"] == 0).all()


def breaks(cells: pd.DataFrame) -> pd.DataFrame:
    """The cells in which the limits for independent rows are known to be too narrow."""
    known = [cells["question"].eq(question) & cells["process"].isin(where) for question, where in NAIVE.items()]
    # memory scatters a correlation, and its bias takes it downwards: too low is found too often, too high less
    narrow = ~(cells["question"].isin(["autocorrelation 6", "seasonal_lag"]) & cells["asked"].str.startswith("below"))
    return cells[np.any(known, axis=0) & narrow & cells["most"].notna()]


def test_limits_for_independent_rows_would_fail(table):
    """Where rows depend on each other, the naive limits are broken by far more healthy batches than asked."""
    cells = breaks(table)
    assert set(cells["question"]) == set(NAIVE)
    enough = too_many(cells, "naive", "compared")
    assert enough.all(), told(cells[~enough])


def test_a_method_swapped_for_its_naive_form_is_noticed(monkeypatch):
    """With the judgement of independent rows in place of the measures' own, the table shows misses."""
    own = Pivot.p_value

    def naive(pivot: Pivot, side):
        if pivot.naive_scale is None:
            return own(pivot, side)
        plain = pivot.naive_to_unit is not None  # limits on the scale of what is observed
        at = pivot.to_unit(pivot.statistic) if plain else pivot.statistic
        centre = pivot.centre if pivot.naive_centre is None else pivot.naive_centre
        t = (at - centre) / pivot.naive_scale
        return t_tail(t if side == "upper" else -t, np.inf)

    monkeypatch.setattr(Pivot, "p_value", naive)
    monkeypatch.setattr(
        rates, "clusters", lambda marks, **_: Clusters(np.ones(len(marks)), np.full(len(marks), np.inf))
    )
    some = [Group("AR .9", 168, WINDOWS), Group("AR .9", 336, 0), Group("profile + AR .6", 168, WINDOWS)]
    cells = breaks(judged(some, FIVE_AND_ONE, SERIES, MEASURES))
    missed = too_many(cells)
    assert set(cells["question"][missed]) == set(NAIVE), told(cells[~missed])
    assert missed.mean() > 0.9, told(cells[~missed])  # a rate without history has a second guard


class Naive:
    """A reference as if rows were independent: fails where the observation is beyond the naive limit."""

    def __init__(self, own, observed):
        self.own, self.observed = own, observed

    def __getattr__(self, name):
        return getattr(self.own, name)

    def p_value(self, side):
        own = self.own.p_value(side)
        p = np.ones_like(own)
        for risk in (0.3, 0.05, 0.025, 0.01, 0.005, 1e-3, 1e-5):
            limit = self.own.naive_limit(side, np.full(own.shape, risk))
            beyond = self.observed >= limit if side == "upper" else self.observed <= limit
            p[beyond] = risk
        return np.where(np.isnan(own) | np.isnan(limit), own, p)


NAIVE_OTHERS = {
    "quantile", "trend", "jump", "distribution", "cross_correlation of a part", "innovations' variance", "roughness",
    "completeness",
}  # fmt: skip
"""Questions whose naive form a hundred series show to be wrong.

The others' has no limit of its own (exact laws, significances), or is wrong by less than so few series show: partial
autocorrelations, whiteness, counts.
"""
SWAPPED = tuple(Group(name, 168, WINDOWS) for name in ("AR .9", "GARCH, AR .6", "AR .6, clusters lost"))


def test_the_other_measures_fail_no_more_often_than_asked(others):
    """No cell of the other measures misses its target by more than chance, and most are answered."""
    print(told(others))
    asked = others[others["most"].notna()]
    assert not too_many(asked).any(), told(asked[too_many(asked)])
    answered = asked.groupby("question")["judged"].sum()
    assert (answered > 0).all(), str(answered)


def test_each_measure_swapped_for_its_naive_form_is_noticed(monkeypatch):
    """With the limits of independent rows in place of any measure's own, the table shows that measure's misses."""

    def swapped(own):
        def run(self, panel, question):
            seen = own(self, panel, question)
            sides = {name: getattr(seen, name) for name in ("upper", "lower")}
            naive = {name: side and Naive(side, seen.observed) for name, side in sides.items()}
            return seen if seen.exact else replace(seen, **naive)

        return run

    for kind in {type(measures.get(name)) for name in measures.names()}:
        monkeypatch.setattr(kind, "run", swapped(kind.run))
    questions = Group("AR .9", 168, WINDOWS).questions
    asked = {questions[name].rule(PROCESSES["AR .6"])["measure"] for name in NAIVE_OTHERS}
    cells = judged(SWAPPED, FIVE_AND_ONE, FEWER_SERIES, asked)
    missed = set(cells["question"][cells["most"].notna() & too_many(cells)])
    print(missed, told(cells[too_many(cells)]))
    assert missed >= NAIVE_OTHERS, NAIVE_OTHERS - missed


def test_a_day_against_ninety_fails_no_more_often_than_asked():
    """A day's batch is compared with the days before it, and healthy ones seldom fail."""
    cells = judged([Group("profile + AR .6", DAY, PAST)], FIVE_AND_ONE, SERIES)
    print(told(cells))
    assert set(cells["asked"]) == {LIKE}
    assert (cells["judged"] / cells["records"] > 0.95).all()
    assert not too_many(cells).any(), told(cells[too_many(cells)])


@pytest.mark.calibration
@pytest.mark.parametrize("group", list(groups()), ids=lambda group: f"{group.process}-{group.n}-{group.windows}")
def test_calibration(group):
    """20,000 healthy batches of each process, down to a risk of .001: nothing misses but what is known to."""
    cells = judged([group], RISKS, 20_000)
    print(told(cells))
    wrong = cells["mark"] == "MISSES"
    assert not wrong.any(), told(cells[wrong])


def test_what_is_named_as_weak_is_asked():
    """Every weakness is one of questions and processes that there are."""
    for weak in KNOWN:
        for process in weak.processes:
            assert set(weak.questions) <= set(Group(process, 168, 0).questions) | {"steps"}
            assert weak.says
