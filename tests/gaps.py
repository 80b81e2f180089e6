"""False alarms where rows are missing, windows overlap or history is gated: ``python -m tests.calibration --gaps``.

Also whether a whole rule file keeps its alarm budget. Everything goes through ``sercheck.gate``.
"""

from __future__ import annotations

import sys
from collections.abc import Collection
from pathlib import Path

import numpy as np
import pandas as pd
import yaml

import sercheck
from tests import calibration
from tests.calibration import exact_interval, frame
from tests.cells import DAY, PROCESSES, Group
from tests.processes import make
from tests.simulated import LOSING

FIRST = np.datetime64("2026-01-05T00", "ns")
DAYS, BEFORE = 28, 90
ROLLING_RISK = 0.02
"""Large enough that a few days of each series are held and stay out of history."""
USUAL = (
    {"name": "level", "measure": "level"},
    {"name": "spread", "measure": "spread"},
    {"name": "innovations' variance", "measure": "innovations", "look": "variance"},
    {"name": "amplitude", "measure": "seasonal_lag", "season": "day"},
    {"name": "phase", "measure": "season_phase", "season": "day"},
    {"name": "steps", "measure": "autocorrelation", "lag": 1, "after": "difference"},
    {"name": "repeats", "measure": "repeats", "look": "run"},
    {"name": "replay", "measure": "replay"},
)
"""What a feed of hours is usually asked."""


def book(rules: list[dict[str, object]], **more: object) -> str:
    """A rule file of hours with a daily cycle, each series by itself."""
    asked = [{"of": "x", "stays": {"like": "history"}, "across": "series", **rule} for rule in rules]
    columns = {"time": "at", "series": "key", "values": ["x"]}
    whole = {"feed": "simulated", "columns": columns, "every": "1h", "seasons": {"day": DAY}, **more, "rules": asked}
    return yaml.safe_dump(yaml.safe_load(yaml.safe_dump(whole)), sort_keys=False)


def judged(text: str, values: np.ndarray, from_step: int, to_step: int) -> pd.DataFrame:
    """Records of a batch, with all rows before it as history."""
    stamp = FIRST + from_step * np.timedelta64(1, "h")
    batch = frame(values[:, from_step:to_step], stamp)
    return sercheck.gate(sercheck.load_rules(text), batch, frame(values[:, :from_step], FIRST), keep=False).records


def missing_rows(replications: int, measures: Collection[str], seed: int) -> pd.DataFrame:
    """The cells of ``calibration`` with rows taken out; 26 windows of history, so that a risk of .001 is answered."""
    some = [Group(name, 168, past) for name in LOSING for past in (0, 26)]
    return calibration.table_of(some, replications, measures, seed)


def _failed(records: pd.DataFrame, rules: list[str], series: int) -> np.ndarray:
    """Which series failed which rule, shape (rules, series)."""
    out = np.zeros((len(rules), series), dtype=bool)
    places = records["rule"].astype(str).map({rule: place for place, rule in enumerate(rules)}).to_numpy()
    out[places, records["series"].astype(str).astype(int).to_numpy()] = (records["outcome"] == "fail").to_numpy()
    return out


def overlapping(series: int, seed: int) -> pd.DataFrame:
    """A window of seven days judged every day: how often it fails, and how many runs of failures that makes."""
    rules = [
        {"name": "level", "measure": "level"}, {"name": "spread", "measure": "spread"},
        {"name": "autocorrelation 1", "measure": "autocorrelation", "lag": 1, "after": {"without_season": "day"}},
        {"name": "trend", "measure": "trend"}, {"name": "jump", "measure": "jump"},
    ]  # fmt: skip
    text = book([{**rule, "window": "7D", "false_alarm": ROLLING_RISK} for rule in rules])
    values = make(PROCESSES["profile + AR .6"].kind, [seed, 21], series, (BEFORE + 60 + DAYS) * DAY)
    names = [str(rule["name"]) for rule in rules]
    failed = np.array([
        _failed(judged(text, values, day * DAY, (day + 1) * DAY), names, series)
        for day in _days(BEFORE + 60, "a week judged every day")
    ])  # fmt: skip
    started = failed & ~np.concatenate([np.zeros_like(failed[:1]), failed[:-1]])
    rows = []
    for place, name in enumerate(names):
        count, runs = failed[:, place].sum(), started[:, place].sum()
        # series are independent of each other, the days of one are not
        error = failed[:, place].mean(axis=0).std(ddof=1) / np.sqrt(series)
        rows.append({
            "what": "a week judged every day", "rule": name, "risk": ROLLING_RISK, "batches": failed[:, place].size,
            "rate": count / failed[:, place].size, "error": error, "runs per batch": runs / failed[:, place].size,
            "days of a run": count / max(runs, 1),
        })  # fmt: skip
    return pd.DataFrame(rows)


def _days(first: int, what: str):
    for day in range(first, first + DAYS):
        print(f"{what}: day {day - first + 1} of {DAYS}", file=sys.stderr, flush=True)
        yield day


def gated_history(series: int, seed: int) -> pd.DataFrame:
    """Days judged against history with and without the days that failed: does gating truncate the baseline?

    A healthy day that failed stays out of the history of its series. Both arms see the same days.
    """
    text = book([{**rule, "false_alarm": ROLLING_RISK} for rule in USUAL])
    values = make(PROCESSES["profile + AR .6"].kind, [seed, 22], series, (BEFORE + DAYS) * DAY)
    names = [str(rule["name"]) for rule in USUAL]
    kept, whole, gated = values.copy(), [], []
    for day in _days(BEFORE, "a day against all days and against released ones"):
        steps = slice(day * DAY, (day + 1) * DAY)
        whole.append(_failed(judged(text, values, steps.start, steps.stop), names, series))
        now = _failed(judged(text, kept, steps.start, steps.stop), names, series)
        gated.append(now)
        kept[now.any(axis=0), steps] = np.nan
    both = {"all days": np.array(whole), "released days": np.array(gated)}
    late = DAYS // 2
    rows = []
    for what, failed in both.items():
        for place, name in [*enumerate(names), (None, "any rule")]:
            some = failed.any(axis=1) if place is None else failed[:, place]
            rows.append({
                "what": f"history of {what}", "rule": name, "risk": ROLLING_RISK, "batches": some.size,
                "rate": some.mean(), "error": some.mean(axis=0).std(ddof=1) / np.sqrt(series),
                "first half": some[:late].mean(), "second half": some[late:].mean(),
            })  # fmt: skip
    return pd.DataFrame(rows)


def whole_file(series: int, seed: int) -> pd.DataFrame:
    """How often any rule of a usual file fails, at a budget of one false hold in 90 days; each series is a feed."""
    rows = []
    text = book([dict(rule) for rule in USUAL], batch_every="1D", false_holds="1 per 90D")
    for name in ("profile + AR .6", "profile + AR .6, 5 % lost", "profile + AR .6, clusters lost"):
        print(f"a whole rule file: {name}", file=sys.stderr, flush=True)
        held = records = 0
        rules = dict.fromkeys((str(rule["name"]) for rule in USUAL), 0)
        size = 500
        for block in range(-(-series // size)):
            values = make(PROCESSES[name].kind, [seed, 23, block], size, (BEFORE + 1) * DAY)
            failed = _failed(judged(text, values, BEFORE * DAY, (BEFORE + 1) * DAY), list(rules), size)
            held += int(failed.any(axis=0).sum())
            records += size
            for place, rule in enumerate(rules):
                rules[rule] += int(failed[place].sum())
        low, high = exact_interval(held, records)
        worst = max(rules, key=lambda rule: rules[rule])
        rows.append({
            "what": f"a whole file, {name}", "batches": records, "held": held, "per 90 days": 90 * held / records,
            "low": 90 * float(low), "high": 90 * float(high), "most by": f"{worst} ({rules[worst]})",
        })  # fmt: skip
    return pd.DataFrame(rows)


def irregular(series: int, seed: int) -> pd.DataFrame:
    """A feed without cadence: rows of an AR .6 come after random times, half an hour to two hours apart."""
    rules = [
        {"name": name, **keys, "false_alarm": risk}
        for risk in (0.05, 0.01)
        for name, keys in (
            (f"level {risk}", {"measure": "level"}), (f"spread {risk}", {"measure": "spread"}),
            (f"repeats {risk}", {"measure": "repeats"}),
            (f"autocorrelation 1 {risk}", {"measure": "autocorrelation", "lag": 1}),
        )
    ]  # fmt: skip
    whole = yaml.safe_load(book(rules))
    whole["every"] = "irregular"
    del whole["seasons"]
    n, past = 168, 20
    values = make("ar0.6", [seed, 24], series, n * (past + 1))
    waits = np.random.default_rng([seed, 25]).uniform(0.5, 2.0, size=values.shape) * 3600e9
    stamps = FIRST + np.cumsum(waits, axis=1).astype(np.int64).astype("timedelta64[ns]")
    start = n * past
    rows = [
        pd.DataFrame({
            "at": stamps[:, where].ravel(), "key": np.repeat(np.arange(series), stamps[:, where].shape[1]),
            "x": values[:, where].ravel(),
        })
        for where in (slice(start, None), slice(0, start))
    ]  # fmt: skip
    text = yaml.safe_dump(whole, sort_keys=False)
    records = sercheck.gate(sercheck.load_rules(text), rows[0], rows[1], keep=False).records
    out = []
    for rule, cell in records.groupby(records["rule"].astype(str), sort=False):
        told, failed = int(cell["p_value"].notna().sum()), int((cell["outcome"] == "fail").sum())
        low, high = exact_interval(failed, told)
        reason = cell.loc[cell["outcome"] == "undecided", "reason"].astype(str)
        out.append({
            "what": "no cadence", "rule": rule, "batches": len(cell), "judged": told, "failed": failed,
            "low": float(low), "high": float(high), "undecided because": reason.iloc[0] if len(reason) else "",
        })  # fmt: skip
    return pd.DataFrame(out)


def report(replications: int, measures: Collection[str], seed: int, out: Path | None) -> int:
    """All of it, printed and written; 1 when a cell misses that is not named as weak."""
    parts = {
        "budget": whole_file(max(replications, 1000), seed),
        "irregular": irregular(min(replications, 500), seed),
        "history": gated_history(min(max(replications // 5, 50), 200), seed),
        "overlap": overlapping(min(max(replications // 5, 50), 200), seed),
    }
    with pd.option_context("display.width", 250, "display.max_columns", None, "display.max_colwidth", 60):
        for table in parts.values():
            print(table.round(4).to_string(index=False, na_rep=""), end="\n\n", flush=True)
    table = missing_rows(replications, measures, seed)
    print(calibration.as_text(table))
    print(calibration.missed(table))
    if out:
        for name, part in {"missing": table, **parts}.items():
            part.to_parquet(out.with_name(f"{out.stem}_{name}{out.suffix}"))
    return int((table["mark"] == "MISSES").any())
