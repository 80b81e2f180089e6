"""Every failing record has a likely cause, passing ones have none, and many failing series do not cost more."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import sercheck
from sercheck import causes, suspects
from sercheck.rulebook import load_rules
from sercheck.serial.arrays import Floats
from tests.causes import HOURLY, simulate

RULES = """
feed: meters
columns: {time: ts, series: key, values: [v]}
every: 1h
timezone: UTC
seasons: {day: 1D, week: 7D}
rules:
  - {name: doubles, measure: spacing, look: doubles, stays: {below: 1}}
  - {name: gaps, measure: spacing, look: gaps, stays: {below: 1}}
  - {name: complete, measure: completeness, stays: {above: 0.9}}
  - {name: few empty, measure: rate, of_rows: missing, stays: {below: 0.1}}
  - {name: fresh, measure: freshness, stays: {below: 36h}}
  - {name: spread, measure: spread, stays: {like: history}}
  - {name: surprises, measure: innovations, look: variance, stays: {like: history}}
"""
DAYS = 90
STAMPS = pd.date_range("2026-01-05", periods=24 * DAYS, freq="h", tz="UTC")
NOW = "2026-04-05T02:00:00Z"


ROOT = Path(__file__).parents[1]
BATCHES = ROOT / "demo_data" / "batches"
DEMO_NOW = "2026-01-20T06:00:00Z"


@pytest.fixture(scope="module")
def past() -> pd.DataFrame:
    """The history of the demo, read once."""
    return pd.read_csv(ROOT / "demo_data" / "history.csv.gz")


def frame(values: Floats) -> pd.DataFrame:
    """Long rows of a feed."""
    keys = np.repeat([f"m{row}" for row in range(len(values))], values.shape[1])
    return pd.DataFrame({"ts": np.tile(STAMPS, len(values)), "key": keys, "v": np.round(values, 3).ravel()})


@pytest.fixture(scope="module", params=[3, 1])
def parts(request: pytest.FixtureRequest) -> tuple[str, pd.DataFrame, pd.DataFrame]:
    """Rules, history and last day of three series, and of a feed of one."""
    rows = frame(simulate(HOURLY, request.param, len(STAMPS), np.random.default_rng(3)))
    rules = RULES
    if request.param == 1:
        rows, rules = rows.drop(columns="key"), rules.replace(" series: key,", "")
    new = rows["ts"] >= STAMPS[-24]
    return rules, rows[~new], rows[new]


def broken(batch: pd.DataFrame, what: str) -> pd.DataFrame:
    """The batch with something wrong."""
    lost = batch["ts"].dt.hour.between(5, 8)
    if what == "gaps":
        return batch[~lost]
    if what == "doubles":
        return pd.concat([batch, batch])
    if what == "shuffled":
        rng = np.random.default_rng(4)
        order = np.concatenate([24 * row + rng.permutation(24) for row in range(len(batch) // 24)])
        return batch.assign(v=batch["v"].to_numpy()[order])
    return batch


@pytest.mark.parametrize(
    ("what", "cause"),
    [
        ("healthy", None), ("gaps", causes.MISSING), ("doubles", causes.REPEATED), ("late", causes.LATE),
        ("shuffled", causes.WRONG_ORDER),
    ],
)  # fmt: skip
def test_every_failure_has_a_cause(parts, tmp_path, what, cause):
    """What failed has a cause with a support, of the clock too, and what did not has none."""
    rules, history, batch = parts
    (tmp_path / "rules.yaml").write_text(rules)
    now = NOW if what != "late" else "2026-05-05T02:00:00Z"
    verdict = sercheck.gate(tmp_path / "rules.yaml", broken(batch, what), history=history, as_of=now)
    failed = verdict.records["outcome"] == "fail"
    assert failed.any() == (cause is not None)
    told = verdict.records[["likely_cause", "cause_support"]]
    assert told[~failed].isna().all(axis=None)
    assert told[failed].notna().all(axis=None)
    assert [each["cause"] for each in verdict.likely_causes] == ([] if cause is None else [cause])
    if cause is not None:
        keys = batch["key"].unique().tolist() if "key" in batch else []
        assert verdict.likely_causes[0]["series"] == keys
        assert 0.9 < verdict.likely_causes[0]["support"] <= 1


def test_rules_that_name_their_cause_themselves(tmp_path):
    """Rules for rows that are missing, doubled or late say what it is; those that can fail either way do not."""
    more = """
  - {name: order, measure: spacing, look: disorder, stays: {below: 1}}
  - {name: off, measure: spacing, look: off_grid, stays: {below: 1}}
  - {name: not too many, measure: completeness, stays: {below: 1}}
  - {name: count, measure: count, per: 1D, stays: {like: history}}
"""
    (tmp_path / "rules.yaml").write_text(RULES + more)
    told = {rule.name: suspects.evident(rule) for rule in load_rules(tmp_path / "rules.yaml").rules}
    assert told == {
        "doubles": causes.REPEATED, "gaps": causes.MISSING, "complete": causes.MISSING, "few empty": causes.MISSING,
        "fresh": causes.LATE, "spread": None, "surprises": None, "order": causes.WRONG_ORDER, "off": None,
        "not too many": None, "count": None,
    }  # fmt: skip


# the first causes of each broken batch of the demo
DEMO = {
    "shuffled": {causes.WRONG_ORDER},
    "filled_forward": {causes.FILLED},
    "stuck": {causes.STUCK},
    "noise_instead": {causes.NOISE},
    "rows_twice": {causes.REPEATED},
    "smoothed": {causes.SMOOTHED},
    "flattened": {causes.FLATTENED},
    "slipped": {f"{causes.SLIPPED} by 1 step late"},
    "yesterday_again": {causes.AGAIN},
    "keys_swapped": {f"{causes.SWAPPED} with Kirsebakk", f"{causes.SWAPPED} with Lindetunet"},
}


@pytest.mark.parametrize("name", DEMO)
def test_the_likely_cause_of_the_demo_is_the_right_one(past, name):
    """Of every broken batch the first cause is what was done to it; swapped meters are told by each other's name."""
    verdict = sercheck.gate(ROOT / "rules" / "substation_heat.yaml", BATCHES / f"{name}.csv", past, as_of=DEMO_NOW)
    wanted = DEMO[name]
    told = verdict.likely_causes[: len(wanted)]
    assert {each["cause"] for each in told} == wanted
    assert all(each["support"] > 0.8 for each in told)
    if name == "keys_swapped":
        named = {series: each["cause"].split(" with ")[1] for each in told for series in each["series"]}
        assert named == {"Kirsebakk": "Lindetunet", "Lindetunet": "Kirsebakk"}
    assert sorted(path.stem for path in BATCHES.glob("*.csv")) == sorted([*DEMO, "healthy"])


def test_the_rest_of_many_gets_the_joint_cause(tmp_path, monkeypatch):
    """Of many failing series the clearest are looked at, and the others get the cause that these have together."""
    monkeypatch.setattr(suspects, "MOST", 4)
    rows = frame(simulate(HOURLY, 10, len(STAMPS), np.random.default_rng(5)))
    new = rows["ts"] >= STAMPS[-24]
    (tmp_path / "rules.yaml").write_text(RULES)
    batch = broken(rows[new], "shuffled")
    calls = []
    look = suspects.likely_causes

    def counted(panel, keys, *, shared):
        calls.append(len(keys))
        return look(panel, keys=keys, shared=shared)

    monkeypatch.setattr(suspects, "likely_causes", counted)
    verdict = sercheck.gate(tmp_path / "rules.yaml", batch, history=rows[~new], as_of=NOW)
    assert calls == [4]
    (told,) = verdict.likely_causes
    assert told["cause"] == causes.WRONG_ORDER
    assert len(told["series"]) > 6
    assert told["support"] > 0.8


def test_what_holds_comes_before_what_is_noted(tmp_path):
    """A cause of a rule that only notes is told after the one that holds, whatever its support."""
    rows = frame(simulate(HOURLY, 3, len(STAMPS), np.random.default_rng(3)))
    new = rows["ts"] >= STAMPS[-24]
    (tmp_path / "rules.yaml").write_text(RULES.replace("{below: 36h}}", "{below: 36h}, otherwise: note}"))
    batch = broken(rows[new], "shuffled")
    verdict = sercheck.gate(tmp_path / "rules.yaml", batch, history=rows[~new], as_of="2026-05-05T02:00:00Z")
    assert [told["cause"] for told in verdict.likely_causes] == [causes.WRONG_ORDER, causes.LATE]
