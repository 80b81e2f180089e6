"""Panels of many series are judged block by block: memory does not grow with the number of rows."""

import subprocess
import sys

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

RULES = """
feed: wide
columns: {time: t, series: s, values: [v]}
every: 1h
false_alarm: 0.001
rules:
  - {name: memory, measure: autocorrelation, lag: 1, stays: {below: 0.7}}
  - {name: steps, measure: autocorrelation, lag: 1, after: difference, stays: {below: 0.1}}
  - {name: level, measure: level, stays: {between: [-1, 1]}}
  - {name: complete, measure: completeness, stays: {above: 0.99}}
"""
STEPS = 1_000
BLOCK = 500


def write_panel(path, series):
    """AR(1) series of 1,000 hours, sorted by key, a row group for every 500 series."""
    rng = np.random.default_rng(1)
    stamps = np.tile(np.arange(STEPS) * 3_600_000_000 + 1_767_225_600_000_000, BLOCK)
    writer = None
    for first in range(0, series, BLOCK):
        shocks = rng.standard_normal((BLOCK, STEPS))
        for step in range(1, STEPS):
            shocks[:, step] += 0.5 * shocks[:, step - 1]
        table = pa.table({
            "s": np.repeat([f"m{first + k:06d}" for k in range(BLOCK)], STEPS),
            "t": pa.array(stamps, pa.int64()).cast(pa.timestamp("us", tz="UTC")),
            "v": shocks.ravel(),
        })
        writer = writer or pq.ParquetWriter(path, table.schema)
        writer.write_table(table, row_group_size=BLOCK * STEPS)
    writer.close()


def peak(folder, name):
    """Kilobytes at most of a gate on the panel, which must be released."""
    call = [sys.executable, "-m", "sercheck", "gate", "rules.yaml", name, "--no-keep"]
    code = (
        f"import resource, subprocess; subprocess.run({call!r}, check=True, capture_output=True); "
        "print(resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss)"
    )
    done = subprocess.run([sys.executable, "-c", code], cwd=folder, check=True, capture_output=True, text=True)
    return int(done.stdout)


@pytest.mark.scale
def test_memory_stays_flat(tmp_path):
    """Five times the series take at most 1.5 times the memory, most of which is the records'."""
    (tmp_path / "rules.yaml").write_text(RULES)
    for name, series in (("small.parquet", 4_000), ("large.parquet", 20_000)):
        write_panel(tmp_path / name, series)
    small, large = peak(tmp_path, "small.parquet"), peak(tmp_path, "large.parquet")
    assert large <= 1.5 * small, (small, large)
