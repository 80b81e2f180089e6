"""Runs on Dask workers: the same records, notes and sketches as one process gives, whatever becomes of a worker."""

import json
import os
import subprocess
import sys
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from sercheck import gate, load_rules
from sercheck.errors import BatchError, EngineError, SercheckError, UsageError
from sercheck.intake import assemble, sorted_parquet
from sercheck.intake.stream import MemorySource, StreamSource, open_feed
from sercheck.verdict import layout_of

distributed = pytest.importorskip("distributed")

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
        n_workers=1, threads_per_worker=2, processes=False, dashboard_address=None
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
