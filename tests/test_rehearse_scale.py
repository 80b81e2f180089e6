"""Twelve weeks of fifty hourly series with twenty faults rehearse in three minutes of wall time on two cores."""

from __future__ import annotations

import json
import resource
import subprocess
import time

import numpy as np
import pandas as pd
import pytest

from tests.gate_runs import command
from tests.processes import make

FAULTS = (
    "shuffled", "sorted", "reversed", "noise", "rows twice", "filled forward", "interpolated", "smoothed", "stuck",
    "clock slipped", "cycle lost", "interleaved", "differenced", "running total", "sign turned", "unit changed",
    "level shifted", "batch again", "season gone", "keys swapped",
)  # fmt: skip
SERIES, TEACH, WEEKS = 50, 90, 12
RULES = """
feed: fifty
columns: {time: t, series: key, values: [v]}
every: 1h
seasons: {day: 1D, week: 7D}
batch_every: 1D
false_holds: 1 per 90D
rules:
  - {name: level, measure: level, stays: {like: history}, otherwise: note}
  - {name: spread, measure: spread, stays: {like: history}}
  - {name: innovations, measure: innovations, look: variance, stays: {like: history}}
  - {name: amplitude, measure: seasonal_lag, season: day, stays: {like: history}}
  - {name: phase, measure: season_phase, season: day, across: together, stays: {like: history}}
  - {name: steps, measure: autocorrelation, lag: 1, after: difference, stays: {like: history}}
  - {name: run, measure: repeats, look: run, stays: {like: history}}
  - {name: share, measure: repeats, look: share, stays: {like: history}}
  - {name: replay, measure: replay, stays: {like: history}}
  - {name: identity, measure: identity, window: 2D, stays: {like: history}}
  - {name: gaps, measure: spacing, look: gaps, stays: {below: 1}}
  - {name: delivered, measure: completeness, stays: {above: 0.9}}
"""


@pytest.mark.scale
def test_twelve_weeks_of_fifty_series_and_twenty_faults(tmp_path):
    """Eighty-four judged days after ninety that teach, at the usual settings; wall time and CPU are printed."""
    steps = 24 * (TEACH + 7 * WEEKS)
    x = make("seasonal", 3, SERIES, steps) * np.random.default_rng(4).uniform(0.5, 2, size=(SERIES, 1)) + 40
    stamps = pd.date_range("2025-01-06", periods=steps, freq="h", tz="UTC").strftime("%Y-%m-%dT%H:%M:%SZ")
    pd.DataFrame({"t": np.tile(stamps, SERIES), "key": np.repeat([f"s{k:02d}" for k in range(SERIES)], steps),
                  "v": x.ravel().round(2)}).to_parquet(tmp_path / "history.parquet")  # fmt: skip
    (tmp_path / "rules.yaml").write_text(RULES)
    begun, used = time.perf_counter(), resource.getrusage(resource.RUSAGE_CHILDREN)
    files = (str(tmp_path / "rules.yaml"), str(tmp_path / "history.parquet"))
    asked = ("--faults", ",".join(FAULTS), "--workers", "2", "--format", "json")
    call = command("rehearse", *files, *asked)
    ended = subprocess.run(call, capture_output=True, text=True, check=False, timeout=1800)
    wall, now = time.perf_counter() - begun, resource.getrusage(resource.RUSAGE_CHILDREN)
    assert ended.returncode == 0, ended.stderr
    told = json.loads(ended.stdout)
    tried = sum(line["tried"] for line in told["faults"])
    cpu = now.ru_utime + now.ru_stime - used.ru_utime - used.ru_stime
    print(f"\n{told['batches']} batches, {tried} faults put in: {wall:.0f} s wall, {cpu:.0f} s CPU in two processes")
    assert told["batches"] == 7 * WEEKS
    assert {line["fault"] for line in told["faults"]} == set(FAULTS)
    assert wall < 180
