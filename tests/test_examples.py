from __future__ import annotations

import csv
import gzip
import os
import shlex
import shutil
import subprocess
import sys
from pathlib import Path

import pytest
from sqlalchemy import create_engine, text
from sqlalchemy.exc import DBAPIError, StatementError

import sercheck
from sercheck.taught import teach

ROOT = Path(__file__).parents[1]
RULES = ROOT / "rules" / "substation_heat.yaml"
BATCHES = ROOT / "demo_data" / "batches"


def run(words: list[str], folder: Path, **settings: str) -> subprocess.CompletedProcess[str]:
    """A command in a folder, with ``sercheck`` on the path."""
    env = {**os.environ, "PATH": f"{Path(sys.executable).parent}:{os.environ['PATH']}", **settings}
    return subprocess.run(words, cwd=folder, env=env, capture_output=True, text=True, check=False, timeout=180)


@pytest.fixture(scope="module")
def learned(tmp_path_factory) -> Path:
    """A store that has learned the demo's history."""
    store = tmp_path_factory.mktemp("learned") / "st"
    teach(sercheck.load_rules(str(RULES)), ROOT / "demo_data" / "history.csv.gz", str(store))
    return store


def taught(learned: Path, folder: Path) -> str:
    """A copy of it."""
    shutil.copytree(learned, folder / "st")
    return str(folder / "st")


@pytest.fixture(params=["sqlite", "postgres"])
def warehouse(request, tmp_path):
    """A database of each kind whose table of heat holds the demo's history."""
    url = f"sqlite:///{tmp_path}/w.db" if request.param == "sqlite" else request.getfixturevalue("server")
    engine = create_engine(url)
    with gzip.open(ROOT / "demo_data" / "history.csv.gz", "rt") as lines:
        rows = [{**row, "kwh": float(row["kwh"]) if row["kwh"] else None} for row in csv.DictReader(lines)]
    with engine.begin() as connection:
        connection.execute(text(
            "CREATE TABLE heat (substation TEXT NOT NULL, read_at TIMESTAMP WITH TIME ZONE NOT NULL, "
            "kwh DOUBLE PRECISION, PRIMARY KEY (substation, read_at))"
        ))  # fmt: skip
        connection.execute(text("INSERT INTO heat VALUES (:substation, :read_at, :kwh)"), rows)
    yield url, engine, len(rows)
    engine.dispose()


def test_one_transaction_stages_judges_and_moves_or_undoes(warehouse, tmp_path, monkeypatch):
    """A healthy file is in the table once however often it is loaded; a shuffled or broken one leaves no trace."""
    url, engine, before = warehouse
    program = [sys.executable, str(ROOT / "rules" / "load_in_one_transaction.py"), str(RULES)]
    settings = {"SERCHECK_SOURCE_WAREHOUSE": url, "SERCHECK_STORE": str(tmp_path / "st")}
    monkeypatch.syspath_prepend(str(ROOT / "rules"))
    monkeypatch.setenv("SERCHECK_STORE", settings["SERCHECK_STORE"])
    import load_in_one_transaction

    def new_rows() -> int:
        with engine.connect() as connection:
            return int(connection.execute(text("SELECT count(*) FROM heat")).scalar() or 0) - before

    assert not load_in_one_transaction.load(str(RULES), str(BATCHES / "shuffled.csv"), url).released
    assert new_rows() == 0
    (tmp_path / "broken.csv").write_text("substation,read_at,kwh\n2026-01-19 00:00,a,5\n")
    with pytest.raises((sercheck.SercheckError, DBAPIError, StatementError)):
        load_in_one_transaction.load(str(RULES), str(tmp_path / "broken.csv"), url)
    assert new_rows() == 0
    assert load_in_one_transaction.load(str(RULES), str(BATCHES / "healthy.csv"), url).released
    assert new_rows() == 288
    name, status = ("healthy.csv", 0) if url.startswith("postgres") else ("shuffled.csv", 1)
    assert run([*program, str(BATCHES / name)], tmp_path, **settings).returncode == status  # each was judged before
    assert new_rows() == 288


def test_rows_that_are_not_committed_are_judged(server):
    """The gate sees what the transaction staged, leaves it open, and another connection sees nothing."""
    engine, other = create_engine(server), create_engine(server)
    with engine.connect() as connection:
        connection.execute(text("CREATE TABLE staged (substation TEXT, read_at TIMESTAMP WITH TIME ZONE, kwh FLOAT8)"))
        with (BATCHES / "healthy.csv").open() as lines:
            connection.execute(
                text("INSERT INTO staged VALUES (:substation, :read_at, :kwh)"),
                [{**row, "kwh": float(row["kwh"])} for row in csv.DictReader(lines)],
            )
        driver = connection.connection.dbapi_connection
        history = ROOT / "demo_data" / "history.csv.gz"
        verdicts = [
            sercheck.gate(str(RULES), given, history=history, as_of="2026-01-20T02:00:00Z")
            for given in (
                sercheck.rows(connection, table="staged"),
                sercheck.rows(driver, query="SELECT * FROM staged"),
                BATCHES / "healthy.csv",
            )
        ]
        assert [verdict.decision for verdict in verdicts] == ["released"] * 3
        assert len({verdict.batch_id for verdict in verdicts}) == 1
        assert connection.in_transaction()
        with other.connect() as outside:
            assert not other.dialect.has_table(outside, "staged")
        connection.rollback()
        assert not engine.dialect.has_table(connection, "staged")
    engine.dispose()
    other.dispose()


def test_a_python_step_hands_on_or_raises(learned, tmp_path, monkeypatch):
    """A released batch is handed on, a held one and an unreadable one stop the run."""
    monkeypatch.syspath_prepend(str(ROOT / "rules"))
    import pipeline_step

    store = Path(taught(learned, tmp_path))
    batch = BATCHES / "healthy.csv"
    assert pipeline_step.gated(str(RULES), batch, store) == batch
    with pytest.raises(sercheck.BatchHeld):
        pipeline_step.gated(str(RULES), BATCHES / "shuffled.csv", store)
    with pytest.raises(sercheck.SercheckError):
        pipeline_step.gated(str(RULES), tmp_path / "none.csv", store)


def test_a_shell_step_and_its_crontab(learned, tmp_path):
    """What cron starts moves released and held batches to their places and leaves what it cannot read."""
    store = taught(learned, tmp_path)
    (tmp_path / "rules").symlink_to(ROOT / "rules")
    (tmp_path / "inbox").mkdir()
    for name in ("healthy.csv", "shuffled.csv"):
        (tmp_path / "inbox" / name).write_bytes((BATCHES / name).read_bytes())
    (tmp_path / "inbox" / "broken.csv").write_text("nothing\n")
    (line,) = [line for line in (ROOT / "rules" / "crontab.txt").read_text().splitlines() if line.startswith("10 6")]
    command = line.split(maxsplit=5)[5].replace("cd /srv/heat", f"cd {shlex.quote(str(tmp_path))}")
    done = run(["/bin/sh", "-c", command], tmp_path, SERCHECK_STORE=store)
    assert (tmp_path / "released" / "healthy.csv").exists(), done.stderr
    assert (tmp_path / "held" / "shuffled.csv").exists()
    assert [path.name for path in (tmp_path / "inbox").iterdir()] == ["broken.csv"]
    assert "held: shuffled.csv" in done.stderr
    assert "trouble: broken.csv" in done.stderr
    assert done.stdout == ""
