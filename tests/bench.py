"""What a judgement costs beside reading its rows, and beside the usual loop over series: one table of ratios.

Run it with ``python -m tests.bench`` (some minutes; ``--small`` some ten seconds; name rows to pick some; ``--table
FILE`` writes the table as Markdown too, ``--baseline FILE`` the ratios that ``tests/test_bench.py`` holds a small run
to). Panels are made anew, seeded, in a temporary folder. Every job is a process of its own (in a small run all share
one); what it costs is its CPU, user and system, of the cheapest of three runs after one on a small file, so that
imports do not count; its memory is the peak of the whole process. Every figure is a ratio within one run.
``bench_jobs.py`` says what a job is. Two Dask workers beside one process are ``tests/scale_dask.py``'s.
"""

from __future__ import annotations

import argparse
import json
import resource
import subprocess
import sys
import tempfile
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Self

from tests import bench_jobs as jobs

PROFILED = 6
"""Functions told of a row that misses."""
RUNS = 3
TOLERATED = 2.0
"""How many times worse than the stored ratio a row may become before a test fails."""
BASELINE = Path(__file__).parent / "reference" / "bench.json"


@dataclass(frozen=True)
class Size:
    """Series and steps of the panels."""

    wide: tuple[int, int] = (5_000, 1_000)
    short: tuple[int, int] = (50_000, 100)
    long: tuple[int, int] = (20, 100_000)
    flat: tuple[int, int] = (2_000, 10_000)
    days: int = 1_000
    looped: tuple[int, int, int] = (200, 400, 1)
    one: tuple[int, int] = (1_000_000, 1_000)


SMALL = Size((300, 1_000), (2_000, 100), (4, 20_000), (0, 0), 20, (60, 60, 1), (200_000, 500))


@dataclass
class Bench:
    """A folder of panels and what was measured on them; both are made when first asked for."""

    folder: Path
    size: Size
    profiles: bool = True
    runs: int = RUNS
    shared: bool = False
    _worker: subprocess.Popen[str] | None = None
    _made: dict[str, str] = field(default_factory=dict)
    _told: dict[str, dict[str, Any]] = field(default_factory=dict)

    def job(self, job: str, **fields: object) -> dict[str, Any]:
        """Run a job, once for the same fields: in a process of its own, or in one for all where memory is not told."""
        asked = json.dumps([job, fields], sort_keys=True)
        if asked not in self._told:
            worker = self._worker or self._start()
            assert worker.stdin is not None
            assert worker.stdout is not None
            worker.stdin.write(asked + "\n")
            worker.stdin.flush()
            answer = worker.stdout.readline()
            self._worker = worker if self.shared and answer else None
            if self._worker is None:
                self._end(worker)
            if not answer:
                raise SystemExit(f"{asked} failed; its error stands above")
            self._told[asked] = json.loads(answer)
        return self._told[asked]

    def _start(self) -> subprocess.Popen[str]:
        call = [sys.executable, str(Path(jobs.__file__))]
        return subprocess.Popen(call, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True, cwd=self.folder)

    @staticmethod
    def _end(worker: subprocess.Popen[str]) -> None:
        with worker:
            worker.communicate()

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        if self._worker is not None:
            self._end(self._worker)

    def panel(self, shape: tuple[int, int], order: str = "key", missing: float = 0.0) -> str:
        """A panel's file."""
        name = f"{shape[0]}x{shape[1]}-{order}-{missing:g}.parquet"
        if name not in self._made:
            self._made[name] = str(self.folder / name)
            self.job("make", file=self._made[name], series=shape[0], steps=shape[1], order=order, missing=missing)
        return self._made[name]

    def rules(self, name: str, text: str) -> str:
        """A rule file."""
        path = self.folder / f"{name}.yaml"
        path.write_text(text)
        return str(path)

    def gate(self, file: str, runs: int | None = None, *, profile: bool = False) -> dict[str, Any]:
        """The six rules on a panel."""
        return self.job(
            "gate", rules=self.rules("six", jobs.SIX), file=file, out=str(self.folder / "records.parquet"),
            runs=runs or self.runs, warm=self.panel((3, 400)), **({"profile": True} if profile else {}),
        )  # fmt: skip

    def stream(self, *files: str, runs: int | None = None) -> dict[str, Any]:
        """Reading the files."""
        return self.job("stream", files=list(files), runs=runs or (5 * self.runs if self.shared else self.runs))

    def taught(self) -> dict[str, Any]:
        """Sixteen weeks of history learned into a store; the day after lies beside it."""
        days = str(self.folder / "days")
        if "days" not in self._made:
            Path(days).mkdir()
            Path(days, "warm").mkdir()
            self.job("make_days", folder=days, series=self.size.days)
            self.job("make_days", folder=f"{days}/warm", series=2)
            self._made["days"] = days
        return self.job(
            "learn", rules=self.rules("eight", jobs.EIGHT), folder=days, runs=1 if self.size.days > 500 else self.runs,
            warm=f"{days}/warm/history.parquet",
        )  # fmt: skip


@dataclass(frozen=True)
class Told:
    """A measured row: ratio, a remark, and where the time goes."""

    ratio: float
    remark: str
    profile: Sequence[str] = ()


@dataclass(frozen=True)
class Row:
    """A row of the table.

    Attributes:
        name: what is compared.
        wanted: the ratio to reach, or None where it is only told.
        least: the ratio is to be at least that (else at most).
        told: measures it.
        small: a small run has it too.
    """

    name: str
    wanted: float | None
    told: Callable[[Bench], Told]
    least: bool = False
    small: bool = True

    def reached(self, told: Told) -> bool:
        """The ratio is what was wanted."""
        return self.wanted is None or (told.ratio >= self.wanted if self.least else told.ratio <= self.wanted)


def _against_stream(shape: str) -> Callable[[Bench], Told]:
    def told(bench: Bench) -> Told:
        file = bench.panel(getattr(bench.size, shape))
        ours, read = bench.gate(file), bench.stream(file)
        ratio = ours["cpu"] / read["cpu"]
        remark = f"{ours['cpu']:.2f} s against {read['cpu']:.3f} s"
        return Told(ratio, remark, bench.gate(file, profile=True)["profile"] if bench.profiles else ())

    return told


def _against_loop(shape: str, place: int) -> Callable[[Bench], Told]:
    def told(bench: Bench) -> Told:
        series, steps = getattr(bench.size, shape)
        file = bench.panel((series, steps))
        ours, count = bench.gate(file), bench.size.looped[place]
        loop = bench.job("loop", file=file, series=count, runs=1 if steps > 50_000 else 2)
        a_million = 1e6 / (series * steps), 1e6 / loop["points"]
        mine, theirs = ours["cpu"] * a_million[0], loop["cpu"] * a_million[1]
        return Told(theirs / mine, f"{theirs:.2f} s a million points against {mine:.2f} s")

    return told


def _memory(bench: Bench) -> Told:
    file = bench.panel(bench.size.wide)
    ours, read = bench.gate(file)["peak"], bench.stream(file)["peak"]
    return Told(ours / read, f"{ours / 1e6:.0f} MB against {read / 1e6:.0f} MB")


def _flat(bench: Bench) -> Told:
    small, large = ((count, 1_000) for count in bench.size.flat)
    one, other = (bench.gate(bench.panel(shape), runs=1)["peak"] for shape in (small, large))
    return Told(other / one, f"{other / 1e6:.0f} MB for five times the points, {one / 1e6:.0f} MB")


def _by_time(bench: Bench) -> Told:
    shape = bench.size.flat if bench.size.flat[0] else bench.size.wide
    shape = (shape[0], 1_000)
    key, time = bench.gate(bench.panel(shape)), bench.gate(bench.panel(shape, order="time"))
    peaks = f"{time['peak'] / 1e6:.0f} MB against {key['peak'] / 1e6:.0f} MB"
    return Told(time["cpu"] / key["cpu"], f"{time['cpu']:.2f} s against {key['cpu']:.2f} s; {peaks}")


def _gaps(bench: Bench) -> Told:
    shape = bench.size.wide
    whole, gaps = bench.gate(bench.panel(shape)), bench.gate(bench.panel(shape, missing=0.05))
    return Told(gaps["cpu"] / whole["cpu"], f"{gaps['cpu']:.2f} s against {whole['cpu']:.2f} s; 5 % of cells empty")


def _one_long(bench: Bench) -> Told:
    steps, most = bench.size.one
    told = bench.job("autocorrelations", steps=steps, most=most, runs=bench.runs)
    return Told(told["cpu"] / told["whole"], f"{told['cpu'] * 1e3:.0f} ms against {told['whole'] * 1e3:.0f} ms")


def _learn(bench: Bench) -> Told:
    ours = bench.taught()
    read = bench.stream(str(bench.folder / "days" / "history.parquet"))
    return Told(ours["cpu"] / read["cpu"], f"{ours['cpu']:.2f} s against {read['cpu']:.3f} s")


def _day(bench: Bench) -> Told:
    bench.taught()
    folder = bench.folder / "days"
    ours = bench.job("day", rules=bench.rules("eight", jobs.EIGHT), folder=str(folder), runs=min(bench.runs, 2))
    kept = sorted(str(path) for path in folder.glob("store/archive/**/*.parquet"))
    read = bench.stream(str(folder / "day.parquet"), *kept)
    disk = sum(Path(path).stat().st_size for path in kept) / bench.size.days
    told = f"{ours['cpu']:.2f} s against {read['cpu']:.3f} s; what history keeps is {disk / 1e3:.0f} kB a series"
    profile: list[str] = []
    if bench.profiles:
        profile = bench.job(
            "day", rules=bench.rules("eight", jobs.EIGHT), folder=str(folder), runs=1, profile=True
        )["profile"]
    return Told(ours["cpu"] / read["cpu"], told, profile)


def _help(bench: Bench) -> Told:
    def cpu(*call: str) -> float:
        def once() -> float:
            before = resource.getrusage(resource.RUSAGE_CHILDREN)
            subprocess.run([sys.executable, *call], check=True, capture_output=True)
            after = resource.getrusage(resource.RUSAGE_CHILDREN)
            return after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime

        return min(once() for _ in range(bench.runs))

    ours, imports = cpu("-m", "sercheck", "--help"), cpu("-c", "import numpy, yaml, click")
    return Told(ours / imports, f"{ours:.2f} s against {imports:.2f} s")


ROWS = {
    "wide": Row("gate, six literal rules, n 1,000: against streaming the file", 3.0, _against_stream("wide")),
    "short": Row("the same, n 100", 4.0, _against_stream("short")),
    "loop": Row("times cheaper than the loop over series, n 1,000", 20, _against_loop("wide", 0), least=True),
    "loop-short": Row("the same, n 100", 100, _against_loop("short", 1), least=True),
    "loop-long": Row("the same, n 100,000", 1_000, _against_loop("long", 2), least=True, small=False),
    "memory": Row("peak memory against the streaming reader", 2.0, _memory, small=False),
    "flat": Row("peak memory of five times the points", 1.3, _flat, small=False),
    "time": Row("time-major file against key-sorted", 2.0, _by_time),
    "gaps": Row("5 % of cells empty against none", 2.0, _gaps),
    "one": Row("autocorrelations of one long series against one full-length transform", 0.6, _one_long),
    "learn": Row("learn, sixteen weeks hourly: against streaming the file", None, _learn),
    "day": Row("day batch, eight rules by history: against reading batch and history", 3.0, _day),
    "help": Row("sercheck --help against import numpy, yaml, click", 1.5, _help),
}


def measure(*, small: bool, names: Sequence[str] = (), folder: Path, profiles: bool = True) -> dict[str, Told]:
    """Measure rows, all or those of the names."""
    chosen = {name: row for name, row in ROWS.items() if name in (names or ROWS) and (row.small or not small)}
    with Bench(folder, SMALL if small else Size(), profiles, shared=small) as bench:
        return {name: row.told(bench) for name, row in chosen.items()}


def losses(told: dict[str, Told], baseline: dict[str, float]) -> dict[str, str]:
    """Rows whose ratio is more than twice as bad as the baseline's, and what both are."""
    lost = {}
    for name, before in baseline.items():
        now = told[name].ratio
        worse = before / now if ROWS[name].least else now / before
        if worse > TOLERATED:
            lost[name] = f"{ROWS[name].name}: {now:.3g}, was {before:.3g} ({told[name].remark})"
    return lost


def table(told: dict[str, Told]) -> str:
    """The rows as a Markdown table, and beneath it where the time of those goes that miss."""
    lines = ["| row | ratio | to reach | |", "|---|---|---|---|"]
    for name, one in told.items():
        row = ROWS[name]
        sign = "≥" if row.least else "≤"
        wanted = "told only" if row.wanted is None else f"{sign} {row.wanted:g}"
        missed = "" if row.reached(one) else "**misses**; "
        lines.append(f"| {row.name} | {one.ratio:.3g} | {wanted} | {missed}{one.remark} |")
    for name, one in told.items():
        if one.profile and not ROWS[name].reached(one):
            lines += ["", f"{ROWS[name].name}:", ""] + [f"    {line}" for line in one.profile[:PROFILED]]
    return "\n".join(lines)


def main() -> None:
    """Measure and print."""
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("rows", nargs="*", help=f"of {', '.join(ROWS)}; default all")
    parser.add_argument("--small", action="store_true", help="small panels, for a test")
    parser.add_argument("--table", metavar="FILE", help="write the table too")
    parser.add_argument("--baseline", metavar="FILE", help="write the ratios as the baseline of the test")
    asked = parser.parse_args()
    with tempfile.TemporaryDirectory() as folder:
        told = measure(small=asked.small, names=asked.rows, folder=Path(folder), profiles=not asked.small)
    text = table(told)
    print(text)
    if asked.table:
        Path(asked.table).write_text(text + "\n")
    if asked.baseline:
        ratios = {name: round(one.ratio, 3) for name, one in told.items()}
        command = "python -m tests.bench --small --baseline tests/reference/bench.json"
        Path(asked.baseline).write_text(json.dumps({"made by": command, "ratios": ratios}, indent=1) + "\n")


if __name__ == "__main__":
    main()
