"""The one sentence of a record that a person can act on; depends on ``judge`` and the compiled rules."""

from __future__ import annotations

import math

from sercheck.judge import FAIL, PASS, Judged
from sercheck.rulebook.compiled import Rule
from sercheck.transforms import spelled


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
    cells = zip(
        names,
        judged.outcome.ravel().tolist(),
        judged.why.ravel().tolist(),
        seen.observed.ravel().tolist(),
        judged.upper.ravel().tolist(),
        judged.bound.ravel().tolist(),
        judged.limit.ravel().tolist(),
        seen.n.ravel().tolist(),
        seen.n_eff.ravel().tolist(),
        strict=True,
    )
    return [_sentence(rule, judged, *cell) for cell in cells]


def _sentence(
    rule: Rule,
    judged: Judged,
    name: str,
    outcome: int,
    why: int,
    observed: float,
    upper: bool,
    bound: float,
    limit: float,
    n: int,
    n_eff: float,
) -> str:
    seen = judged.seen.measurement
    if outcome not in (PASS, FAIL):
        return f"{name}: {judged.reasons[why]}"
    if seen.certify:
        return f"{name}: {'is there' if outcome == PASS else 'no season can be certified'}"
    value = number(observed, integer=seen.integer)
    side = _side(outcome, upper=upper, at=observed == limit)
    source = "history" if rule.stays.kind == "like_history" else "bound"
    if seen.exact:
        return f"{name} is {value}, {side} the bound {number(bound, integer=seen.integer)}"
    rows = "1 row" if n == 1 else f"{n} rows"
    sizes = rows if math.isnan(n_eff) else f"{rows}, worth {number(n_eff)} independent ones"
    edge = "a limit beyond all that could be seen" if math.isnan(limit) else f"the limit {number(limit)}"
    return f"{name} is {value}, {side} {edge} ({source} {number(bound)}; {sizes})"


def _side(outcome: int, *, upper: bool, at: bool) -> str:
    """Where the observation lies; a pass names the side that it is nearer to break."""
    if outcome == PASS:
        return "not above" if upper else "not below"
    return "at" if at else "above" if upper else "below"
