"""What the README shows is what the program prints: its commands, its screen, its record, its rule file."""

import json
import re
import shlex
import subprocess
import sys
from pathlib import Path

import pytest

import sercheck

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")


def blocks(language):
    """The fenced blocks of one language."""
    return re.findall(rf"^```{language}\n(.*?)^```$", README, flags=re.DOTALL | re.MULTILINE)


def run(command, tmp_path, *more):
    """Run a ``sercheck`` command of the README as it stands, from the top folder, with a store of its own."""
    words = shlex.split(command)
    assert words[0].endswith("sercheck")
    call = [sys.executable, "-m", "sercheck", *words[1:], *more]
    return subprocess.run(
        call, cwd=ROOT, capture_output=True, text=True, env={"SERCHECK_STORE": str(tmp_path / "store")}, check=False
    )


def test_the_main_command_releases_the_healthy_batch(tmp_path):
    """The command of the first block ends with 0 and says released."""
    command = next(line for line in blocks("sh")[0].splitlines() if line.startswith(".venv/bin/sercheck"))
    done = run(command, tmp_path)
    assert done.returncode == 0, done.stderr
    assert done.stderr.startswith("RELEASED")


def test_the_screen_is_what_is_printed(tmp_path):
    """The worked screen is the output of its command, to the letter."""
    command, _, screen = blocks("console")[0].partition("\n")
    done = run(command.removeprefix("$ "), tmp_path)
    assert done.returncode == 1
    assert done.stderr == screen


def test_the_record_is_one_that_is_written(tmp_path):
    """The record explained is one of those of the worked screen."""
    command = blocks("console")[0].partition("\n")[0].removeprefix("$ ")
    run(command, tmp_path, "--records", str(tmp_path / "records.jsonl"))
    shown = json.loads(blocks("json")[0])
    written = [json.loads(line) for line in (tmp_path / "records.jsonl").read_text(encoding="utf-8").splitlines()]
    (record,) = [record for record in written if record["record_id"] == shown["record_id"]]
    approximate = {
        name: pytest.approx(value, rel=1e-3) if isinstance(value, float) else value for name, value in shown.items()
    }
    assert record == {**approximate, "sercheck_version": sercheck.__version__}


def test_the_rule_file_compiles():
    """The rule file explained is accepted."""
    book = sercheck.load_rules(blocks("yaml")[0])
    assert [rule.measure for rule in book.rules] == ["autocorrelation", "seasonal_lag"]


def test_the_python_example_runs(tmp_path, monkeypatch):
    """The Python lines run as written on the demo's frames."""
    import pandas as pd

    monkeypatch.chdir(ROOT)
    names = {
        "batch_frame": pd.read_csv("demo_data/batches/healthy.csv"),
        "history_frame": pd.read_csv("demo_data/history.csv.gz"),
    }
    exec(blocks("python")[0], names)
    assert names["verdict"].decision == "released"


def test_every_folder_named_is_there():
    """The rule files and demo files that the README names exist."""
    named = set(re.findall(r"(?:rules|demo_data)/[\w/.]*\w", README))
    assert named
    assert [name for name in named if not (ROOT / name).exists()] == []
