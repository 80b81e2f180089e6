"""A process killed at every place where it writes: after the same command again all is as if it had never been killed.

    python -m tests.killed --runs 200 [--seed 1] [--ledger sqlite|postgresql|both] [--archive folder|url|both] [--list]

The boundaries are found, not listed by hand: a first run in a process of its own counts every rename, link, removal,
new folder, flush, new file, statement and commit, and names each. A killed run is the same command in a fresh copy of
the same store, ended by SIGKILL just before one of them; every fourth is killed at any moment instead, in the middle of
whatever it does. Then the command is given again, and ledger, archive, files and what the desk was told are compared
with those of a run that was left alone. The program itself knows nothing of this.

The archive lies in the store's folder or at a URL. What is behind the URL is a folder that writes every object in two
halves under the name it was asked for (a file server; a bucket is kinder), with a boundary between them.
"""

from __future__ import annotations

import argparse
import importlib
import json
import os
import re
import shutil
import signal
import sys
import tempfile
import time
from collections import Counter
from collections.abc import Callable, Sequence
from contextlib import ExitStack
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from fsspec import register_implementation
from fsspec.implementations.local import LocalFileSystem

from sercheck.cli import main as sercheck_main
from tests.gate_runs import DAY, NOW, RULES, water
from tests.left_behind import FILE, state
from tests.servers import databases

DESK = "tell: [harbour]\n"
WARM = (
    "pandas", "pyarrow.parquet", "pyarrow.csv", "pyarrow.compute", "sqlalchemy", "sqlalchemy.dialects.sqlite",
    "sqlalchemy.dialects.postgresql", "psycopg", "scipy.stats", "statsmodels.api", "matplotlib.figure", "jinja2",
    "sercheck.verdict", "sercheck.taught", "sercheck.settle", "sercheck.briefing", "sercheck.cli.gate",
    "sercheck.desks",
)  # fmt: skip
"""Libraries that a command imports."""
WAIT = 120.0
"""Seconds after which a process that has not ended is stuck."""


@dataclass(frozen=True)
class Scene:
    """One command in a folder that some other commands have prepared."""

    name: str
    before: tuple[tuple[str, ...], ...]
    command: tuple[str, ...]
    statuses: tuple[int, ...] = (0,)


GATE = ("gate", "rules.yaml")
OUT = ("--records", "r.jsonl", "--brief", "b.html", "--released-to", "released", "--held-to", "held", "--as-of", NOW)
LEARN = ("learn", "rules.yaml", "history.csv")
SCENES = (
    Scene("first learn", (), LEARN),
    Scene("first gate of a new store", (), (*GATE, "batch.csv", "--history", "history.csv", *OUT)),
    Scene("released", (LEARN,), (*GATE, "batch.csv", *OUT)),
    Scene("held, a desk told", (LEARN,), (*GATE, "bad.csv", *OUT), (1,)),
    Scene(
        "settled", (LEARN, (*GATE, "bad.csv", "--as-of", NOW)),
        ("settle", "harbour_water", "--as", "released", "--by", "Ana", "--because", "pump test"),
    ),
)  # fmt: skip


@dataclass
class Tracer:
    """Counts the places where a process writes and kills it before one of them."""

    kill_at: int | None
    names: list[str] = field(default_factory=list)
    quiet: int = 0

    def at(self, name: str) -> None:
        """A boundary."""
        if len(self.names) == self.kill_at:
            os.kill(os.getpid(), signal.SIGKILL)
        self.names.append(name)

    def install(self) -> None:
        """Put it around everything that writes."""
        Shelf.tracer = self
        for name in ("replace", "rename", "link", "unlink", "mkdir", "rmdir", "fsync", "symlink", "truncate"):
            setattr(os, name, self._around(getattr(os, name), name))
        plain_open = os.open

        def opened(path: Any, flags: int, *more: Any, **named: Any) -> int:
            if flags & os.O_CREAT:
                self.at(f"create {_short(path)}")
            return plain_open(path, flags, *more, **named)

        os.open = opened  # type: ignore[assignment]
        from sqlalchemy.engine.default import DefaultDialect

        for method in ("do_execute", "do_executemany", "do_commit"):
            plain = getattr(DefaultDialect, method)
            setattr(DefaultDialect, method, self._around_sql(plain, method))

    def _around(self, plain: Callable[..., Any], name: str) -> Callable[..., Any]:
        def wrapped(*args: Any, **named: Any) -> Any:
            self.at(f"{name} {_short(args[-1] if name in ('replace', 'rename', 'link') else args[0])}")
            return plain(*args, **named)

        return wrapped

    def _around_sql(self, plain: Callable[..., Any], method: str) -> Callable[..., Any]:
        def wrapped(dialect: Any, target: Any, *args: Any, **named: Any) -> Any:
            if method == "do_commit":
                self.at("commit")
            else:
                words = str(args[0]).split()
                if words[0] not in ("SELECT", "PRAGMA", "BEGIN"):
                    self.at(" ".join(words[:3])[:60])
            return plain(dialect, target, *args, **named)

        return wrapped


class Shelf(LocalFileSystem):  # type: ignore[misc]  # fsspec has no types
    """A folder behind a URL; every object is written in two halves."""

    protocol = "shelf"
    tracer: Tracer | None = None

    @classmethod
    def _strip_protocol(cls, path: str) -> str:
        return str(super()._strip_protocol(str(path).removeprefix("shelf://")))

    def pipe_file(self, path: str, value: bytes, mode: str = "overwrite", **more: Any) -> None:
        """Put an object there as a file server does."""
        half = len(value) // 2
        self._at(f"create {_short(path)}")
        with Path(path).open("wb") as file:
            file.write(value[:half])
            file.flush()
            self._at(f"half of {_short(path)}")
            file.write(value[half:])

    def _at(self, name: str) -> None:
        if self.tracer:
            self.tracer.at(name)


register_implementation("shelf", Shelf)
SHELF = "shelf"
"""Name of the folder behind the URL, in the working folder of a run whose archive lies at one."""


def _short(target: Any) -> str:
    """A path without what differs from run to run."""
    if isinstance(target, int):
        target = Path(f"/proc/self/fd/{target}").readlink()
    name = Path(str(target)).name
    name = re.sub(r"\.sercheck-[0-9a-f]+-\d+-[0-9a-f]+", ".draft", name)
    return re.sub(r"^(\.?)\d{20}-[0-9a-f]{8}", r"\1entry", name)


def run(command: Sequence[str], folder: Path, url: str | None, tracer: Tracer | None, moment: float = 0.0) -> int:
    """The command in a process of its own; its status, or the negative signal that ended it.

    With a tracer that kills nothing the names of the boundaries are left in ``folder/../names.json``.
    """
    process = os.fork()
    if process == 0:
        _child(command, folder, url, tracer, moment)
    until = time.monotonic() + WAIT
    while time.monotonic() < until:
        done, status = os.waitpid(process, os.WNOHANG)
        if done:
            return os.waitstatus_to_exitcode(status)
        time.sleep(0.002)
    os.kill(process, signal.SIGKILL)
    os.waitpid(process, 0)
    raise AssertionError(f"stuck for {WAIT:.0f} s: sercheck {' '.join(command)}")


def _child(command: Sequence[str], folder: Path, url: str | None, tracer: Tracer | None, moment: float) -> None:
    status = 2
    try:
        os.chdir(folder)
        said = os.open(folder.parent / "said.txt", os.O_WRONLY | os.O_CREAT | os.O_APPEND, 0o600)
        for stream in (1, 2):
            os.dup2(said, stream)
        sys.stdout, sys.stderr = open(1, "w", closefd=False), open(2, "w", closefd=False)  # noqa: SIM115
        os.environ.update({"SERCHECK_DESK_HARBOUR": "here://", "SERCHECK_STORE": "store", "SERCHECK_TRACEBACK": "1"})
        if (folder / SHELF).is_dir():
            os.environ |= {"SERCHECK_STORE": f"shelf://{folder / SHELF}", "SERCHECK_LEDGER": f"sqlite:///{folder}/{FILE}"}
        if url:
            os.environ["SERCHECK_LEDGER"] = url
        _send_to(folder.parent / "told.txt", tracer)
        if tracer:
            tracer.install()
        if moment:
            signal.setitimer(signal.ITIMER_REAL, moment)  # nobody handles it: the process ends where it stands
        sys.argv = ["sercheck", *command]
        sercheck_main()
    except SystemExit as end:
        status = int(end.code or 0)
    finally:
        sys.stdout.flush()
        sys.stderr.flush()
        if tracer and tracer.kill_at is None:
            (folder.parent / "names.json").write_text(json.dumps(tracer.names))
        os._exit(status)


def _send_to(file: Path, tracer: Tracer | None) -> None:
    """A desk that writes the ids of what it is told into a file."""
    from sercheck import desks, sending

    def told(address: str, title: str, body: str, message_id: str, seconds: float) -> str:
        if tracer:
            tracer.at("send")
        with file.open("a") as lines:
            lines.write(f"{message_id}\n")
        if tracer:
            tracer.at("sent")
        return "sent"

    desks.send_apart = told
    sending.installed = lambda: True


def prepared(scene: Scene, folder: Path, url: str | None, *, at_url: bool = False) -> None:
    """The folder just before the scene's command."""
    (folder / (SHELF if at_url else "")).mkdir(parents=True)
    if at_url:
        (folder / FILE).parent.mkdir()
    (folder / "rules.yaml").write_text(RULES + DESK)
    water(DAY - pd.Timedelta(days=40), 40, seed=1).to_csv(folder / "history.csv", index=False)
    batch = water(DAY, 1, seed=2)
    batch.to_csv(folder / "batch.csv", index=False)
    batch.assign(cm=777.0).to_csv(folder / "bad.csv", index=False)
    for command in scene.before:
        status = run(command, folder, url, None)
        assert status in (0, 1), (folder.parent / "said.txt").read_text()


@dataclass
class Figures:
    """What a harness saw."""

    runs: int = 0
    killed: int = 0
    boundaries: Counter[str] = field(default_factory=Counter)
    repeats: Counter[str] = field(default_factory=Counter)


class Stage:
    """One scene with one kind of ledger: its folder before, its boundaries, and the state of a run left alone."""

    def __init__(self, scene: Scene, at: Path, new_url: Callable[[str | None], str] | None, *, at_url: bool) -> None:
        self.scene, self._at, self._new_url = scene, at, new_url
        self._count = 0
        self._template_url = new_url(None) if new_url else None
        self._template = at / "template" / "work"
        prepared(scene, self._template, self._template_url, at_url=at_url)
        folder, url = self._fresh()
        tracer = Tracer(None)
        began = time.perf_counter()
        status = run(scene.command, folder, url, tracer)
        self.took = time.perf_counter() - began
        assert status in scene.statuses, f"{scene.name}: {status}: {(folder.parent / 'said.txt').read_text()}"
        self.boundaries = json.loads((folder.parent / "names.json").read_text())
        self.wanted = state(folder, url)

    def _fresh(self) -> tuple[Path, str | None]:
        self._count += 1
        folder = self._at / f"run{self._count}"
        shutil.copytree(self._template.parent, folder)
        return folder / "work", self._new_url(self._template_url) if self._new_url else None

    def killed(self, kill_at: int | None, moment: float, figures: Figures) -> None:
        """Kill one run before a boundary or at a moment, give the command again, compare."""
        folder, url = self._fresh()
        status = run(self.scene.command, folder, url, None if kill_at is None else Tracer(kill_at), moment)
        where = f"{self.scene.name}, " + (
            f"after {moment:.3f} s" if kill_at is None else f"before {self.boundaries[kill_at]} ({kill_at})"
        )
        figures.runs += 1
        figures.killed += status < 0
        figures.boundaries[f"{self.scene.name}: {'any moment' if kill_at is None else self.boundaries[kill_at]}"] += 1
        again = run(self.scene.command, folder, url, None)
        figures.repeats[f"{again}"] += 1
        found = state(folder, url)
        said = (folder.parent / "said.txt").read_text()
        wrong = [key for key in sorted({*found, *self.wanted}) if found.get(key) != self.wanted.get(key)]
        assert not wrong, (
            f"killed in {where}: {wrong[0]} is {str(found.get(wrong[0]))[:600]} instead of "
            f"{str(self.wanted.get(wrong[0]))[:600]} ({len(wrong)} things differ: {wrong[:8]}); said: {said[-1500:]}"
        )
        shutil.rmtree(folder.parent)


def harness(
    at: Path,
    runs: int,
    seed: int,
    new_url: Callable[[str | None], str] | None,
    scenes: Sequence[Scene] = SCENES,
    *,
    at_url: bool = False,
) -> Figures:
    """Kill ``runs`` times, spread over all scenes and boundaries; the figures.

    Raises:
        AssertionError: a state differs from that of a run left alone.
    """
    for name in WARM:
        importlib.import_module(name)  # once, for all the processes that come from this one
    chance = np.random.default_rng(seed)
    figures = Figures()
    stages = [Stage(scene, at / f"{place}", new_url, at_url=at_url) for place, scene in enumerate(scenes)]
    orders = [_order(stage.boundaries, chance) for stage in stages]
    for number in range(runs):
        stage, order = stages[number % len(stages)], orders[number % len(stages)]
        place = order[number // len(stages) % len(order)]
        if number % 4 == 3:
            stage.killed(None, float(chance.uniform(0.02, 1.0)) * stage.took, figures)
        else:
            stage.killed(place, 0.0, figures)
    return figures


def _order(boundaries: list[str], chance: np.random.Generator) -> list[int]:
    """Places of the boundaries: one of every name first, then the others, at random."""
    mixed = [int(place) for place in chance.permutation(len(boundaries))]
    first = list({boundaries[place]: place for place in mixed}.values())
    return first + [place for place in mixed if place not in first]


def main() -> None:
    """Run the harness with each kind of ledger and print the figures."""
    parser = argparse.ArgumentParser(prog="python -m tests.killed", description=__doc__)
    parser.add_argument("--runs", type=int, default=200)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--ledger", choices=["sqlite", "postgresql", "both"], default="both")
    parser.add_argument("--archive", choices=["folder", "url", "both"], default="both")
    parser.add_argument("--list", action="store_true", help="name the boundaries and how often each was killed at")
    asked = parser.parse_args()
    ledgers = ["sqlite", "postgresql"] if asked.ledger == "both" else [asked.ledger]
    archives = ["folder", "url"] if asked.archive == "both" else [asked.archive]
    kinds = [(ledger, archive) for ledger in ledgers for archive in archives]
    with ExitStack() as stack, tempfile.TemporaryDirectory() as folder:
        new = stack.enter_context(databases()) if "postgresql" in ledgers else None
        for ledger, archive in kinds:
            at, new_url = Path(folder) / ledger / archive, new if ledger == "postgresql" else None
            figures = harness(at, asked.runs // len(kinds), asked.seed, new_url, at_url=archive == "url")
            print(
                f"{ledger}, archive in a folder: " if archive == "folder" else f"{ledger}, archive at a URL: ",
                f"{figures.runs} runs, {figures.killed} killed at {len(figures.boundaries)} named places, "
                f"status of the repeats {dict(figures.repeats)}, every state as if never killed",
                sep="",
                flush=True,
            )
            if asked.list:
                for name, count in sorted(figures.boundaries.items()):
                    print(f"  {count:3d}  {name}")


if __name__ == "__main__":
    main()
