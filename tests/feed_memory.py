"""Small feeds for trying the archive: rows by hand, what a slow merge of releases would keep, processes that die."""

from __future__ import annotations

import os
import subprocess
import sys
from collections.abc import Iterable
from pathlib import Path

import numpy as np
import pandas as pd

from sercheck.archived import archived, keep
from sercheck.intake.calendar import Cadence
from sercheck.intake.layout import Layout
from sercheck.intake.rows import Rows
from sercheck.store.archive import Archive

HOUR = 3_600_000_000_000
FIRST = int(pd.Timestamp("2026-03-01", tz="UTC").value)
LAYOUT = Layout("t", ("key",), ("x",), "1h", timezone="Europe/Oslo")
CADENCE = Cadence("1h", "Europe/Oslo", 0)
ALWAYS = (FIRST - 10_000 * HOUR, FIRST + 10_000 * HOUR)


def rows_of(cells: Iterable[tuple[str, int, float]]) -> Rows:
    """Rows of (series, hour, value) in order of delivery."""
    listed = list(cells)
    keys = sorted({key for key, _, _ in listed})
    codes = np.array([keys.index(key) for key, _, _ in listed], dtype=np.int32)
    stamps = np.array([FIRST + hour * HOUR for _, hour, _ in listed], dtype=np.int64)
    values = np.array([value for _, _, value in listed], dtype=np.float64)
    return Rows(np.array(keys, dtype=object), codes, stamps, {"x": values})


def cells_of(rows: Rows | None) -> dict[tuple[str, int], float]:
    """What rows say, by series and hour; each is there once."""
    if rows is None:
        return {}
    found = {
        (str(rows.keys[code]), (int(stamp) - FIRST) // HOUR): float(value)
        for code, stamp, value in zip(rows.codes, rows.stamps, rows.values["x"], strict=True)
    }
    assert len(found) == len(rows)
    return found


def put(archive: Archive, name: str, cells: Iterable[tuple[str, int, float]], what: str = "released") -> int:
    """Keep a batch."""
    return keep(archive, name, f"content of {name}", [rows_of(cells)], CADENCE, what, ALWAYS)  # type: ignore[arg-type]


def read(
    archive: Archive, first: int = -9_000, before: int = 9_000, layout: Layout = LAYOUT, block_rows: int = 4_000_000
) -> dict[tuple[str, int], float]:
    """What the archive holds of the hours ``first`` to just before ``before``, block by block."""
    source = archived(archive, layout, FIRST + first * HOUR, FIRST + before * HOUR, None, block_rows)
    found: dict[tuple[str, int], float] = {}
    for block in [] if source is None else source.blocks():
        found |= cells_of(block)
    return found


def dying(script: str, folder: Path, *arguments: str) -> subprocess.CompletedProcess[str]:
    """Run a script in a process of its own; it may kill itself."""
    command = [sys.executable, "-c", script, *arguments]
    return subprocess.run(
        command, capture_output=True, text=True, check=False, cwd=folder, timeout=120, env=environment()
    )


def environment() -> dict[str, str]:
    """That of a process that can import the tests' helpers and has no settings of ours."""
    tests = str(Path(__file__).parent)
    clean = {name: value for name, value in os.environ.items() if not name.startswith("SERCHECK_")}
    return {**clean, "PYTHONPATH": tests}


def wave(first: str, days: int, seed: int, series: Iterable[str] = ("a", "b"), spread: float = 4.0) -> pd.DataFrame:
    """Hourly readings: a daily cycle and correlated noise, for a rule file with the columns t, key and x."""
    rng = np.random.default_rng(seed)
    stamps = pd.date_range(first, periods=24 * days, freq="h", tz="UTC")
    parts = []
    for name in series:
        shocks = rng.normal(0, spread, len(stamps) + 50)
        noise = np.zeros(len(shocks))
        for step in range(1, len(shocks)):
            noise[step] = 0.7 * noise[step - 1] + shocks[step]
        x = 200 + 30 * np.sin(2 * np.pi * np.arange(len(stamps)) / 24) + noise[50:]
        parts.append(pd.DataFrame({"t": stamps.strftime("%Y-%m-%dT%H:%M:%SZ"), "key": name, "x": np.round(x, 3)}))
    return pd.concat(parts, ignore_index=True)


RULES = """
feed: tide
columns: {time: t, series: key, values: [x]}
every: 1h
seasons: {day: 1D}
batch_every: 1D
false_holds: 1 per 90D
rules:
  - {name: level as usual, measure: level, stays: {like: history}}
  - {name: never flat, measure: repeats, stays: {like: history}}
  - {name: steps as ever, measure: autocorrelation, lag: 1, after: difference, stays: {like: history}}
  - {name: few empty, measure: rate, of_rows: missing, stays: {below: 0.2}, window: 5D}
"""
