from __future__ import annotations

import json
from pathlib import Path

import pandas as pd
import pytest
from gate_runs import DAY, NOW, Place, place, water
from sqlalchemy import NullPool, create_engine, text

from sercheck.store import prune


@pytest.fixture(params=["sqlite", "postgresql"])
def here(request, tmp_path, capsys, monkeypatch) -> Place:
    """A store of each kind with a learned history, a released and a held batch."""
    made = place(tmp_path, capsys, monkeypatch)
    url = f"sqlite:///{tmp_path}/.sercheck/ledger.sqlite"
    if request.param == "postgresql":
        url = request.getfixturevalue("server")
        monkeypatch.setenv("SERCHECK_LEDGER", url)
    monkeypatch.setenv("LEDGER_OF_TEST", url)
    assert made.sercheck("learn", "rules.yaml", "history.csv").status == 0
    assert made.gate("batch.csv", history=None).status == 0
    made.frame("bad.csv", water(DAY + pd.Timedelta(days=1), 1, seed=4).assign(cm=777.0))
    assert made.gate("bad.csv", "--as-of", "2026-03-12T01:00:00Z", history=None).status == 1
    return made


def change(here: Place, statement: str) -> None:
    """Meddle with the ledger's database."""
    import os

    engine = create_engine(os.environ["LEDGER_OF_TEST"], poolclass=NullPool)
    with engine.begin() as connection:
        if engine.dialect.name == "postgresql":
            connection.execute(text("SET session_replication_role = replica"))  # without foreign keys
        connection.execute(text(statement))


def verified(here: Place) -> tuple[int, list[str]]:
    """Exit status and what is wrong."""
    ended = here.sercheck("ledger", "verify", "--format", "json")
    assert ended.err == ""
    return ended.status, [fault["what"] for fault in json.loads(ended.out)["faults"]]


def files(here: Place, pattern: str) -> list[Path]:
    """Files of the archive."""
    return sorted((here.folder / ".sercheck" / "archive" / "harbour_water").glob(pattern))


def test_a_store_as_it_should_be(here):
    """Nothing is wrong, and nothing is changed by looking; a person's word is no fault either."""
    before = {path: path.read_bytes() for path in files(here, "**/*") if path.is_file()}
    ended = here.sercheck("ledger", "verify")
    assert ended.status == 0
    assert ended.out.startswith("nothing is wrong")
    assert "2 batches, 32 records" in ended.out
    batch_id = json.loads(here.sercheck("ledger", "batches", "--decision", "held", "--format", "json").out)["batch_id"]
    assert here.sercheck("settle", batch_id, "--as", "released", "--by", "Ana", "--because", "test").status == 0
    assert verified(here) == (0, [])
    assert all(path.read_bytes() == content for path, content in before.items())


@pytest.mark.parametrize("here", ["sqlite"], indirect=True)
@pytest.mark.parametrize(
    ("statement", "said"),
    [
        ("DELETE FROM records WHERE rule = 'fresh'", "14 of 16 records of judgement"),
        ("UPDATE judgements SET decision = 'released'", "of its records say hold"),
        ("DELETE FROM batches", "rows belong to nothing in batches"),
        ("UPDATE baselines SET fingerprint = 'x'", "it is not what was learned"),
        ("UPDATE batches SET fingerprint = 'x'", "different content under its id"),
        ("UPDATE judgements SET baseline_id = 'x'", "is not the one of its rules and baseline"),
    ],
)
def test_a_ledger_that_was_meddled_with(here, statement, said):
    """What does not fit together in the ledger is told with what to do, and the status is 1."""
    change(here, statement)
    status, faults = verified(here)
    assert status == 1
    assert [what for what in faults if said in what], faults
    ended = here.sercheck("ledger", "verify")
    assert "Put back a copy" in ended.out or "sercheck learn" in ended.out


@pytest.mark.parametrize("here", ["sqlite"], indirect=True)
def test_an_archive_that_lost_something(here):
    """A missing, a cut and a changed file, a missing entry and a missing archive are each told."""
    (part,) = files(here, "2026-03-10/harbour*.parquet")
    content = part.read_bytes()
    part.write_bytes(content[:-9])
    assert "no whole Parquet file" in verified(here)[1][0]
    part.unlink()
    assert verified(here) == (1, ["0 of its 48 rows are in the archive"])
    (other,) = files(here, "2026-03-11/harbour*.parquet")
    part.write_bytes(other.read_bytes())
    assert verified(here) == (1, ["its rows in the archive are of other times than when they were kept"])
    part.write_bytes(content)
    assert verified(here) == (0, [])
    entry = next(path for path in files(here, "log/*.json") if '"released"' in path.read_text() and
                 "harbour_water-" in path.read_text())  # fmt: skip
    said = entry.read_text()
    entry.write_text("{")
    assert "cannot be read" in verified(here)[1][0]
    entry.unlink()
    assert verified(here) == (1, ["it is released and the archive has none of its rows"])
    assert here.gate("batch.csv", history=None).status == 0
    assert verified(here) == (0, [])
    assert "harbour_water" in said


def test_a_store_with_nothing_in_it(tmp_path, capsys, monkeypatch):
    """Where nothing is, nothing is wrong and nothing is made."""
    made = place(tmp_path, capsys, monkeypatch)
    assert made.sercheck("ledger", "verify").status == 0
    assert made.sercheck("ledger", "prune", "--before", "2026-01-01").status == 0
    assert not (tmp_path / ".sercheck").exists()


def many(here: Place, days: int) -> None:
    """Released days after those that are there, one of them twice held."""
    for number in range(2, days):
        first = DAY + pd.Timedelta(days=number)
        here.frame("next.csv", water(first, 1, seed=10 + number))
        when = (first + pd.Timedelta(days=1, hours=1)).strftime("%Y-%m-%dT%H:%M:%SZ")
        assert here.gate("next.csv", "--as-of", when, history=None).status in (0, 1)


def test_pruning_removes_what_is_old_and_keeps_what_is_needed(here, monkeypatch):
    """Old batches go with their records; the newest stay, and so does the archive; again removes nothing."""
    monkeypatch.setattr(prune, "NEWEST", 3)
    many(here, 6)
    archive = files(here, "*/*.parquet")
    told = json.loads(here.sercheck("ledger", "prune", "--before", "2026-03-16", "--format", "json").out)
    assert told["batches"] == 3
    assert told["records"] == 3 * 16
    assert told["kept"] == 3
    assert verified(here) == (0, [])
    assert files(here, "*/*.parquet") == archive
    again = json.loads(here.sercheck("ledger", "prune", "--before", "2026-03-16", "--format", "json").out)
    assert (again["batches"], again["records"]) == (0, 0)
    left = here.sercheck("ledger", "batches", "--format", "json").out.splitlines()
    assert len(left) == 3
    assert here.gate("next.csv", "--as-of", NOW, history=None).status in (0, 1)


def test_pruning_spares_an_open_episode(here, monkeypatch):
    """While a rule still fails, every batch of its episode stays, however old."""
    monkeypatch.setattr(prune, "NEWEST", 2)
    for number in range(2, 5):
        first = DAY + pd.Timedelta(days=number)
        here.frame("next.csv", water(first, 1, seed=10 + number).assign(cm=777.0 + number))
        when = (first + pd.Timedelta(days=1, hours=1)).strftime("%Y-%m-%dT%H:%M:%SZ")
        assert here.gate("next.csv", "--as-of", when, history=None).status == 1
    before = here.sercheck("ledger", "episodes", "--state", "open", "--format", "json").out
    assert before
    told = json.loads(here.sercheck("ledger", "prune", "--before", "2027-01-01", "--format", "json").out)
    assert told["batches"] == 1
    assert here.sercheck("ledger", "episodes", "--state", "open", "--format", "json").out == before
    assert verified(here) == (0, [])


@pytest.mark.parametrize("here", ["sqlite"], indirect=True)
def test_pruning_keeps_baselines_that_are_needed(here):
    """The newest baseline of the rules stays, and one that a record names; others of old rows go."""
    change(here, "INSERT INTO baselines SELECT 'old', feed, rules_fingerprint, learned_at, '2020-01-01T00:00:00Z', "
                 "'2020-02-01T00:00:00Z', fingerprint, series, facts FROM baselines")  # fmt: skip
    told = json.loads(here.sercheck("ledger", "prune", "--before", "2027-01-01", "--format", "json").out)
    assert told["baselines"] == 1
    assert verified(here) == (0, [])


@pytest.mark.parametrize("here", ["sqlite"], indirect=True)
def test_a_prune_that_fails_removes_nothing(here, monkeypatch):
    """One transaction: whatever happens in the middle, all is there."""
    monkeypatch.setattr(prune, "NEWEST", 2)
    many(here, 4)
    before = here.sercheck("ledger", "records", "--format", "json").out

    def breaks(*_: object) -> int:
        raise OSError("pulled the plug")

    monkeypatch.setattr(prune, "_remove_baselines", breaks)
    assert here.sercheck("ledger", "prune", "--before", "2026-03-16").status == 2
    assert here.sercheck("ledger", "records", "--format", "json").out == before
