from __future__ import annotations

import os
import resource
import signal
import subprocess
import sys
import threading
import time
from pathlib import Path

import numpy as np
import pytest
from gate_runs import NOW, RULES, Place, place, process

import sercheck
from sercheck import limits
from sercheck.errors import LimitError, RuleFileError


@pytest.fixture
def here(tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> Place:
    """A folder with rules, history and a healthy batch."""
    return place(tmp_path, capsys, monkeypatch)


@pytest.mark.parametrize(
    ("asked", "said"),
    [("time: 1ms", "takes longer than 0.001 s"), ("memory: 0.001MB", "needs more than 1,0")],
)
def test_a_limit_that_is_passed_is_trouble(here, asked, said):
    """More memory or time than the rule file allows: status 2, one sentence, nothing kept, nothing moved."""
    here.write("rules.yaml", RULES + f"limits: {{{asked}}}\n")
    done = process("gate", "rules.yaml", "batch.csv", "--history", "history.csv", "--as-of", NOW, "--released-to", ".")
    assert done.returncode == 2, done.stderr
    assert said in done.stderr
    assert "nothing was released" in done.stderr
    assert done.stderr.count("\n") == 1
    assert (here.folder / "batch.csv").exists()
    assert here.sercheck("ledger", "batches", "--format", "json").out == ""


def test_a_limit_that_is_kept_changes_nothing(here):
    """With room enough the answer is the same, and the process is left as it was."""
    wanted = here.gate("batch.csv", "--no-keep", "--format", "json").out
    here.write("rules.yaml", RULES + "limits: {memory: 4GB, time: 10min}\n")
    before = resource.getrlimit(resource.RLIMIT_DATA), signal.getsignal(signal.SIGALRM)
    assert here.gate("batch.csv", "--no-keep", "--format", "json").out.split('"record_id"')[0] == (
        wanted.split('"record_id"')[0]
    )
    assert (resource.getrlimit(resource.RLIMIT_DATA), signal.getsignal(signal.SIGALRM)) == before
    assert signal.getitimer(signal.ITIMER_REAL) == (0.0, 0.0)


ENDLESS = """
import signal, time
from sercheck import limits
from sercheck.errors import LimitError
began = time.monotonic()
try:
    with limits.within({"time": 0.2}):
        while time.monotonic() - began < 20:
            pass
except LimitError as trouble:
    print(trouble, time.monotonic() - began < 10, signal.getsignal(signal.SIGALRM) == signal.SIG_DFL)
"""


def test_work_that_does_not_end_is_interrupted():
    """Where the main thread is alone, even a loop that never looks at the clock is ended."""
    ended = subprocess.run([sys.executable, "-c", ENDLESS], capture_output=True, text=True, check=True)
    assert "longer than" in ended.stdout
    assert ended.stdout.endswith("True True\n")


def test_memory_beyond_the_limit_is_refused_by_the_system():
    """A single large piece of memory is not handed out at all where the main thread is alone."""
    pid = os.fork()
    if pid == 0:
        status = 9
        try:
            with limits.within({"memory": 50e6}):
                np.ones(100_000_000)
        except LimitError:
            status = 0
        finally:
            os._exit(status)
    assert os.waitstatus_to_exitcode(os.waitpid(pid, 0)[1]) == 0


def test_threads_of_a_program_are_left_alone(here):
    """In a program with threads the limits are looked at between pieces of work, and nobody else is disturbed."""
    here.write("rules.yaml", RULES + "limits: {time: 1ms, memory: 1MB}\n")
    said: list[object] = []

    def work() -> None:
        try:
            sercheck.gate("rules.yaml", "batch.csv", "history.csv", as_of=NOW)
        except LimitError as error:
            said.append(str(error))
        said.append(resource.getrlimit(resource.RLIMIT_DATA))

    before = resource.getrlimit(resource.RLIMIT_DATA)
    thread = threading.Thread(target=work)
    thread.start()
    thread.join()
    assert "takes longer than" in str(said[0]) or "needs more than" in str(said[0])
    assert said[1] == before


def test_what_is_deep_or_large_is_refused_before_it_is_read():
    """Nesting, references that multiply, tags, endless numbers and files beyond all reason are refused at once."""
    head = "feed: x\ncolumns: {time: at, values: [v]}\nevery: 1h\nrules:\n  - name: a\n    measure: level\n    stays: "
    hostile = [
        head + "[" * 100_000,
        head + "{a: " * 50_000,
        "a: &a [x, x]\nb: &b [*a, *a]\nc: &c [*b, *b]\nd: [*c, *c]\n",
        "!!python/object/apply:os.system ['true']\n",
        head + "{below: " + "9" * 100_000 + "}\n",
        "x: 1\n" * 400_000,
        head + "'" + "a*" * 200_000 + "'\n",
    ]
    for text in hostile:
        began = time.process_time()
        with pytest.raises(RuleFileError) as caught:
            sercheck.load_rules(text)
        assert time.process_time() - began < 5
        assert len(str(caught.value).splitlines()[0]) < 500


def test_a_pattern_of_series_cannot_run_away(here):
    """A glob with many stars that nearly fits is refused or answered in time."""
    only = "*a" * 40 + "b"
    keys = RULES.replace("stays: {like: history}}", f"stays: {{like: history}}, only: '{only}'}}", 1)
    here.write("rules.yaml", keys)
    rows = (here.folder / "batch.csv").read_text().replace("east", "a" * 200)
    began = time.process_time()
    ended = here.gate(here.write("in.csv", rows), "--no-keep")
    assert time.process_time() - began < 10
    assert ended.status in (0, 1, 2)


def test_everything_in_the_store_is_for_its_owner_alone(here):
    """Ledger and archive are made private, whatever the umask of whoever starts the gate."""
    old = os.umask(0)
    try:
        assert here.gate("batch.csv").status == 0
        assert here.sercheck("learn", "rules.yaml", "history.csv").status == 0
    finally:
        os.umask(old)
    for path in [here.folder / ".sercheck", *(here.folder / ".sercheck").rglob("*")]:
        assert path.stat().st_mode & 0o777 == (0o700 if path.is_dir() else 0o600), path
