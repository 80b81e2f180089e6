from __future__ import annotations

import random
import signal
import subprocess
import sys
import time
from dataclasses import replace
from pathlib import Path

import pytest
from record_samples import alike, batch, judgement, records
from sqlalchemy import NullPool, create_engine, text

from sercheck.errors import StoreError, UsageError
from sercheck.record import Records
from sercheck.store.ledger import UnknownIdError, open_ledger
from sercheck.store.rows import Filters, judgement_id

STORE_ONE = """
import sys
sys.path.insert(0, sys.argv[1])
from record_samples import batch, judgement, records
from sercheck.store import database
from sercheck.store.ledger import open_ledger
database.CACHE = 256  # so little that even a small judgement is half in the file before it is committed
store, name, size, decision = sys.argv[2:]
found = records(int(size), name)
print("ready", flush=True)
with open_ledger(store) as ledger:
    stored = ledger.add(batch(name), judgement(name, decision=decision), found)
print(stored.decision, stored.stored_at, flush=True)
"""


@pytest.fixture(autouse=True)
def _no_settings(monkeypatch):
    for name in ("SERCHECK_STORE", "SERCHECK_LEDGER"):
        monkeypatch.delenv(name, raising=False)


@pytest.fixture
def ledger(ledger_store):
    """A ledger with nothing in it, of each kind."""
    with open_ledger(ledger_store) as ledger:
        yield ledger


def start(store: str | Path, name: str, size: int, decision: str = "held") -> subprocess.Popen[str]:
    """Another process that stores a judgement; it says ``ready`` just before."""
    command = [sys.executable, "-c", STORE_ONE, str(Path(__file__).parent), str(store), name, str(size), decision]
    return subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)


def test_what_was_stored_is_found(ledger):
    """A judgement comes back with its counts, its batch and its records in their order."""
    stored = ledger.add(batch(), judgement(), records(7))
    assert stored.counts == {"pass": 3, "fail": 3, "undecided": 1}
    assert stored.judgement_id == judgement_id("heat-0112-abcd", "rules-1", None)
    assert ledger.find("heat-0112-abcd", "rules-1", None) == stored
    assert ledger.find("heat-0112-abcd", "rules-1", "baseline") is None
    assert ledger.find("heat-0112-abcd", "rules-2", None) is None
    assert ledger.batch("heat-0112-abcd").batch == batch()
    assert ledger.batch("heat-0112-abcd").last == stored
    assert alike(ledger.records("heat-0112-abcd"), records(7))


def test_the_same_again_is_left_alone(ledger):
    """A repeat gives what was stored first, even if it would now decide otherwise."""
    first = ledger.add(batch(), judgement(), records())
    again = ledger.add(batch(rows=9), judgement(decision="released", judged_at="2027-01-01T00:00:00Z"), records(3))
    assert again == first
    assert again.decision == "held"
    assert alike(ledger.records("heat-0112-abcd"), records())
    assert ledger.batch("heat-0112-abcd").batch.rows == 144


def test_other_rules_or_another_baseline_judge_the_batch_anew(ledger):
    """A batch keeps all its judgements, the last one counts, and the files it was read from add up."""
    ledger.add(batch(), judgement(), records())
    ledger.add(
        batch(received=("again/heat.csv", "inbox/heat.csv")),
        judgement(rules_fingerprint="rules-2", decision="released"),
        records(rules="rules-2"),
    )
    both = ledger.batch("heat-0112-abcd")
    assert [each.decision for each in both.judgements] == ["held", "released"]
    assert both.last.rules_fingerprint == "rules-2"
    assert both.batch.received == ("inbox/heat.csv", "again/heat.csv")
    assert len(ledger.records("heat-0112-abcd")) == 12
    assert alike(ledger.records(Filters(judgement_id=both.judgements[0].judgement_id)), records())


def test_a_judgement_without_records_counts(ledger):
    """A batch may be decided without any record."""
    stored = ledger.add(batch(), judgement(), Records.empty())
    assert ledger.find("heat-0112-abcd", "rules-1", None) == stored
    assert len(ledger.records("heat-0112-abcd")) == 0


def test_contradictions_are_refused_and_leave_nothing(ledger):
    """Other content under a known id, one id for two records, records of another batch: all refused."""
    twice = records(2, record_id=["same", "same"])
    with pytest.raises(StoreError, match="two records of batch heat-0112-abcd have one id"):
        ledger.add(batch(), judgement(), twice)
    assert ledger.batches() == ()
    with pytest.raises(ValueError, match="records of"):
        ledger.add(batch(), judgement(), records(batch_id="other"))
    ledger.add(batch(), judgement(), records())
    with pytest.raises(StoreError, match="other content"):
        ledger.add(batch(fingerprint="f-2"), judgement(rules_fingerprint="r2"), records(rules="r2"))
    assert len(ledger.batch("heat-0112-abcd").judgements) == 1


def test_ids_may_be_shortened(ledger):
    """The beginning of an id is enough when it is the only one that begins so."""
    for name in ("heat-0112-abcd", "heat-0113-abcd", "heat-0113-abcdef"):
        ledger.add(batch(name), judgement(name), records(batch_id=name))
    assert ledger.batch("heat-0112").batch.batch_id == "heat-0112-abcd"
    assert ledger.batch("heat-0113-abcd").batch.batch_id == "heat-0113-abcd"
    with pytest.raises(UsageError, match="several ids begin so: heat-0112-abcd, heat-0113-abcd"):
        ledger.batch("heat")
    with pytest.raises(UsageError, match="4 letters"):
        ledger.batch("h")
    for unknown in ("nothing", "heat%", "heat_", "HEAT-0112"):
        with pytest.raises(UnknownIdError, match="not in the ledger"):
            ledger.batch(unknown)
    assert ledger.batch("f-heat-0112").batch.batch_id == "heat-0112-abcd"
    with pytest.raises(UsageError, match="several"):
        ledger.batch("f-heat-0113")
    whole = str(records()["record_id"][2])
    assert list(ledger.record(whole[:12]).rows()) == [next(records().take([2]).rows())]
    with pytest.raises(UnknownIdError):
        ledger.record("ffffffffffff")


def test_filters_let_through_what_they_say(ledger):
    """Each filter, alone and together, picks the right batches and records, the newest first."""
    for day, feed, decision in ((11, "heat", "released"), (12, "heat", "held"), (13, "water_a", "held")):
        name = f"{feed}-{day}"
        when = {"first_stamp": f"2026-01-{day}T00:00:00Z", "last_stamp": f"2026-01-{day}T23:00:00Z", "feed": feed}
        outcome = "pass" if decision == "released" else ["fail", "pass", "undecided", "pass"]
        found = records(4, name, feed=feed, outcome=outcome, series=["s0", "s1", "50%", "a*b"])
        ledger.add(batch(name, **when), judgement(name, decision=decision), found)
    cases = {
        Filters(): ["water_a-13", "heat-12", "heat-11"],
        Filters(limit=2): ["water_a-13", "heat-12"],
        Filters(feed="heat"): ["heat-12", "heat-11"],
        Filters(feed="w*_?"): ["water_a-13"],
        Filters(feed="H*"): [],
        Filters(since="2026-01-12T23:00:00Z"): ["water_a-13", "heat-12"],
        Filters(until="2026-01-12T23:00:00Z"): ["heat-12", "heat-11"],
        Filters(decision="held", until="2026-01-12T23:59:59Z"): ["heat-12"],
        Filters(outcome="fail"): ["water_a-13", "heat-12"],
        Filters(outcome="fail", series="s1"): [],
        Filters(rule="keeps*", series="50%", outcome="undecided"): ["water_a-13", "heat-12"],
        Filters(series="5*"): ["water_a-13", "heat-12", "heat-11"],
        Filters(series="5_%"): [],
        Filters(batch_id="heat-11"): ["heat-11"],
    }
    for filters, expected in cases.items():
        assert [each.batch.batch_id for each in ledger.batches(filters)] == expected, filters
        rows = list(ledger.records(filters).rows())
        if filters.limit is None:
            assert list(dict.fromkeys(row["batch_id"] for row in rows)) == expected, filters
        assert all(row["outcome"] == filters.outcome for row in rows if filters.outcome)
    assert ledger.records(Filters(limit=5))["series"].tolist() == ["s0", "s1", "50%", "a*b", "s0"]
    assert ledger.records(Filters(series="a*b", feed="heat"))["batch_id"].tolist() == ["heat-12", "heat-11"]


def test_decision_and_outcome_of_a_batch_are_those_of_the_last_judgement(ledger):
    """A batch released after a second look is listed as released only."""
    ledger.add(batch(), judgement(), records())
    ledger.add(
        batch(), judgement(rules_fingerprint="r2", decision="released"), records(2, rules="r2", outcome="pass")
    )
    assert ledger.batches(Filters(decision="held")) == ()
    assert len(ledger.batches(Filters(decision="released"))) == 1
    assert ledger.batches(Filters(outcome="fail")) == ()


def test_a_batch_without_rows_is_placed_by_its_judgement(ledger):
    """A batch that has no newest row is listed by the time it was judged."""
    ledger.add(replace(batch(), first_stamp=None, last_stamp=None, rows=0), judgement(), records())
    assert len(ledger.batches(Filters(since="2026-01-13T06:00:00Z"))) == 1
    assert ledger.batches(Filters(since="2026-01-13T06:00:01Z")) == ()


def test_a_kill_at_any_moment_leaves_everything_or_nothing(ledger_store, tmp_path):
    """Processes killed at random moments of storing leave whole judgements only, and a repeat completes them."""
    size = 30_000
    whole = start(ledger_store, "whole", size)
    whole.stdout.readline()
    began = time.monotonic()
    assert whole.communicate()[0].startswith("held")
    lasts = time.monotonic() - began
    rng = random.Random(20260112)
    results, in_the_middle = [], 0
    for trial in range(6):
        name = f"kill-{trial}"
        process = start(ledger_store, name, size)
        process.stdout.readline()
        time.sleep(lasts * (trial + rng.random()) / 6)
        process.send_signal(signal.SIGKILL)
        process.communicate()
        in_the_middle += (tmp_path / "ledger.sqlite-journal").exists()
        with open_ledger(ledger_store) as ledger:
            stored = ledger.find(name, "rules-1", None)
            results.append(stored is not None)
            assert len(ledger.records(Filters(batch_id=name, limit=size))) == (size if stored else 0)
            assert [each.batch.batch_id for each in ledger.batches()].count(name) == (1 if stored else 0)
    assert in_the_middle > 0 or "://" in ledger_store
    assert _count(ledger_store, "judgements") == 1 + sum(results) == _count(ledger_store, "batches")
    assert _count(ledger_store, "records") == size * (1 + sum(results))
    with open_ledger(ledger_store) as ledger:
        ledger.add(batch("kill-0"), judgement("kill-0"), records(size, "kill-0"))
        assert len(ledger.records("kill-0")) == size
    assert "://" in ledger_store or _one(ledger_store, "PRAGMA integrity_check") == "ok"


def test_a_kill_while_the_ledger_is_made_can_be_repeated(tmp_path):
    """Killed during its very first use, the ledger is made by the next."""
    for trial in range(3):
        store = tmp_path / f"{trial}"
        process = start(store, "first", 10)
        process.stdout.readline()
        time.sleep(0.08 * trial)
        process.send_signal(signal.SIGKILL)
        process.communicate()
        with open_ledger(str(store)) as ledger:
            assert ledger.add(batch("first"), judgement("first"), records(10, "first")).decision == "held"
            assert len(ledger.records("first")) == 10


def test_processes_at_once_agree_and_never_meet_a_lock(ledger_store):
    """Eight processes that make the ledger, judge one batch and each one of its own: one decision, no error."""
    same = [start(ledger_store, "same", 3_000, "held" if number % 2 else "released") for number in range(4)]
    own = [start(ledger_store, f"own-{number}", 3_000) for number in range(4)]
    answers = [process.communicate(timeout=120) for process in [*same, *own]]
    assert [errors for _, errors in answers] == [""] * 8
    assert len({answer for answer, _ in answers[:4]}) == 1
    assert _count(ledger_store, "judgements") == 5
    assert _count(ledger_store, "records") == 15_000


def test_records_of_the_ledger_have_the_columns_of_the_record(ledger_store):
    """Whoever reads the database itself finds the same names and values as in the files."""
    with open_ledger(ledger_store) as ledger:
        ledger.add(batch(), judgement(), records())
    row = _row(ledger_store, "SELECT * FROM records ORDER BY place")
    assert {name: row[name] for name in next(records().rows())} == next(records().rows())


@pytest.mark.scale
def test_a_large_judgement_is_stored_and_read_in_seconds(ledger_store):
    """400,000 records are stored and read in seconds of processor time."""
    found = records(400_000)
    with open_ledger(ledger_store) as ledger:
        began = time.process_time()
        ledger.add(batch(), judgement(), found)
        assert time.process_time() - began < 10
        began = time.process_time()
        assert len(ledger.records("heat-0112-abcd")) == 400_000
        assert time.process_time() - began < 20


def _count(store: str, table: str) -> int:
    return int(_one(store, f"SELECT count(*) FROM {table}"))


def _one(store: str, query: str) -> object:
    return next(iter(_row(store, query).values()))


def _row(store: str, query: str) -> dict[str, object]:
    engine = create_engine(store if "://" in store else f"sqlite:///{store}/ledger.sqlite", poolclass=NullPool)
    with engine.connect() as connection:
        return dict(connection.execute(text(query)).mappings().first())
