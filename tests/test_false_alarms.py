"""How often healthy batches fail at the gate: the small seeded version of ``python -m tests.calibration``."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
import pandas as pd
import pytest
from calibration import RISKS, as_text, count, groups, rated, too_many
from cells import ALONE, DAY, LIKE, PAST, PROCESSES, Group
from processes import make

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

KNOWN = {
    ("level", f"above {ALONE}", "lognormal of AR .6", 336),
    *(("partial_autocorrelation 2", f"above {ALONE}", "lognormal of AR .6", n) for n in (168, 336)),
}
"""Cells that miss their targets: lognormal rows, the window alone, which the records' ``assumes`` exclude (no long tail
on one side; a linear process). A mean fails .098/.035/.009 of them, a second partial autocorrelation .099/.030/.005; a
logarithm first, or history, mends both."""


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


@pytest.mark.parametrize("name", PROCESSES)
def test_the_true_values_are_true(name):
    """What the bounds are set to is what the simulated series have, so that the null hypothesis holds exactly."""
    process = PROCESSES[name]
    x = make(process.kind, 99, 600, 1200)
    assert abs(x.mean() - process.mean) < 0.03 * process.deviation
    if process.tenth is not None:
        assert abs((x > process.tenth).mean() - 0.1) < 0.004
    hours = x.reshape(-1, DAY).mean(axis=0)
    z = x - (np.tile(hours, 1200 // DAY) if process.season == "fixed" else process.mean)
    assert abs(z.std() / process.deviation - 1) < 0.03
    if name != "lognormal of AR .6":
        assert abs(np.median(x) - process.location) < 0.05 or process.season == "fixed"
    for lag in (1, 2, 6, DAY):
        r = (z[:, lag:] * z[:, :-lag]).mean() / z.var()
        assert abs(r - process.rho(lag)) < 0.02


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
    keys = list(zip(cells["question"], cells["asked"], cells["process"], cells["n"], strict=True))
    wrong = too_many(cells) & ~np.array([key in KNOWN for key in keys])
    assert not wrong.any(), told(cells[wrong])
