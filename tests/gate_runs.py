"""A small feed with a rule file for trying ``sercheck gate``, and the command run in this process or in its own."""

from __future__ import annotations

import os
import subprocess
import sys
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from sercheck.cli import main

RULES = """
feed: harbour_water
columns: {time: read_at, series: gauge, values: [cm]}
every: 1h
seasons: {day: 1D}
batch_every: 1D
false_holds: 1 per 90D
rules:
  - {name: level as usual, measure: level, stays: {like: history}}
  - {name: never flat, measure: repeats, stays: {like: history}}
  - {name: steps as ever, measure: autocorrelation, lag: 1, after: difference, stays: {like: history}}
  - {name: few empty, measure: rate, of_rows: missing, stays: {below: 0.2}, window: 5D}
  - {name: no hour twice, measure: spacing, look: doubles, stays: {below: 1}}
  - {name: all on the clock, measure: spacing, look: off_grid, stays: {below: 1}}
  - {name: no gap, measure: spacing, look: gaps, stays: {below: 1}}
  - {name: fresh, measure: freshness, stays: {below: 36h}, otherwise: note}
"""
DAY = pd.Timestamp("2026-03-10", tz="UTC")
NOW = "2026-03-11T01:00:00Z"
GAUGES = ("east", "west")
HEAD = "read_at,gauge,cm\n"


def water(first: pd.Timestamp, days: int, seed: int) -> pd.DataFrame:
    """Hourly water level of two gauges: a daily cycle and correlated noise; time-major, as delivered."""
    rng = np.random.default_rng(seed)
    stamps = pd.date_range(first, periods=24 * days, freq="h")
    cycle = 30 * np.sin(2 * np.pi * np.arange(len(stamps)) / 24)
    parts = []
    for gauge in GAUGES:
        noise = np.zeros(len(stamps) + 50)
        for step, shock in enumerate(rng.normal(0, 4, len(noise))):
            noise[step] = 0.7 * noise[step - 1] + shock
        parts.append(pd.DataFrame({"read_at": stamps, "gauge": gauge, "cm": np.round(200 + cycle + noise[50:], 2)}))
    rows = pd.concat(parts).sort_values(["read_at", "gauge"], kind="stable", ignore_index=True)
    rows["read_at"] = rows["read_at"].dt.strftime("%Y-%m-%dT%H:%M:%SZ")
    return rows


def healthy() -> str:
    """The healthy batch as CSV text."""
    return water(DAY, 1, seed=2).to_csv(index=False)


def with_values(change: Callable[[pd.Series], object]) -> str:
    """The healthy batch with other cells in the value column."""
    rows = water(DAY, 1, seed=2)
    return rows.assign(cm=change(rows["cm"])).to_csv(index=False)


@dataclass(frozen=True)
class Ended:
    """How a command ended: exit status and what it said on both streams."""

    status: int
    out: str
    err: str


def one_sentence(ended: Ended) -> str:
    """What is said in trouble: status 2, nothing on stdout, one printable line on stderr."""
    assert ended.status == 2, ended.err
    assert ended.out == ""
    line = ended.err.removesuffix("\n")
    assert line.isprintable(), line
    assert "Traceback" not in line
    assert "internal error" not in line
    assert len(line) <= 2_000
    return line


@dataclass(frozen=True)
class Place:
    """A folder with a rule file, a history and a healthy batch, and the command run in it."""

    folder: Path
    capture: pytest.CaptureFixture[str]
    monkeypatch: pytest.MonkeyPatch

    def write(self, name: str, content: str | bytes) -> str:
        """A file of this content; its name."""
        (self.folder / name).write_bytes(content.encode() if isinstance(content, str) else content)
        return name

    def frame(self, name: str, rows: pd.DataFrame) -> str:
        """A CSV file of these rows; its name."""
        rows.to_csv(self.folder / name, index=False)
        return name

    def sercheck(self, *arguments: str) -> Ended:
        """The command line in this process, through its own entry."""
        self.monkeypatch.setattr(sys, "argv", ["sercheck", *arguments])
        self.capture.readouterr()
        with pytest.raises(SystemExit) as ended:
            main()
        said = self.capture.readouterr()
        return Ended(int(ended.value.code or 0), said.out, said.err)

    def gate(self, batch: str, *more: str, rules: str = "rules.yaml", history: str | None = "history.csv") -> Ended:
        """``sercheck gate`` at the usual hour."""
        past = () if history is None else ("--history", history)
        when = () if "--as-of" in more else ("--as-of", NOW)
        return self.sercheck("gate", rules, batch, *past, *when, *more)

    @property
    def files(self) -> set[str]:
        """Everything in the folder, by relative path."""
        return {str(path.relative_to(self.folder)) for path in self.folder.rglob("*") if path.is_file()}


def place(folder: Path, capture: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> Place:
    """Make the folder and work in it."""
    made = Place(folder, capture, monkeypatch)
    monkeypatch.chdir(folder)
    for name in [name for name in os.environ if name.startswith("SERCHECK_")]:
        monkeypatch.delenv(name)
    made.write("rules.yaml", RULES)
    made.frame("history.csv", water(DAY - pd.Timedelta(days=40), 40, seed=1))
    made.frame("batch.csv", water(DAY, 1, seed=2))
    return made


def command(*arguments: str) -> list[str]:
    """The command line as a process of its own."""
    return [sys.executable, "-m", "sercheck", *arguments]


def process(*arguments: str, env: Mapping[str, str] | None = None, **how: object) -> subprocess.CompletedProcess[str]:
    """``sercheck`` as a process of its own, in the working folder."""
    clean = {name: value for name, value in os.environ.items() if not name.startswith("SERCHECK_")}
    settings = {**clean, **(env or {})}
    return subprocess.run(  # type: ignore[call-overload,no-any-return]
        command(*arguments), capture_output=True, text=True, check=False, timeout=120, env=settings, **how
    )
