"""Closed days and the clock that a season follows: from the rule file through archive and gate to what is judged."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from sercheck.engine import measure_block
from sercheck.taught import teach
from sercheck.verdict import Verdict, gate

RULES = """
feed: trams
columns: {time: t, values: [x]}
every: 1h
seasons: {day: 1D}
batch_every: 1D
rules:
  - {name: clock, measure: season_phase, season: day, stays: {like: history}, false_alarm: 0.01}
  - {name: strength, measure: seasonal_lag, season: day, stays: {like: history}, false_alarm: 0.01}
  - {name: level, measure: level, stays: {like: history}, false_alarm: 0.01}
  - {name: spread, measure: spread, stays: {like: history}, false_alarm: 0.01}
"""


def trams(first: str, days: int, seed: int, zone: str = "Europe/Oslo") -> pd.DataFrame:
    """Passengers by hours of UTC; people get up by the clock of the zone."""
    stamps = pd.date_range(first, periods=24 * days, freq="h", tz="UTC")
    hour = stamps.tz_convert(zone).hour.to_numpy()
    rng = np.random.default_rng(seed)
    noise = np.zeros(len(stamps) + 20)
    for step, shock in enumerate(rng.normal(0, 2, len(noise))):
        noise[step] = 0.5 * noise[step - 1] + shock
    x = 100 + 30 * np.sin(2 * np.pi * hour / 24) + 15 * np.cos(4 * np.pi * hour / 24) + noise[20:]
    return pd.DataFrame({"t": stamps.strftime("%Y-%m-%dT%H:%M:%SZ"), "x": x})


def judged(folder: Path, rules: str, history: pd.DataFrame, batch: pd.DataFrame) -> Verdict:
    """The batch against the history in the archive."""
    folder.mkdir()
    (folder / "rules.yaml").write_text(rules)
    teach(folder / "rules.yaml", history, folder / "store")
    return gate(folder / "rules.yaml", batch, store=folder / "store", as_of="2026-12-01")


def outcomes(verdict: Verdict) -> dict[str, str]:
    """Outcome by rule."""
    return {row["rule"]: row["outcome"] for row in verdict.table.rows()}


@pytest.fixture
def grids(monkeypatch) -> list:
    """The grids that are judged."""
    seen: list = []

    def looked(grid, run):
        seen.append(grid)
        return measure_block(grid, run)

    monkeypatch.setattr("sercheck.blocks.measure_block", looked)
    return seen


def test_a_cycle_that_follows_another_clock_than_the_stamps(tmp_path, grids):
    """Stamps in UTC, people on Oslo's clock: the day after the clocks change is a day as ever only by that clock."""
    history, batch = trams("2025-12-20", 100, seed=1), trams("2026-03-30", 1, seed=2)
    plain = judged(tmp_path / "plain", RULES, history, batch)
    told = judged(tmp_path / "told", RULES + "season_clock: Europe/Oslo\n", history, batch)
    assert outcomes(plain)["clock"] == "fail"
    assert set(outcomes(told).values()) == {"pass"}
    local = pd.to_datetime(grids[-1].axis.stamps, utc=True).tz_convert("Europe/Oslo").hour
    assert grids[-1].axis.phases["day"].tolist() == local.tolist()
    assert len(grids[-1].axis) == 101 * 24  # no hour is skipped or doubled


def test_a_feed_on_a_fixed_clock_east_of_utc(tmp_path):
    """Stamps without an offset on a clock that never changes, people on Oslo's: read by `timezone`, foretold by
    `season_clock`.
    """
    history, batch = trams("2025-12-20", 100, seed=1), trams("2026-03-30", 1, seed=2)
    for frame in (history, batch):
        shown = pd.to_datetime(frame["t"]).dt.tz_convert("Etc/GMT-1").dt.tz_localize(None)
        frame["t"] = shown.dt.strftime("%Y-%m-%d %H:%M")
    batch = pd.concat([history[-1:], batch])[:-1].reset_index(drop=True)
    batch["t"] = pd.date_range("2026-03-30", periods=24, freq="h").strftime("%Y-%m-%d %H:%M")
    verdict = judged(
        tmp_path / "fixed", RULES + "timezone: Etc/GMT-1\nseason_clock: Europe/Oslo\n", history[:-1], batch
    )
    assert verdict.facts.first == "2026-03-29T23:00:00Z"
    assert set(outcomes(verdict).values()) == {"pass"}


def test_closed_days_are_undecided_and_stay_out_of_history(tmp_path, grids):
    """On a holiday nothing that needs a profile is judged; holidays of history leave the limits as if they had not
    been.
    """
    history, batch = trams("2025-12-20", 100, seed=1, zone="UTC"), trams("2026-03-30", 1, seed=2, zone="UTC")
    holidays = ["2025-12-25", "2025-12-26", "2026-01-01", "2026-03-24", "2026-03-29"]
    quiet = history["t"].str[:10].isin(holidays)
    history.loc[quiet, "x"] = 3.0
    closed = RULES + f"closed_days: [{', '.join(holidays)}]\n"
    told = judged(tmp_path / "told", closed, history, batch)
    assert grids[-1].axis.closed.sum() == 5 * 24
    missing = judged(tmp_path / "missing", closed, history[~quiet], batch)
    assert set(outcomes(told).values()) == {"pass"}
    for name in ("limit", "p_value"):
        assert told.table[name].tolist() == pytest.approx(missing.table[name].tolist())
    rest = judged(tmp_path / "rest", closed.replace("29]", "29, 2026-03-30]"), history, batch)
    assert {outcomes(rest)[rule] for rule in ("clock", "strength", "level", "spread")} == {"undecided"}


def test_learning_says_nothing_of_closed_days(tmp_path):
    """A holiday at rest is neither a broken stretch nor stuck, one without rows no gap; without the list they are."""
    history = trams("2025-12-20", 100, seed=1, zone="UTC")
    rest, empty = history["t"].str.startswith("2026-01-01"), history["t"].str.startswith("2026-01-06")
    history.loc[rest, "x"] = 3.0
    for name, more, wanted in (
        ("closed", "closed_days: [2026-01-01, 2026-01-06]\n", set()),
        ("open", "", {"gap", "broken stretch", "stuck"}),
    ):
        (tmp_path / f"{name}.yaml").write_text(RULES + more)
        told = teach(tmp_path / f"{name}.yaml", history[~empty], tmp_path / name)
        assert {finding.what for finding in told.lessons.findings} == wanted
