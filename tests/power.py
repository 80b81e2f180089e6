"""What is found of changes and faults put in: ``python -m tests.calibration --power``.

Changes are held against an oracle that knows the process: the test that nobody has who does not. Faults are those of
the catalogue, put into a day of a feed with ninety days of history. All of it goes through ``sercheck.gate``.
"""

from __future__ import annotations

import sys
from collections.abc import Collection, Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
import yaml
from scipy import special, stats

from sercheck.rehearsal.faults import Fault, catalogue
from tests.calibration import CLOCKED, exact_interval, gated, rules_of
from tests.cells import ALONE, DAY, LIKE, PAST, PROCESSES, Group, Process
from tests.processes import make

RISK = 0.01
FAULT_RISK = 0.001
ROWS, WINDOWS = 168, 20
STEPS = (0.0, 1.0, 2.0, 3.0, 4.0, 5.0, 6.0)
"""Shifts of the mean, in standard errors of a window's mean as the process gives it."""
RATIOS = (1.0, 1.1, 1.2, 1.35, 1.5, 1.75, 2.0)
MEMORIES = (0.6, 0.65, 0.7, 0.75, 0.8, 0.85, 0.9)


@dataclass(frozen=True)
class Change:
    """One size of one change.

    Attributes:
        question: key of ``cells.QUESTIONS``.
        process: what history, or the bound, is of.
        form: ``ALONE`` or ``LIKE``.
        size: of the change; the first of each is none at all.
        values: the changed window from the healthy one and a seed.
        oracle: chance that the test that knows the process finds it.
    """

    question: str
    process: str
    form: str
    size: float
    values: object
    oracle: float


def error_of_mean(process: Process, n: int) -> float:
    """Standard error of the mean of n rows: σ √((1 + 2Σ(1 - k/n) ρ_k)/n)."""
    k = np.arange(1, n)
    rho = np.array([process.rho(int(lag)) for lag in k])
    return float(process.deviation * np.sqrt((1 + 2 * ((1 - k / n) * rho).sum()) / n))


def changes() -> Iterator[Change]:
    """All that is tried."""
    for form in (ALONE, LIKE):
        z = special.ndtri(1 - RISK / (1 if form == ALONE else 2))
        for name in ("white", "AR .6", "AR .9", "t3"):
            error = error_of_mean(PROCESSES[name], ROWS if form == LIKE or name != "AR .9" else 336)
            for size in STEPS:
                oracle = special.ndtr(size - z) + (special.ndtr(-size - z) if form == LIKE else 0)
                yield Change("level", name, form, size, lambda x, seed, by=size * error: x + by, float(oracle))
        for phi in MEMORIES:
            # the likelihood's estimate of one coefficient: variance (1 - φ²)/n (Mann and Wald 1943)
            own, true = np.sqrt((1 - 0.36) / ROWS), np.sqrt((1 - phi**2) / ROWS)
            oracle = special.ndtr((phi - 0.6 - z * own) / true)
            yield Change(
                "autocorrelation 1", "AR .6", form, phi,
                lambda x, seed, phi=phi: make(f"ar{phi}", seed, *x.shape), float(oracle),
            )  # fmt: skip
    for name in ("white", "AR .6", "AR .9"):
        process, k = PROCESSES[name], np.arange(1, ROWS)
        rho = np.array([process.rho(int(lag)) for lag in k])
        worth = ROWS / (1 + 2 * ((1 - k / ROWS) * rho**2).sum())  # Bayley and Hammersley 1946
        for ratio in RATIOS:
            high, low = stats.chi2.ppf([1 - RISK / 2, RISK / 2], worth)
            oracle = stats.chi2.sf(high / ratio**2, worth) + stats.chi2.cdf(low / ratio**2, worth)
            yield Change("spread", name, LIKE, ratio, lambda x, seed, by=ratio: x * by, float(oracle))


def of_changes(replications: int, measures: Collection[str] = (), seed: int = 1) -> pd.DataFrame:
    """A row for each size: share found, with its exact interval, by the naive limit, and by the oracle."""
    rows = []
    for change in changes():
        n = 336 if (change.form, change.process) == (ALONE, "AR .9") else ROWS
        group = Group(change.process, n, WINDOWS if change.form == LIKE else 0)
        if measures and group.questions[change.question].rule(PROCESSES[change.process])["measure"] not in measures:
            continue
        text, told = rules_of(group, [RISK], only=(change.question,))
        if change.form == ALONE:  # one side is enough: the change goes upwards
            book = yaml.safe_load(text)
            book["rules"] = [rule for rule in book["rules"] if told[rule["name"]][1].startswith("below")]
            text = yaml.safe_dump(book, sort_keys=False)
        past = n * group.windows
        values = make(PROCESSES[change.process].kind, [seed, 5], replications, past + n)
        values[:, past:] = change.values(values[:, past:], [seed, 6])  # type: ignore[operator]
        records = gated(text, values, past)
        upward = [rule for rule, each in told.items() if each[1].startswith(("below", LIKE))]
        records = records[records["rule"].astype(str).isin(upward)]
        found = int((records["outcome"] == "fail").sum())
        judged = int(records["p_value"].notna().sum())
        numbers = {name: records[name].astype(float) for name in ("observed", "bound", "naive_limit")}
        side = np.sign(numbers["naive_limit"] - numbers["bound"])
        naive = float((side * (numbers["observed"] - numbers["naive_limit"]) >= 0).mean())
        low, high = exact_interval(found, judged)
        rows.append({
            "question": change.question, "process": change.process, "asked": change.form, "n": n, "size": change.size,
            "risk": RISK, "judged": judged, "found": found / max(judged, 1), "low": float(low), "high": float(high),
            "naive": naive, "oracle": change.oracle,
        })  # fmt: skip
        print(f"{change.question}, {change.process}, {change.form}, {change.size}", file=sys.stderr, flush=True)
    return pd.DataFrame(rows)


def put_in(fault: Fault, size: float, values: np.ndarray, seed: int) -> np.ndarray:
    """The series with the fault in their last day."""
    window, history = values[:, -DAY:], values[:, :-DAY]
    rng = np.random.default_rng([seed, 8])
    broken = values.copy()
    whole = fault.apply(window.copy(), history, 1.0 if fault.partial else size, rng, DAY)
    broken[:, -DAY:] = whole
    return broken


def of_faults(replications: int, measures: Collection[str] = (), seed: int = 1) -> pd.DataFrame:
    """A row for each fault, size and rule: share found in a day against the last ninety, each rule at ``FAULT_RISK``.

    ``any`` is at least one of the rules.
    """
    group = Group("profile + AR .6", DAY, PAST)
    text, told = rules_of(group, [FAULT_RISK], measures)
    healthy = make(PROCESSES[group.process].kind, [seed, 7], replications, DAY * (PAST + 1)) + 20.0
    rows = []
    tried: list[tuple[str, float, np.ndarray]] = [("nothing", 0.0, healthy)]
    for fault in catalogue():
        if fault.fits(replications, DAY, DAY * PAST, DAY):
            tried += [(fault.name, size, put_in(fault, size, healthy, seed)) for size in fault.sizes]
    for name, size, values in tried:
        if np.isnan(values[:, -DAY:]).all():
            continue  # a batch without a row is trouble, status 2, and no rule is asked
        records = gated(text, values, DAY * PAST, **{
            column: values + make("ar0.6", [seed, 9], *values.shape)
            for column in yaml.safe_load(text)["columns"]["values"] if column != "x"
        })  # fmt: skip
        failed = records["outcome"].eq("fail")
        rules = records["rule"].astype(str).map(lambda rule: told[rule][0])
        shares = failed.groupby(rules, sort=False).mean()
        shares["any"] = failed.groupby(records["series"].astype(str)).any().sum() / replications
        rows += [{"fault": name, "size": size, "rule": rule, "found": float(share)} for rule, share in shares.items()]
        print(f"{name} {size:g}", file=sys.stderr, flush=True)
    return pd.DataFrame(rows)


def as_text(found: pd.DataFrame) -> str:
    """Changes for people: sizes side by side."""
    lines = []
    for keys, cell in found.groupby(["question", "process", "asked", "n"], sort=False):
        question, process, asked, n = keys
        lines.append(f"{question}, {process}, {asked}, {n} rows, risk {RISK:g}")
        for name in ("size", "found", "oracle", "naive"):
            lines.append(f"  {name:<8}" + "".join(f"{value:>8.2f}" for value in cell[name]))
    return "\n".join(lines)


def report(replications: int, measures: Collection[str], seed: int, out: Path | None) -> int:
    """Both tables, printed and written."""
    found = of_changes(replications, measures, seed)
    print(as_text(found))
    faults = of_faults(min(replications, 200), [each for each in measures if each not in CLOCKED], seed)
    wide = faults.pivot_table(index=["fault", "size"], columns="rule", values="found", sort=False)
    print(f"\nFaults in one day of hours against ninety, profile + AR .6, each rule at a risk of {FAULT_RISK:g}:")
    with pd.option_context("display.width", 250, "display.max_columns", None, "display.max_rows", None):
        print(wide.round(2).rename(columns=lambda name: name[:14]))
    if out:
        found.to_parquet(out)
        faults.to_parquet(out.with_name(f"{out.stem}_faults{out.suffix}"))
    return 0


