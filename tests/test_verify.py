from __future__ import annotations

import json
import shutil
from pathlib import Path

import pandas as pd
import pytest
from fsspec.implementations.memory import MemoryFileSystem
from gate_runs import DAY, NOW, Place, place, water
from servers import new_database
from sqlalchemy import NullPool, create_engine, text

from sercheck.store import prune


@pytest.fixture(scope="module")
def templates(tmp_path_factory) -> dict[str, tuple[Path, str]]:
    """Of each kind of store the folder and the ledger's URL of one that was made, for the tests to copy."""
    return {}


@pytest.fixture(params=["sqlite", "postgresql"])
def here(request, tmp_path, capsys, monkeypatch, templates, tmp_path_factory) -> Place:
    """A store of each kind with a learned history, a released and a held batch."""
    servers = request.param == "postgresql"
    if request.param not in templates:
        made = place(tmp_path_factory.mktemp("template"), capsys, monkeypatch)
        url = request.getfixturevalue("server") if servers else f"sqlite:///{made.folder}/.sercheck/ledger.sqlite"
        monkeypatch.setenv("SERCHECK_LEDGER", url)
        assert made.sercheck("learn", "rules.yaml", "history.csv").status == 0
        assert made.gate("batch.csv", history=None).status == 0
        made.frame("bad.csv", water(DAY + pd.Timedelta(days=1), 1, seed=4).assign(cm=777.0))
        assert made.gate("bad.csv", "--as-of", "2026-03-12T01:00:00Z", history=None).status == 1
        templates[request.param] = made.folder, url
    folder, url = templates[request.param]
    shutil.copytree(folder, tmp_path, dirs_exist_ok=True)
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv("SERCHECK_STORE", raising=False)
    monkeypatch.delenv("SERCHECK_LEDGER", raising=False)
    if servers:
        url = new_database(request.getfixturevalue("running_server"), url)
        monkeypatch.setenv("SERCHECK_LEDGER", url)
    else:
        url = f"sqlite:///{tmp_path}/.sercheck/ledger.sqlite"
    monkeypatch.setenv("LEDGER_OF_TEST", url)
    return Place(tmp_path, capsys, monkeypatch)


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
    """A missing, a cut, a changed and a foreign file, a missing entry and a missing archive are each told."""
    (part,) = files(here, "2026-03-10/harbour*.parquet")
    content = part.read_bytes()
    (other,) = files(here, "2026-03-11/harbour*.parquet")
    flipped = bytearray(content)
    flipped[len(content) // 2] ^= 1
    for wrong in (content[:-9], other.read_bytes(), bytes(flipped), b""):
        part.write_bytes(wrong)
        status, (said,) = verified(here)
        assert (status, said[:34]) == (1, "its bytes are not those that were ")
    part.unlink()
    assert verified(here) == (1, ["the file cannot be read: the archive cannot be read: no such file or directory"])
    part.write_bytes(content)
    assert verified(here) == (0, [])
    for foreign in (part.with_name("harbour_water-other.parquet"), part.parent / "notes.txt", part.parents[1] / "notes",
                    part.parents[1] / "log" / "notes"):  # fmt: skip
        foreign.write_bytes(content)
        assert verified(here) == (1, ["no batch in the archive's log has this file"])
        foreign.unlink()
    (part.parents[2] / "harbor_water").mkdir()
    assert verified(here) == (1, ["the ledger knows no feed of this name"])
    (part.parents[2] / "harbor_water").rmdir()
    entry = next(path for path in files(here, "log/*.json") if '"released"' in path.read_text() and
                 "harbour_water-" in path.read_text())  # fmt: skip
    said = entry.read_text()
    entry.write_text("{")
    assert "cannot be read" in verified(here)[1][0]
    entry.unlink()
    faults = ["it is released and the archive has none of its rows", "no batch in the archive's log has this file"]
    assert verified(here) == (1, faults)
    assert here.gate("batch.csv", history=None).status == 0
    assert verified(here) == (0, [])
    assert "harbour_water" in said


@pytest.mark.parametrize("here", ["sqlite"], indirect=True)
def test_files_kept_before_their_hashes_were(here):
    """An archive of an older version is counted and read as ever, and what is not checked is said."""
    for path in files(here, "log/*.json"):
        entry = json.loads(path.read_text())
        assert len(entry.pop("hashes")) >= 1
        path.write_text(json.dumps(entry))
    ended = here.sercheck("ledger", "verify")
    assert ended.status == 0
    assert "42 files without a hash (kept by an older version) are unchecked but for their rows" in ended.out
    (part,) = files(here, "2026-03-10/harbour*.parquet")
    (other,) = files(here, "2026-03-11/harbour*.parquet")
    content = part.read_bytes()
    part.write_bytes(other.read_bytes())
    assert verified(here) == (1, ["its rows in the archive are of other times than when they were kept"])
    part.write_bytes(content[:-9])
    assert "no whole Parquet file" in verified(here)[1][0]
    part.unlink()
    assert verified(here) == (1, ["0 of its 48 rows are in the archive"])


@pytest.mark.parametrize("named", [True, False])
def test_an_archive_at_a_url_that_lost_something(tmp_path, capsys, monkeypatch, named):
    """The same at a URL, with the hashes in the log and, in an older log, in the names of the objects."""
    MemoryFileSystem.store.clear()
    monkeypatch.setattr(MemoryFileSystem, "pseudo_dirs", [""])
    here = place(tmp_path, capsys, monkeypatch)
    monkeypatch.setenv("SERCHECK_STORE", "memory://bucket/prefix")
    monkeypatch.setenv("SERCHECK_LEDGER", f"sqlite:///{tmp_path}/ledger.db")
    assert here.sercheck("learn", "rules.yaml", "history.csv").status == 0
    assert here.gate("batch.csv", history=None).status == 0
    if not named:
        for name in [name for name in MemoryFileSystem.store if "/log/" in name]:
            entry = json.loads(MemoryFileSystem.store[name].getvalue())
            del entry["hashes"]
            MemoryFileSystem().pipe_file(name, json.dumps(entry).encode())
    ended = json.loads(here.sercheck("ledger", "verify", "--format", "json").out)
    assert (ended["faults"], ended["files"], ended["unchecked"]) == ([], 41, 0)
    (name,) = [name for name in MemoryFileSystem.store if "/2026-03-10/" in name]
    content = MemoryFileSystem.store[name].getvalue()
    flipped = bytearray(content)
    flipped[len(content) // 2] ^= 1
    files = MemoryFileSystem()
    files.pipe_file(name, bytes(flipped))
    assert "its bytes are not those that were written" in verified(here)[1][0]
    files.pipe_file(name, content[:-9])
    assert verified(here) == (1, [f"it has {len(content) - 9} bytes instead of {len(content)}"])
    files.rm(name)
    assert verified(here) == (1, ["the file cannot be read: there is no such place or object"])
    files.pipe_file(name, content)
    files.pipe_file(name.replace(".parquet", "0.parquet"), content)
    assert verified(here) == (1, ["no batch in the archive's log has this file"])
    files.rm(name.replace(".parquet", "0.parquet"))
    files.pipe_file("/bucket/prefix/archive/harbor_water/log/x", b"")
    assert verified(here) == (1, ["the ledger knows no feed of this name"])
    MemoryFileSystem.store.clear()


def test_an_archive_at_the_url_of_a_folder(tmp_path, capsys, monkeypatch):
    """``file://`` is a folder: a flipped byte there is told."""
    here = place(tmp_path, capsys, monkeypatch)
    monkeypatch.setenv("SERCHECK_STORE", f"file://{tmp_path}/by%20url")
    assert here.gate("batch.csv").status == 0
    assert verified(here) == (0, [])
    (part,) = (tmp_path / "by url" / "archive").rglob("*.parquet")
    content = bytearray(part.read_bytes())
    content[len(content) // 2] ^= 1
    part.write_bytes(content)
    assert "its bytes are not those that were written" in verified(here)[1][0]


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
