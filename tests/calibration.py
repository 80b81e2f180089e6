"""False-alarm rates through the public path: ``python -m tests.calibration`` prints how often healthy batches fail.

A panel of simulated series in which nothing is wrong goes through ``sercheck.gate``, each series judged by itself:
what fails is a false alarm. Bounds are the process's true values, so that the null hypothesis holds exactly. Depends
on ``processes``, ``cells`` and sercheck's public functions only.
"""

from __future__ import annotations

import argparse
import sys
import zlib
from collections.abc import Collection, Iterable, Iterator
from copy import deepcopy
from pathlib import Path

import numpy as np
import pandas as pd
import yaml
from scipy import special, stats

import sercheck

if __package__:  # python -m tests.calibration
    from tests.cells import DAY, LIKE, LONG, NAMED, PAST, PROCESSES, RISKS, SHORT, Group, Process, true_size
    from tests.known_weak import weakness
    from tests.processes import make
else:
    from cells import DAY, LIKE, LONG, NAMED, PAST, PROCESSES, RISKS, SHORT, Group, Process, true_size
    from known_weak import weakness
    from processes import make

CLOCKED = ("count", "completeness")
"""Measures of the clock, which look at no column."""
BLOCK = 2_000_000
"""Values simulated at a time, about."""
CHANCE = 0.999
MARKS = """
Rates are of records with a p-value. MISSES: above the target by more than chance makes in 999 of 1000 runs; known: the
same, named as a weakness in tests/known_weak.py; above: less than that; careful: below what is asked at least; none:
nothing judged; no mark: no target. n_eff: as records tell it / as the observations of all series scatter."""


def rules_of(
    group: Group, risks: Iterable[float], measures: Collection[str] = (), only: Collection[str] = ()
) -> tuple[str, dict[str, tuple[str, str, float]]]:
    """The rule file of a group as YAML, and for each rule's name its question, form (with its side) and risk."""
    process = PROCESSES[group.process]
    rules, told = [], {}
    columns = ["x"]
    for name, question in group.questions.items():
        keys = question.rule(process)
        if only and name not in only:
            continue
        for form in question.forms:
            wanted = not measures or keys["measure"] in measures
            if not wanted or form not in group.forms or not question.fits(process, form, group.n):
                continue
            after: dict[str, object] = {}
            if form != LIKE and "lag" in keys and "with" not in keys and process.season == "fixed":
                after = {"after": {"without_season": max(process.cycles, key=lambda each: process.cycles[each])}}
            if "with" in keys and keys["with"] not in columns:
                columns.append(str(keys["with"]))
            for risk in risks:
                if form != LIKE and question.significance and risk < 0.01:
                    continue  # a published significance is not told below .01
                stays: dict[str, dict[str, object]] = {LIKE: {"like": "history"}}
                if form != LIKE:
                    bound = risk if question.significance else float(question.truth(process, form, group.n))
                    stays = {f"{side} {form}": {side: bound} for side in question.sides}
                for label, bounds in stays.items():
                    rule = f"{name}, {label}, {risk}"
                    told[rule] = (name, label, risk)
                    asked = {
                        "name": rule, "of": "x", **keys, **after, "stays": bounds, "false_alarm": risk,
                        "across": "series",
                    }  # fmt: skip
                    if keys["measure"] in CLOCKED:
                        del asked["of"]
                    rules.append(deepcopy(asked))  # the same object twice would be written as an alias
    seasons = {"seasons": dict(process.cycles)} if process.cycles else {}
    known = {"time": "at", "series": "key", "values": columns}
    book = {"feed": "simulated", "columns": known, "every": "1h", **seasons, "rules": rules}
    return yaml.safe_dump(book, sort_keys=False), told


def frame(values: np.ndarray, start: np.datetime64, **more: np.ndarray) -> pd.DataFrame:
    """Rows of hourly series, sorted by key; a missing value is a row that did not come."""
    series, steps = values.shape
    stamps = start + np.arange(steps) * np.timedelta64(1, "h")
    rows = pd.DataFrame({
        "at": np.tile(stamps, series), "key": np.repeat(np.arange(series), steps), "x": values.ravel(),
        **{name: column.ravel() for name, column in more.items()},
    })  # fmt: skip
    return rows[rows["x"].notna()] if np.isnan(values).any() else rows


def gated(text: str, values: np.ndarray, start: int, **more: np.ndarray) -> pd.DataFrame:
    """Records of the steps from ``start`` on, those before being history."""
    first = np.datetime64("2026-01-05T00", "ns")
    late = {name: column[:, start:] for name, column in more.items()}
    early = {name: column[:, :start] for name, column in more.items()}
    batch = frame(values[:, start:], first + start * np.timedelta64(1, "h"), **late)
    history = frame(values[:, :start], first, **early) if start else None
    return sercheck.gate(sercheck.load_rules(text), batch, history, keep=False).records


def simulated(process: Process, text: str, key: list[int], series: int, steps: int) -> dict[str, np.ndarray]:
    """The columns that the rule file names: x, y that knows nothing of it, and z, the sum of both."""
    x = make(process.kind, key, series, steps)
    wanted = yaml.safe_load(text)["columns"]["values"]
    if wanted == ["x"]:
        return {"values": x}
    y = make(process.kind, [*key, 1], series, steps)
    return {"values": x, **{name: {"y": y, "z": x + y}[name] for name in wanted[1:]}}


def count(group: Group, risks: Iterable[float], replications: int, measures: Collection[str] = (), seed: int = 1):
    """Counts of the group's cells, one row for each question, form and risk.

    A record is judged where it has a p-value: a pass that says little is undecided and still no false alarm, and left
    out it would make the failures look frequent. Naive is an observation at the limit for independent rows or beyond.
    """
    text, told = rules_of(group, risks, measures)
    if not told:
        return pd.DataFrame()
    process = PROCESSES[group.process]
    steps = group.n * (group.windows + 1)
    size = min(max(BLOCK // steps, 50), replications)
    total: pd.DataFrame | None = None
    for block, first in enumerate(range(0, replications, size)):
        key = [seed, zlib.crc32(group.process.encode()), group.n, group.windows, block]
        series = min(size, replications - first)
        columns = simulated(process, text, key, series, steps)
        records = gated(text, start=group.n * group.windows, **columns)
        numbers = {name: records[name].astype(float) for name in ("observed", "bound", "naive_limit", "n_eff")}
        names = records["rule"].astype(str)
        significance = names.map({rule: group.questions[each[0]].significance for rule, each in told.items()})
        judged = records["p_value"].notna() | (significance & (records["outcome"] != "undecided"))
        side = np.sign(numbers["naive_limit"] - numbers["bound"])
        beyond = side * (numbers["observed"] - numbers["naive_limit"]) >= 0
        counts = pd.DataFrame({
            "rule": names,
            "records": 1,
            "judged": judged,
            "failed": records["outcome"] == "fail",
            "compared": judged & numbers["naive_limit"].notna(),
            "naive": judged & beyond,
            "undecided": records["outcome"] == "undecided",
            "sized": numbers["n_eff"].notna(),
            "n_eff": numbers["n_eff"].fillna(0.0),
            "seen": numbers["observed"].notna(),
            "sum": numbers["observed"].fillna(0.0),
            "squares": numbers["observed"].fillna(0.0) ** 2,
        })  # fmt: skip
        sums = counts.astype(dict.fromkeys(counts.columns[1:], float)).groupby("rule", sort=False).sum()
        total = sums if total is None else total + sums
    assert total is not None
    names = pd.DataFrame([told[rule] for rule in total.index], columns=["question", "asked", "risk"])
    with np.errstate(divide="ignore", invalid="ignore"):
        mean = (total["sum"] / total["seen"]).to_numpy()
        variance = (total["squares"] / total["seen"]).to_numpy() - mean**2
    names["true_n_eff"] = np.nan
    for name, question in group.questions.items():
        here = (names["question"] == name).to_numpy()
        names.loc[here, "true_n_eff"] = true_size(question, process, mean[here], variance[here])
    where = {"process": group.process, "n": group.n, "windows": group.windows}
    return pd.concat([names.assign(**where), total.reset_index(drop=True)], axis=1)


def exact_interval(found, tried):
    """The 95 % interval of a share (Clopper and Pearson 1934)."""
    found, tried = np.asarray(found, dtype=float), np.asarray(tried, dtype=float)
    low = special.betaincinv(np.maximum(found, 0.5), tried - found + 1, 0.025)
    high = special.betaincinv(found + 1, np.maximum(tried - found, 0.5), 0.975)
    return np.where(found > 0, low, 0.0), np.where(found < tried, high, 1.0)


def rated(counts: pd.DataFrame) -> pd.DataFrame:
    """Counts with rates, their exact 95 % intervals (Clopper and Pearson 1934), targets and how they compare."""
    table = counts.copy()
    with np.errstate(divide="ignore", invalid="ignore"):
        table["rate"] = table["failed"] / table["judged"]
        table["naive_rate"] = table["naive"] / table["compared"]
        table["mean_n_eff"] = table["n_eff"] / table["sized"]
    table["undecided"] /= table["records"]
    table["low"], table["high"] = exact_interval(table["failed"].to_numpy(), table["judged"].to_numpy())
    targets = [_target(row) for row in table.itertuples()]
    table["least"], table["most"] = zip(*targets, strict=True) if targets else ((), ())
    table["weakness"] = [weakness(row.question, row.asked, row.process, row.n) for row in table.itertuples()]
    marks = {
        "none": table["judged"] == 0,
        "": table["most"].isna(),
        "known": too_many(table) & table["weakness"].ne(""),
        "MISSES": too_many(table),
        "above": table["rate"] > table["most"],
        "careful": table["high"] < table["least"],
    }
    table["mark"] = np.select(list(marks.values()), list(marks), "ok")
    return table


def too_many(table: pd.DataFrame, what: str = "failed", out_of: str = "judged") -> np.ndarray:
    """Cells whose count is larger than what chance makes of the target in 999 of 1000 runs (exact binomial)."""
    most = stats.binom.ppf(CHANCE, table[out_of].to_numpy(), table["most"].to_numpy())
    return np.asarray(table[what].to_numpy() > most)


def _target(row) -> tuple[float, float]:
    """Smallest and largest rate that count as healthy; NaN where none is demanded."""
    question = Group(row.process, row.n, row.windows).questions[row.question]
    form = row.asked.removeprefix("below ").removeprefix("above ")
    times, fewest = question.target.get(form, ({}, 0))
    if row.n < fewest or row.risk not in times:
        return np.nan, np.nan
    if times is LONG[0] and row.windows < 20:
        times = SHORT[0]
    least = question.least.get(row.risk, 0.0) if times is LONG[0] else 0.0
    return least * row.risk, times[row.risk] * row.risk


def as_text(table: pd.DataFrame) -> str:
    """The table for people: a line for each cell, the risks side by side, each with the naive rate behind it."""
    risks = sorted(table["risk"].unique(), reverse=True)
    head = f"{'process':<22}{'question':<29}{'asked':<24}{'n':>4}{'past':>5}{'undecided':>10}{'n_eff':>12}"
    lines = [head + "".join(f"   {f'rate at {risk:g} (95 %)':<23}{'naive':>6}{'':8}" for risk in risks).rstrip()]
    for keys, cell in table.groupby(["process", "question", "asked", "n", "windows"], sort=False):
        process, question, asked, n, past = keys
        line = f"{process:<22}{question:<29}{asked:<24}{n:>4}{past:>5}"
        sizes = f"{cell['mean_n_eff'].iloc[0]:.0f}/{cell['true_n_eff'].iloc[0]:.0f}"
        line += f"{cell['undecided'].max():>10.3f}{sizes.replace('nan', '-'):>12}"
        by_risk = cell.set_index("risk")
        for risk in risks:
            if risk not in by_risk.index:
                line += " " * 40
                continue
            row = by_risk.loc[risk]
            rate = f"{row['rate']:.4f} ({row['low']:.4f}-{row['high']:.4f})"
            line += f"   {rate:<23}{row['naive_rate']:>6.4f} {row['mark']:<7}"
        lines.append(line.replace("nan", "  -").rstrip())
    return "\n".join([*lines, MARKS])


def groups(processes: Iterable[str] = (), rows: Iterable[int] = ()) -> Iterator[Group]:
    """The groups of the long run."""
    for process in processes or NAMED:
        for n in rows or (168, 336):
            if n != DAY:
                yield Group(process, n, 0)
                yield Group(process, n, 20)
        if PROCESSES[process].season == "fixed" and (not rows or DAY in rows):
            yield Group(process, DAY, PAST)


def table_of(
    some: Iterable[Group], replications: int, measures: Collection[str] = (), seed: int = 1, out: Path | None = None
) -> pd.DataFrame:
    """The rated table of these groups, which are named on stderr as they come; ``out`` always holds what is counted."""
    table = pd.DataFrame()
    for group in some:
        print(f"{group.process}, {group.n} rows, {group.windows} windows of history", file=sys.stderr, flush=True)
        part = count(group, RISKS, replications, measures, seed)
        table = pd.concat([table, rated(part)], ignore_index=True) if len(part) else table
        if out and len(table):
            table.to_parquet(out)
    return table


def missed(table: pd.DataFrame) -> str:
    """The cells outside their targets by name, the unnamed ones first."""
    lines = []
    for mark, says in (("MISSES", "outside its target"), ("known", "outside its target, as named")):
        for row in table[table["mark"] == mark].itertuples():
            lines.append(
                f"{says}: {row.question}, {row.asked}, {row.process}, n {row.n}: {row.rate:.4f} "
                f"({row.low:.4f}-{row.high:.4f}) at {row.risk:g}, at most {row.most:.4f}, "
                f"naive {row.naive_rate:.4f}{f'; {row.weakness}' if row.weakness else ''}"
            )
    judged = table[table["most"].notna() & (table["judged"] > 0)]
    lines.append(
        f"{len(judged)} cells with a target, {judged['mark'].eq('MISSES').sum()} outside it unnamed, "
        f"{judged['mark'].eq('known').sum()} named, {judged['mark'].eq('above').sum()} above it within chance"
    )
    return "\n".join(lines)


def main(arguments: list[str] | None = None) -> int:
    """Print the table; 1 when a cell misses its target that is not named as weak."""
    reader = argparse.ArgumentParser(prog="python -m tests.calibration", description=str(__doc__).split("\n\n")[0])
    reader.add_argument("--measure", nargs="*", default=(), help="only these measures")
    reader.add_argument("--replications", type=int, default=2000, help="series of a cell (20000 for a risk of .001)")
    reader.add_argument("--processes", nargs="*", default=(), choices=list(PROCESSES), help="only these processes")
    reader.add_argument("--n", nargs="*", type=int, default=(), help="rows of a window (24: a day against ninety)")
    reader.add_argument("--seed", type=int, default=1)
    reader.add_argument("--out", type=Path, help="write the table as Parquet too")
    reader.add_argument("--misses", action="store_true", help="print only the cells outside their targets")
    what = reader.add_mutually_exclusive_group()
    what.add_argument("--power", action="store_true", help="changes and faults put in: what is found")
    what.add_argument("--gaps", action="store_true", help="missing rows, windows that overlap, gated histories, budget")
    what.add_argument("--page", type=Path, help="write a page with curves of size and power (of --table, if given)")
    reader.add_argument("--table", type=Path, help="for --page: a table that --out wrote")
    reader.add_argument("--curves", type=Path, help="for --page: a table that --power --out wrote")
    asked = reader.parse_args(arguments)
    if asked.power or asked.gaps or asked.page:
        return _others(asked)
    table = table_of(groups(asked.processes, asked.n), asked.replications, asked.measure, asked.seed, asked.out)
    if not asked.misses:
        print(as_text(table))
    print(missed(table))
    return int((table["mark"] == "MISSES").any())


def _others(asked: argparse.Namespace) -> int:
    """The further programs; they depend on this one."""
    from tests import calibration_page, gaps, power

    if asked.power:
        return power.report(asked.replications, asked.measure, asked.seed, asked.out)
    if asked.gaps:
        return gaps.report(asked.replications, asked.measure, asked.seed, asked.out)
    return calibration_page.write(asked.page, asked.table, asked.curves, asked.replications, asked.seed)


if __name__ == "__main__":
    sys.exit(main())
