"""The one sentence of a record that a person can act on; depends on ``judge`` and the compiled rules."""

from __future__ import annotations

import math

import numpy as np

from sercheck.judge import FAIL, PASS, Judged
from sercheck.rulebook.compiled import Rule
from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.transforms import spelled

SIDES = ("not above", "not below", "at", "above", "below")


def number(x: float, *, integer: bool = False) -> str:
    """A number as a reader wants it: four significant digits, whole when it is a count, no exponent up to 10^9."""
    if math.isnan(x):
        return "unknown"
    if integer:
        return f"{x:.0f}"
    return f"{x:.0f}" if 1e4 <= abs(x) < 1e9 else f"{x:.4g}"


def subject(rule: Rule, column: str | None, lag: int | None, season: str | None) -> str:
    """What was looked at: 'autocorrelation of kwh at lag 1 after difference'."""
    text = rule.measure.replace("_", " ")
    look = getattr(rule.fields, "look", None)
    text = f"{text} ({look})" if look else text
    text += f" of {column}" if column else ""
    text += f" at lag {lag}" if lag is not None else ""
    text += f" (season {season})" if season else ""
    return text + (f" after {after(rule)}" if rule.after else "")


def after(rule: Rule) -> str | None:
    """The rule's transforms as the record tells them, or None."""
    return spelled(rule.after) or None


def sentences(rule: Rule, judged: Judged) -> list[str]:
    """One sentence for every cell, in the order of the flattened arrays."""
    seen = judged.seen.measurement
    lags = seen.lags or (None,) * seen.observed.shape[1]
    whole = " over all series (in standard deviations)" if judged.seen.keys[:1].tolist() == [None] else ""
    names = [subject(rule, judged.seen.column, lag, seen.season) + whole for lag in lags] * seen.observed.shape[0]
    outcome = judged.outcome.ravel()
    if seen.certify:
        told = ["is there" if code == PASS else "no season can be certified" for code in outcome.tolist()]
        texts = [f"{name}: {text}" for name, text in zip(names, told, strict=True)]
    else:
        texts = _compared(rule, judged, names)
    for cell in np.flatnonzero((outcome != PASS) & (outcome != FAIL)).tolist():
        texts[cell] = f"{names[cell]}: {judged.reasons[judged.why.flat[cell]]}"
    return texts


def _compared(rule: Rule, judged: Judged, names: list[str]) -> list[str]:
    """What was observed beside its limit, column by column: these are most of a judgement's texts."""
    seen = judged.seen.measurement
    observed, limit, bound = (values.ravel() for values in (seen.observed, judged.limit, judged.bound))
    values, bounds = numbers(observed, integer=seen.integer), numbers(bound, integer=seen.exact and seen.integer)
    sides = _sides(judged.outcome.ravel(), judged.upper.ravel(), observed == limit)
    cells = zip(names, values, sides, bounds, strict=True)
    if seen.exact:
        return [f"{name} is {value}, {side} the bound {number}" for name, value, side, number in cells]
    source = "history" if rule.stays.kind == "like_history" else "bound"
    edges = [f"the limit {text}" for text in numbers(limit)]
    for cell in np.flatnonzero(np.isnan(limit)).tolist():
        edges[cell] = "a limit beyond all that could be seen"
    n_eff = seen.n_eff.ravel()
    worth = [f", worth {text} independent ones" for text in numbers(n_eff)]
    for cell in np.flatnonzero(np.isnan(n_eff)).tolist():
        worth[cell] = ""
    counts = seen.n.ravel().tolist()
    rows = {n: "1 row" if n == 1 else f"{n} rows" for n in set(counts)}
    return [
        f"{name} is {value}, {side} {edge} ({source} {number}; {rows[n]}{size})"
        for (name, value, side, number), edge, n, size in zip(cells, edges, counts, worth, strict=True)
    ]


def numbers(x: Floats, *, integer: bool = False) -> list[str]:
    """``number`` of each."""
    if not len(x):
        return []
    if (x == x[0]).all():
        return [number(float(x[0]), integer=integer)] * len(x)
    if integer:
        return [number(value, integer=True) for value in x.tolist()]
    texts = [f"{value:.4g}" for value in x.tolist()]
    size = np.abs(x)
    for cell in np.flatnonzero(np.isnan(x) | ((size >= 1e4) & (size < 1e9))).tolist():
        texts[cell] = number(float(x[cell]))
    return texts


def _sides(outcome: Ints, upper: Bools, at: Bools) -> list[str]:
    """Where the observations lie; a pass names the side that it is nearer to break."""
    code = np.where(outcome == PASS, np.where(upper, 0, 1), np.where(at, 2, np.where(upper, 3, 4)))
    return [SIDES[number] for number in code.tolist()]
