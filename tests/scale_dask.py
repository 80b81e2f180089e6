"""Feeds and measurements for the tests of distributed runs.

``python -m tests.scale_dask`` prints what two Dask workers cost beside the local engine, start-up aside.
"""

from __future__ import annotations

import argparse
import json
import os
import resource
import tempfile
import time
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from sercheck import gate
from sercheck.cli.stages import stages
from sercheck.scale import local_cluster

RULES = """
feed: panel
columns: {time: t, series: key, values: [v]}
every: 1h
rules:
  - {name: lag 1, measure: autocorrelation, lag: 1, stays: {below: 0.9}}
  - {name: lags, measure: autocorrelation, lags: [24, 48], stays: {between: [-0.9, 0.9]}, across: discoveries}
  - {name: inner lags, measure: partial_autocorrelation, lag: 2, stays: {between: [-0.9, 0.9]}, across: series}
  - {name: level, measure: level, stays: {between: [-5, 5]}}
  - {name: spread, measure: spread, stays: {below: 5}}
"""


def panel(folder, files, series, steps, seed=1, group=250):
    """Parquet files with series of their own, sorted by key, ``group`` series to a row group; seeded noise."""
    folder.mkdir(parents=True, exist_ok=True)
    t = pa.array(np.arange(steps) * 3600 * 10**6 + 1_760_000_400 * 10**6, pa.timestamp("us", "UTC"))
    rng = np.random.default_rng(seed)
    for number in range(files):
        noise = rng.normal(size=(series, steps))
        for step in range(1, steps):
            noise[:, step] += 0.5 * noise[:, step - 1]
        names = pa.array([f"s{number:02d}{one:05d}" for one in range(series)])
        codes = pa.array(np.repeat(np.arange(series, dtype=np.int32), steps))
        columns = {
            "t": pa.chunked_array([t] * series),
            "key": pa.DictionaryArray.from_arrays(codes, names),
            "v": pa.array(noise.ravel()),
        }
        pq.write_table(pa.table(columns), folder / f"{number:02d}.parquet", row_group_size=steps * group)


def spent():
    """Processor seconds of this process and of those that it waited for."""
    return sum(time for who in (resource.RUSAGE_SELF, resource.RUSAGE_CHILDREN) for time in _cpu(who))


def _cpu(who):
    used = resource.getrusage(who)
    return used.ru_utime, used.ru_stime


def _worker_cpu():
    return time.process_time()


def dask_ratio(files=8, series=500, steps=1000, workers=2, repeats=3, *, timings=False):
    """CPU and wall seconds of the local engine and of Dask workers on aligned files, and their ratios.

    Start-up aside: the cluster runs already and has judged one batch before; of it the CPU of client, scheduler and
    workers counts. The median of ``repeats`` pairs, one after the other, so that other load meets both.
    """
    from distributed import Client

    told = []
    with tempfile.TemporaryDirectory() as name:
        place = Path(name)
        panel(place / "feed", files, series, steps)
        (place / "rules.yaml").write_text(RULES)
        batch = str(place / "feed" / "*.parquet")
        as_of = "2026-01-01T00:00:00Z"
        with local_cluster(workers) as cluster, Client(cluster) as client:

            def run(**engine):
                before, began = _all_cpu(client), time.perf_counter()
                verdict = gate(str(place / "rules.yaml"), batch, as_of=as_of, timings=timings, **engine)
                if timings:
                    print(stages(verdict.timings))
                return verdict, _all_cpu(client) - before, time.perf_counter() - began

            dask = {"engine": "dask", "scheduler": cluster.scheduler_address}
            run(**dask)
            run()
            for _ in range(repeats):
                here, there = run(), run(**dask)
                assert here[0].decision == there[0].decision
                told.append([here[1], there[1], here[2], there[2]])
    cpu_here, cpu_there, wall_here, wall_there = np.median(told, axis=0)
    cpu, wall = (float(np.median([row[k + 1] / row[k] for row in told])) for k in (0, 2))
    return {
        "points": files * series * steps, "workers": workers,
        "local cpu s": cpu_here, "dask cpu s": cpu_there, "cpu ratio": cpu,
        "local wall s": wall_here, "dask wall s": wall_there, "wall ratio": wall,
    }  # fmt: skip


def _all_cpu(client):
    """Client, scheduler and workers; nannies do nothing."""
    return time.process_time() + sum(client.run(_worker_cpu).values())


def main():
    """Print the ratios as JSON."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--files", type=int, default=8)
    parser.add_argument("--series", type=int, default=500)
    parser.add_argument("--steps", type=int, default=1000)
    parser.add_argument("--repeats", type=int, default=3)
    parser.add_argument("--timings", action="store_true", help="what each stage takes as well")
    asked = parser.parse_args()
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    told = dask_ratio(asked.files, asked.series, asked.steps, repeats=asked.repeats, timings=asked.timings)
    print(json.dumps(told, indent=1))


if __name__ == "__main__":
    main()
