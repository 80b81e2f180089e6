"""Runs on Dask workers: the same records, notes and sketches as one process gives, whatever becomes of a worker."""

import json
import os
import signal
import subprocess
import sys
import threading
import time
from dataclasses import replace

import numpy as np
import pandas as pd
import pyarrow as pa
import pytest
from scale_dask import RULES, panel

from sercheck import gate, load_rules
from sercheck.blocks import look
from sercheck.engine import Run
from sercheck.errors import BatchError, EngineError, SercheckError, UsageError
from sercheck.history import Past
from sercheck.intake import assemble, sorted_parquet
from sercheck.intake.stream import MemorySource, StreamSource, feed_cadence, feed_grids, open_feed
from sercheck.mapped import judge_batches
from sercheck.scale import NOBODY, local_cluster
from sercheck.taught import teach
from sercheck.verdict import layout_of

distributed = pytest.importorskip("distributed")
cloudpickle = pytest.importorskip("cloudpickle")

HEAD = """
feed: heat
columns: {time: t, series: key, values: [kwh]}
every: 1h
timezone: Europe/Oslo
batch_every: 1D
rules:
"""
ALONE = HEAD.replace("batch_every: 1D\n", "") + """
  - {name: memory, measure: autocorrelation, lags: [1, 24], stays: {between: [-0.5, 0.99]}, across: discoveries}
  - {name: inner, measure: partial_autocorrelation, lag: 2, stays: {between: [-0.5, 0.5]}, across: series}
  - {name: level, measure: level, stays: {between: [-3, 3]}, false_alarm: 0.01}
  - {name: all here, measure: completeness, stays: {above: 0.9}}
  - {name: stuck, measure: repeats, stays: {below: 6}, otherwise: note}
"""
BESIDE = HEAD + """
  - {name: level, measure: level, stays: {like: history}, across: [batch, together]}
  - {name: spread, measure: spread, stays: {like: history}, across: discoveries}
  - {name: all here, measure: completeness, stays: {above: 0.9}}
  - {name: memory, measure: autocorrelation, lag: 1, stays: {like: history}, across: series}
  - {name: places, measure: identity, stays: {like: history}, otherwise: note}
"""
FAR = "  - {name: level, measure: level, stays: {below: 9}, false_alarm: 0.01}\n"
AS_OF = "2025-11-20T00:00:00Z"
SERIES, DAYS = 24, 8


def rows(days=DAYS, first="2025-10-22", series=SERIES, seed=5):
    """Hourly rows by series on the clock of Oslo, over the end of summer time; one series stuck, one with gaps."""
    stamps = pd.date_range(first, periods=24 * days, freq="h", tz="Europe/Oslo")
    rng = np.random.default_rng(seed)
    noise = rng.normal(size=(series, len(stamps)))
    for step in range(1, len(stamps)):
        noise[:, step] += 0.4 * noise[:, step - 1]
    noise[3, -20:] = noise[3, -20]
    feed = pd.DataFrame({
        "t": np.tile(stamps.tz_localize(None), series),
        "key": np.repeat([f"s{one:02d}" for one in range(series)], len(stamps)),
        "kwh": np.round(noise.ravel(), 6),
    })  # fmt: skip
    return feed.drop(index=range(7 * len(stamps) + 10, 7 * len(stamps) + 60)).reset_index(drop=True)


def aligned(feed, folder):
    """Four files of neighbouring series, sorted by key, several row groups each."""
    return written([part for _, part in feed.groupby(feed.key.str[1:].astype(int) // 6)], folder)


def hashed(feed, folder):
    """Four files whose series are mixed, each by time."""
    parts = [part.sort_values("t", kind="stable") for _, part in feed.groupby(feed.key.str[1:].astype(int) % 4)]
    return written(parts, folder)


def spanning(feed, folder):
    """A file a day."""
    return written([part for _, part in feed.groupby(feed.t.dt.date)], folder)


def comma_separated(feed, folder):
    """One CSV file."""
    feed.to_csv(folder / "all.csv", index=False)
    return str(folder / "all.csv")


def frame(feed, folder):
    """No file at all."""
    return feed.sample(frac=1, random_state=3)


def written(parts, folder):
    """A Parquet file for each part."""
    for number, part in enumerate(parts):
        part.to_parquet(folder / f"{number:02d}.parquet", row_group_size=400, index=False)
    return str(folder / "*.parquet")


@pytest.fixture(scope="module")
def address():
    """A scheduler with two threads in this process."""
    with distributed.LocalCluster(
        n_workers=1, threads_per_worker=2, processes=False, dashboard_address=NOBODY
    ) as cluster:
        yield cluster.scheduler_address


@pytest.fixture
def small(monkeypatch):
    """Blocks so small that a little feed has many."""
    monkeypatch.setattr(sorted_parquet, "BLOCK_ROWS", 1000)
    monkeypatch.setattr(assemble, "BLOCK_CELLS", 1000)


def judged(rules, batch, history=None, store=None, **engine):
    """The verdict on a batch; the ledger of a store is only read."""
    return gate(rules, batch, history, as_of=AS_OF, store=store, keep=False, **engine)


def same(here, there):
    """Records to the bit, and everything else that a reader sees."""
    pd.testing.assert_frame_equal(here.records, there.records, check_exact=True)
    assert replace(here, table=there.table, seconds=there.seconds) == there


@pytest.mark.parametrize("form", [aligned, hashed, spanning, comma_separated, frame])
def test_the_same_records_without_a_history(form, tmp_path, address, small):
    """Whatever the form of the batch, Dask's records are those of one process, failures with their causes too."""
    rules = tmp_path / "rules.yaml"
    rules.write_text(ALONE)
    batch = form(rows(), tmp_path)
    here = judged(rules, batch)
    assert here.decision == "held"
    assert here.counts["fail"] > 1
    assert here.sketches
    same(here, judged(rules, batch, engine="dask", scheduler=address))


@pytest.mark.parametrize("form", [aligned, hashed, comma_separated])
def test_the_same_records_beside_a_history(form, tmp_path, address, small):
    """History read by the workers, or by the client, changes no record; a series that is new has its record."""
    rules = tmp_path / "rules.yaml"
    rules.write_text(BESIDE)
    history = rows(days=66, first="2025-09-01")
    batch = rows(days=1, first="2025-11-06", series=SERIES + 1, seed=9)
    batch.loc[batch.key == "s11", "kwh"] += 9.0
    past = form(history, tmp_path)
    here = judged(rules, batch, past)
    assert {"s11"} <= {row["series"] for row in here.table.rows_where("outcome", "fail")}
    assert "s24" in here.table["series"]
    assert None in here.table["series"].tolist()
    same(here, judged(rules, batch, past, engine="dask", scheduler=address))


def test_the_same_records_beside_an_archive(tmp_path, address, small):
    """What a store holds is read by the client; the judgement by Dask is the same one, so the ledger has it once."""
    rules = tmp_path / "rules.yaml"
    rules.write_text(BESIDE)
    store = tmp_path / "kept"
    gate(rules, rows(days=66, first="2025-09-01"), as_of=AS_OF, store=store)
    batch = rows(days=1, first="2025-11-06", seed=9)
    here = judged(rules, batch, store=store)
    same(here, judged(rules, batch, store=store, engine="dask", scheduler=address))
    first = gate(rules, batch, as_of=AS_OF, store=store, engine="dask", scheduler=address)
    again = gate(rules, batch, as_of=AS_OF, store=store)
    assert first.batch_id == again.batch_id
    assert "that judgement stands" in again.notes[-1]


@pytest.mark.parametrize("form", [aligned, comma_separated])
def test_the_same_baseline_is_learned(form, tmp_path, address, small):
    """Workers learn the same facts, to the bit, and find the same oddities."""
    rules = tmp_path / "rules.yaml"
    rules.write_text(BESIDE)
    past = form(rows(days=40, first="2025-09-20"), tmp_path)
    here, there = (
        teach(rules, past, tmp_path / name, keep=False, **engine)
        for name, engine in (("a", {}), ("b", {"engine": "dask", "scheduler": address}))
    )
    assert here.lessons.findings
    assert here.lessons.findings == there.lessons.findings
    assert here.lessons.facts.num_rows == SERIES
    assert here.lessons.baseline.facts == there.lessons.baseline.facts
    assert here.lessons.baseline.baseline_id == there.lessons.baseline.baseline_id
    assert here.lacks == there.lacks


def test_the_risk_is_shared_once(tmp_path, address, small):
    """A rule's risk is divided by all its series and not by those of a block."""
    rules = tmp_path / "rules.yaml"
    rules.write_text(HEAD.replace("batch_every: 1D\n", "") + FAR)
    verdict = judged(rules, aligned(rows(), tmp_path), engine="dask", scheduler=address)
    assert np.nanmin(verdict.table["false_alarm_used"]) == pytest.approx(0.01 / SERIES)


def test_files_with_series_of_their_own_are_read_one_by_one(tmp_path, small):
    """In any order of rows and files; where a series is in two files all are read at once. The grids are the same."""
    book = tmp_path / "rules.yaml"
    book.write_text(ALONE)
    layout = layout_of(load_rules(book))
    for form, kind in ((aligned, StreamSource), (hashed, StreamSource), (spanning, MemorySource)):
        place = tmp_path / form.__name__
        place.mkdir()
        source = open_feed(form(rows(), place), layout)
        assert isinstance(source, kind)
        assert source.fingerprint == open_feed(rows(), layout).fingerprint
        blocks = list(source.blocks())
        assert len(blocks) == (1 if kind is MemorySource else 4)
        pieces = source.pieces()
        if pieces is not None:
            assert [piece.rows().keys.tolist() for piece in pieces] == [block.keys.tolist() for block in blocks]


def test_a_number_and_its_text_are_one_series(tmp_path, small):
    """Files whose keys differ only in type share their series, so they are not read one by one."""
    book = tmp_path / "rules.yaml"
    book.write_text(ALONE)
    feed = rows()
    feed["key"] = feed.key.str[1:].astype(int)
    feed[feed.t < "2025-10-25"].to_parquet(tmp_path / "a.parquet")
    feed[feed.t >= "2025-10-25"].astype({"key": str}).to_parquet(tmp_path / "b.parquet")
    source = open_feed(str(tmp_path / "?.parquet"), layout_of(load_rules(book)))
    assert isinstance(source, MemorySource)


def test_series_over_several_files_are_told(tmp_path, address, small, capsys):
    """A shuffle costs, so a sentence on stderr says how to save it; aligned files have none."""
    rules = tmp_path / "rules.yaml"
    rules.write_text(ALONE)
    for form in (spanning, aligned):
        place = tmp_path / form.__name__
        place.mkdir()
        judged(rules, form(rows(), place), engine="dask", scheduler=address)
        assert ("sorted by series among the workers" in capsys.readouterr().err) == (form is spanning)


def test_an_error_of_a_worker_is_the_same_sentence(tmp_path, address, small):
    """A column that cannot hold values is told as one process tells it."""
    rules = tmp_path / "rules.yaml"
    rules.write_text(ALONE)
    feed = rows()
    feed["kwh"] = pd.Timestamp("2025-11-01")
    batch = aligned(feed, tmp_path)
    with pytest.raises(BatchError) as here:
        judged(rules, batch)
    with pytest.raises(BatchError) as there:
        judged(rules, batch, engine="dask", scheduler=address)
    assert str(here.value) == str(there.value)


@pytest.mark.parametrize("error", [BatchError("a", "b", "c", "d"), EngineError("a", "b")])
def test_an_error_arrives_whole(error):
    """Errors cross from one process to another with their four parts."""
    kind, parts = error.__reduce__()
    assert vars(kind(*parts)) == vars(error)


def test_what_cannot_be_is_told(tmp_path):
    """An unknown engine, a scheduler for the local one, and a scheduler that does not answer."""
    rules = tmp_path / "rules.yaml"
    rules.write_text(ALONE)
    with pytest.raises(UsageError, match="no engine"):
        judged(rules, rows(), engine="sparks")
    with pytest.raises(UsageError, match="no scheduler"):
        judged(rules, rows(), scheduler="tcp://127.0.0.1:1")
    with pytest.raises(EngineError, match="no scheduler answers"):
        judged(rules, rows(), engine="dask", scheduler="no address at all")


def test_without_dask_the_extra_is_named(tmp_path, monkeypatch):
    """A machine without Dask gets one sentence."""
    rules = tmp_path / "rules.yaml"
    rules.write_text(ALONE)
    monkeypatch.setitem(sys.modules, "distributed", None)
    with pytest.raises(SercheckError, match=r"sercheck\[dask\]"):
        judged(rules, rows(), engine="dask")


def test_stages_are_told_when_asked_for(tmp_path, address, small):
    """In Python as ``timings``, in the order of the work; without asking there are none."""
    rules = tmp_path / "rules.yaml"
    rules.write_text(ALONE)
    batch = aligned(rows(), tmp_path)
    assert judged(rules, batch).timings == ()
    told = gate(rules, batch, as_of=AS_OF, store=tmp_path / "kept", timings=True)
    names = [each.stage for each in told.timings]
    wanted = ["open", "read", "measure memory", "measure stuck", "decide", "records", "store", "archive"]
    assert [name for name in names if name in wanted] == wanted
    assert 0 < sum(each.wall for each in told.timings) >= told.seconds * 0.5
    there = judged(rules, batch, engine="dask", scheduler=address, timings=True)
    assert "measure stuck" in [each.stage for each in there.timings]


def test_what_is_sent_back_holds_no_history(tmp_path):
    """What is kept of a block takes less than its rows: of twice as long a history no more comes back."""
    rules = tmp_path / "rules.yaml"
    rules.write_text(BESIDE)
    book = load_rules(rules)
    layout = layout_of(book)
    sizes = []
    for days in (66, 132):
        begins = str(pd.Timestamp("2025-11-06") - pd.Timedelta(days=days))[:10]
        batch, past = (open_feed(rows(*of), layout) for of in ((1, "2025-11-06", SERIES, 9), (days, begins)))
        (grid,) = feed_grids(batch, past, layout)
        seen = look(grid, Past(None), Run(book, feed_cadence(batch, past, layout), 0)).seen
        sizes.append(len(cloudpickle.dumps(seen)) / grid.values["kwh"].nbytes)
    assert sizes[0] < 0.8
    assert sizes[1] < 0.6 * sizes[0]


def killed_half_way(call, cluster, client):
    """Run a call while one worker is killed once some tasks are done; what the call gives."""
    victim = next(iter(cluster.workers.values())).pid
    killed = threading.Event()

    def kill():
        while not killed.is_set():
            if sum(client.run_on_scheduler(done).values()) > 3:
                os.kill(victim, signal.SIGKILL)
                killed.set()
            time.sleep(0.01)

    thread = threading.Thread(target=kill)
    thread.start()
    try:
        return call(), killed.is_set()
    finally:
        killed.set()
        thread.join()


def done(dask_scheduler):
    """Tasks by state that are done."""
    return {"memory": sum(task.state == "memory" for task in dask_scheduler.tasks.values())}


@pytest.mark.scale
def test_a_worker_that_is_killed_costs_time_and_nothing_else(tmp_path, monkeypatch):
    """A worker killed while it measures, by signal 9: the others do its work again, and the records are the same."""
    rules = tmp_path / "rules.yaml"
    rules.write_text(RULES)
    panel(tmp_path / "feed", 4, 60, 400, group=5)
    batch = str(tmp_path / "feed" / "*.parquet")
    monkeypatch.setattr(sorted_parquet, "BLOCK_ROWS", 2000)
    here = judged(rules, batch)
    with local_cluster(2) as cluster, distributed.Client(cluster, set_as_default=False) as client:
        engine = {"engine": "dask", "scheduler": cluster.scheduler_address}
        there, killed = killed_half_way(lambda: judged(rules, batch, **engine), cluster, client)
    assert killed
    same(here, there)


def test_arrow_batches_of_whole_series_have_the_same_records(tmp_path):
    """Rules that look at one series give the gate's records, batch by batch of series, history in the same batch."""
    rules = tmp_path / "rules.yaml"
    alone = [line for line in BESIDE.replace("[batch, together]", "series").splitlines() if "places" not in line]
    rules.write_text("\n".join(alone).replace("discoveries", "series").replace("0.9}}", "0.9}, across: series}"))
    history, batch = rows(days=66, first="2025-09-01"), rows(days=1, first="2025-11-06", seed=9)
    here = judged(rules, batch, history).records
    feed = pd.concat([history, batch])
    parts = [feed[feed.key.str[1:].astype(int) % 3 == number] for number in range(3)]
    given = [pa.RecordBatch.from_pandas(part, preserve_index=False) for part in parts]
    tables = judge_batches(
        rules, given, batch="b7", since="2025-09-01T00:00+02:00", first="2025-11-06T00:00+01:00",
        last="2025-11-06T23:00+01:00", as_of=AS_OF,
    )  # fmt: skip
    there = pd.concat([table.to_pandas() for table in tables])
    order = ["rule", "series"]
    plain = ["outcome", "n", "n_missing", "observed", "limit", "p_value", "false_alarm_used", "window_start", "reason"]
    for frame in (here, there):
        frame[plain] = frame[plain].astype(object)
    ours, theirs = (frame.sort_values(order).set_index(order)[plain] for frame in (here, there))
    assert (ours.isna() == theirs.isna()).all(axis=None)
    assert (ours.fillna(0) == theirs.fillna(0)).all(axis=None)


@pytest.mark.parametrize("rule", ["level", "places"])
def test_arrow_batches_are_refused_where_series_count_together(rule, tmp_path):
    """A rule that shares its risk or compares series cannot be judged batch by batch, and says so."""
    rules = tmp_path / "rules.yaml"
    rules.write_text(HEAD + "\n".join(line for line in BESIDE.splitlines() if f"name: {rule}" in line))
    with pytest.raises(UsageError, match=f"rule '{rule}'"):
        next(judge_batches(rules, [], batch="b", first="2025-11-06", last="2025-11-07"))


def test_the_command_line_tells_stages_and_takes_processes(tmp_path):
    """``--engine dask`` starts processes of its own and prints the same; ``--timings`` is a table and JSON."""
    (tmp_path / "rules.yaml").write_text(BESIDE)
    rows(days=66, first="2025-09-01").to_parquet(tmp_path / "past.parquet")
    rows(days=1, first="2025-11-06", seed=9).to_parquet(tmp_path / "batch.parquet")
    call = [sys.executable, "-m", "sercheck", "gate", "rules.yaml", "batch.parquet", "--history", "past.parquet",
            "--no-keep", "--as-of", AS_OF, "--format", "json", "--timings"]  # fmt: skip
    environment = os.environ | {"OPENBLAS_NUM_THREADS": "1"}
    done = [
        subprocess.run([*call, *more], cwd=tmp_path, capture_output=True, text=True, env=environment, check=False)
        for more in ([], ["--engine", "dask"])
    ]
    here, there = (json.loads(each.stdout) for each in done)
    assert done[0].returncode == done[1].returncode <= 1
    stages = [each["stage"] for each in here.pop("timings")]
    assert stages[0] == "open"
    assert stages[-1] == "write"
    assert "measure spread" in [each["stage"] for each in there.pop("timings")]
    assert here == there
    assert "wall s" in done[0].stderr
