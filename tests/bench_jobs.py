"""What ``tests.bench`` measures, in processes of their own: each line of stdin, ``[job, fields]``, gets its cost.

CPU is user and system time of all threads, after everything was imported and run once on a small file; the least of
the runs counts. Memory is the peak of the whole process.
"""

from __future__ import annotations

import contextlib
import io
import json
import resource
import shutil
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np

HEAD = """feed: panel
columns: {time: t, series: s, values: [v]}
every: 1h
"""
SIX = (
    HEAD
    + """false_alarm: 0.001
rules:
  - {name: r1, measure: autocorrelation, lag: 1, stays: {below: 0.6}}
  - {name: r24, measure: autocorrelation, lag: 24, stays: {below: 0.3}}
  - {name: d1, measure: autocorrelation, lag: 1, after: difference, stays: {below: 0.1}}
  - {name: p2, measure: partial_autocorrelation, lag: 2, stays: {between: [-0.3, 0.3]}}
  - {name: level, measure: level, stays: {between: [-0.3, 0.3]}}
  - {name: complete, measure: completeness, stays: {above: 0.9}}
"""
)
"""Four rules of lag structure and two classical ones, with the author's numbers."""
EIGHT = (
    HEAD
    + """seasons: {day: 1D}
batch_every: 1D
false_holds: 1 per 90D
rules:
  - {name: level, measure: level, stays: {like: history}}
  - {name: spread, measure: spread, stays: {like: history}}
  - {name: surprises, measure: innovations, look: variance, stays: {like: history}}
  - {name: steps, measure: autocorrelation, lag: 1, after: difference, stays: {like: history}}
  - {name: cycle, measure: seasonal_lag, season: day, stays: {like: history}}
  - {name: slip, measure: season_phase, season: day, stays: {like: history}}
  - {name: flat, measure: repeats, stays: {like: history}}
  - {name: again, measure: replay, stays: {like: history}}
"""
)
"""The eight rules of an hourly feed in day batches."""
BEGIN = np.datetime64("2026-01-01T00", "us").astype(np.int64)
HOUR = 3_600_000_000
GROUP = 1_000_000
"""Rows of a row group."""
DAYS = 112
"""Days of history of the day batch: sixteen weeks."""


def make(file: str, series: int, steps: int, order: str = "key", missing: float = 0.0, runs: int = 1) -> None:
    """Write a panel: autoregressive noise (.5) of unit innovations, seeded; by key or by time; some cells empty."""
    import pyarrow as pa
    import pyarrow.parquet as pq
    from scipy.signal import lfilter

    rng = np.random.default_rng(series + steps)
    stamps = BEGIN + np.arange(steps) * HOUR
    names = np.array([f"m{number:07d}" for number in range(series)], dtype=object)
    kinds = pa.schema([("s", pa.string()), ("t", pa.timestamp("us", "UTC")), ("v", pa.float64())])

    def write(out: pq.ParquetWriter, key: np.ndarray, at: np.ndarray, values: np.ndarray) -> None:
        columns = [pa.array(key, pa.string()), pa.array(at).cast(kinds.field("t").type), pa.array(values)]
        out.write_table(pa.table(columns, schema=kinds), row_group_size=GROUP)

    def noise(count: int) -> np.ndarray:
        x = lfilter([1.0], [1.0, -0.5], rng.standard_normal((count, steps + 50)), axis=1)[:, 50:]
        return np.where(rng.random(x.shape) < missing, np.nan, x) if missing else x

    with pq.ParquetWriter(file, kinds) as out:
        if order == "time":
            whole = noise(series)
            write(out, np.tile(names, steps), np.repeat(stamps, series), whole.T.ravel())
            return
        block = max(1, GROUP // steps)
        for first in range(0, series, block):
            part = names[first : first + block]
            write(out, np.repeat(part, steps), np.tile(stamps, len(part)), noise(len(part)).ravel())


def make_days(folder: str, series: int, runs: int = 1) -> None:
    """Write ``history.parquet`` and ``day.parquet``: a daily cycle about 200 and autoregressive noise (.7)."""
    import pandas as pd
    from scipy.signal import lfilter

    rng = np.random.default_rng(1)
    steps = 24 * (DAYS + 1)
    x = lfilter([1.0], [1.0, -0.7], rng.normal(0, 4, (series, steps + 100)), axis=1)[:, 100:]
    x = np.round(200 + 30 * np.sin(2 * np.pi * np.arange(steps) / 24) + x, 2)
    t = pd.date_range("2026-01-01", periods=steps, freq="h", tz="UTC")
    for name, first, last in (("history", 0, 24 * DAYS), ("day", 24 * DAYS, steps)):
        keys = np.repeat([f"m{number:05d}" for number in range(series)], last - first)
        frame = pd.DataFrame({"s": keys, "t": np.tile(t[first:last], series), "v": x[:, first:last].ravel()})
        frame.to_parquet(Path(folder, f"{name}.parquet"), row_group_size=GROUP)


def stream(files: list[str], runs: int) -> dict[str, Any]:
    """Read files row group by row group, all columns, one thread, the library's defaults."""
    import pyarrow.parquet as pq

    def read() -> None:
        for name in files:
            with pq.ParquetFile(name) as file:
                for group in range(file.num_row_groups):
                    file.read_row_group(group, use_threads=False)

    return _measured(read, runs)


def gate(rules: str, file: str, out: str, runs: int, warm: str, profile: bool = False) -> dict[str, Any]:
    """Judge a file and write its records as Parquet."""
    from sercheck.verdict import gate as judge

    def run(batch: str = file) -> None:
        judge(rules, batch, keep=False).table.write(out)

    run(warm)
    return _measured(run, runs, profile=profile)


def day(rules: str, folder: str, runs: int, profile: bool = False) -> dict[str, Any]:
    """Judge a day's batch by its history in the store."""
    from sercheck.verdict import gate as judge

    def run() -> None:
        judge(rules, f"{folder}/day.parquet", store=f"{folder}/store", as_of="2026-04-24T02:00:00Z", keep=False)

    run()
    return _measured(run, runs, profile=profile)


def learn(rules: str, folder: str, runs: int, warm: str, profile: bool = False) -> dict[str, Any]:
    """Learn a history into a store, which the last run leaves behind."""
    from sercheck.taught import teach

    def run(history: str = f"{folder}/history.parquet") -> None:
        shutil.rmtree(f"{folder}/store", ignore_errors=True)
        teach(rules, history, f"{folder}/store")

    run(warm)
    return _measured(run, runs, profile=profile)


def loop(file: str, series: int, runs: int) -> dict[str, Any]:
    """A loop over series as it is usually written, on the first ``series`` of a file.

    pandas groups the rows; for each series: sorted by time, missing counted, differences, and by statsmodels
    autocorrelations of rows and differences, partial autocorrelations, the portmanteau test at lag 24; moments; one
    record.
    """
    import pandas as pd
    import pyarrow.parquet as pq
    from statsmodels.stats.diagnostic import acorr_ljungbox
    from statsmodels.tsa.stattools import acf, pacf

    with pq.ParquetFile(file) as source:
        frame = source.read_row_group(0).to_pandas()
    frame = frame[frame["s"].isin(frame["s"].unique()[:series])]

    def run() -> None:
        records = []
        for key, rows in frame.groupby("s", observed=True):
            v = rows.sort_values("t")["v"]
            values, steps = v.dropna().to_numpy(), v.diff().dropna().to_numpy()
            r, d, p = acf(values, nlags=24), acf(steps, nlags=1), pacf(values, nlags=2, method="ywm")
            box = acorr_ljungbox(values, lags=[24])
            records.append({
                "series": key, "missing": v.isna().mean(), "r1": r[1], "r24": r[24], "d1": d[1], "p2": p[2],
                "mean": v.mean(), "spread": v.std(), "p": box["lb_pvalue"].iloc[0],
            })  # fmt: skip
        pd.DataFrame(records)

    run()
    return _measured(run, runs) | {"points": len(frame)}


def autocorrelations(steps: int, most: int, runs: int) -> dict[str, Any]:
    """Autocorrelations of one long series up to a lag, and beside it one padded transform there and back."""
    from sercheck.serial import autocorrelation

    x = np.random.default_rng(1).standard_normal(steps)
    size = 1 << (2 * steps - 1).bit_length()
    lags = np.arange(1, most + 1)

    def whole() -> None:
        spectrum = np.fft.rfft(x - x.mean(), size)
        np.fft.irfft(spectrum.real**2 + spectrum.imag**2, size)

    ours = _measured(lambda: autocorrelation(x, lags), runs)
    return ours | {"whole": _measured(whole, runs)["cpu"]}


def _measured(run: Callable[[], Any], runs: int, *, profile: bool = False) -> dict[str, Any]:
    spent = []
    for _ in range(runs):
        before = _cpu()
        run()
        spent.append(_cpu() - before)
    told: dict[str, Any] = {"cpu": min(spent), "peak": resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024}
    return told | {"profile": _profile(run)} if profile else told


def _cpu() -> float:
    used = resource.getrusage(resource.RUSAGE_SELF)
    return used.ru_utime + used.ru_stime


def _profile(run: Callable[[], Any], lines: int = 8) -> list[str]:
    """The functions that most of the time goes into, themselves alone."""
    import cProfile
    import pstats
    import time

    profiler = cProfile.Profile(time.process_time)
    with contextlib.redirect_stdout(io.StringIO()):
        profiler.runcall(run)
    spent = pstats.Stats(profiler).stats  # type: ignore[attr-defined]  # not in the stubs
    total = sum(entry[2] for entry in spent.values())
    most = sorted(spent.items(), key=lambda item: -item[1][2])[:lines]
    return [f"{entry[2] / total:4.0%}  {Path(place[0]).name}:{place[2]}" for place, entry in most]


if __name__ == "__main__":
    for line in sys.stdin:
        job, fields = json.loads(line)
        print(json.dumps(globals()[job](**fields)), flush=True)
