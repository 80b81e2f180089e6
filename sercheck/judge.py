"""Measurement, bound and risk to outcome: the only place that decides; depends on ``measure`` and ``serial.risk``.

Measuring goes block by block; deciding is one step at the end, because the risk of a rule is shared among all of its
series, columns and lags once their p-values are in.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from sercheck.measure import Measurement, Reference, Side
from sercheck.rulebook.compiled import Rule
from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.risk import benjamini_yekutieli, broken, holm

PASS, FAIL, UNDECIDED = 0, 1, 2
OUTCOMES = ("pass", "fail", "undecided")


@dataclass(frozen=True)
class Seen:
    """One rule's measurement of one column of one block.

    Attributes:
        rule: place of the rule in its file.
        keys: names of the series, shape (S,).
        column: value column, or None for the clock.
        measurement: what was seen, arrays of shape (S, L).
        window_start: int64 nanoseconds since 1970 UTC of the window's first step.
        window_end: the same of its last step.
        cause: likely cause of each series that may fail, object array of str or None, shape (S,); None: not asked.
        support: how far the evidence is for it alone, shape (S,).
        whole: likely cause of the block as a whole and its support, where all of its series may fail.
    """

    rule: int
    keys: np.ndarray
    column: str | None
    measurement: Measurement
    window_start: int
    window_end: int
    cause: np.ndarray | None = None
    support: Floats | None = None
    whole: tuple[str, float] | None = None


@dataclass(frozen=True)
class Judged:
    """A ``Seen`` with its outcomes; every array has shape (S, L).

    Attributes:
        outcome: PASS, FAIL or UNDECIDED.
        why: index into ``reasons`` for undecided cells, -1 elsewhere.
        reasons: sentences that ``why`` points to.
        upper: the side that ``bound`` and ``limit`` are told for is 'too large' (else 'too small').
        p_value, risk_used, bound, standard_error, limit, naive_limit, detectable: NaN where there is none.
    """

    seen: Seen
    outcome: Ints
    why: Ints
    reasons: tuple[str, ...]
    upper: Bools
    p_value: Floats
    risk_used: Floats
    bound: Floats
    standard_error: Floats
    limit: Floats
    naive_limit: Floats
    detectable: Floats

    @property
    def failed(self) -> bool:
        """One cell fails or more."""
        return bool((self.outcome == FAIL).any())


@dataclass(frozen=True)
class _Evidence:
    """P-values of one ``Seen``: over both sides, and which side told them."""

    p: Floats
    upper: Bools
    sides: int


def judge(rule: Rule, parts: Sequence[Seen]) -> list[Judged]:
    """Judge one rule on all the blocks and columns that it was measured on.

    A cell is undecided where the measure says so, where it has no p-value, and where it passes although the smallest
    change that it could have found is larger than what ``matters``.
    """
    if not parts:
        return []
    evidence = [_evidence(part.measurement) for part in parts]
    levels = _levels(rule, parts, evidence)
    return [_outcome(rule, part, told, level) for part, told, level in zip(parts, evidence, levels, strict=True)]


def _evidence(seen: Measurement) -> _Evidence:
    shape = seen.observed.shape
    tails = {side: np.broadcast_to(reference.p_value(side), shape) for side, reference in _references(seen)}
    undecided = seen.undecided >= 0
    if len(tails) == 2:
        upper = tails["upper"] <= tails["lower"]
        p = np.minimum(1.0, 2 * np.minimum(tails["upper"], tails["lower"]))
    elif tails:
        ((side, p),) = tails.items()
        upper = np.full(shape, side == "upper")
    else:
        p, upper = np.full(shape, np.nan), np.zeros(shape, dtype=bool)
    return _Evidence(np.where(undecided, np.nan, p), upper, max(len(tails), 1))


def breaks(seen: Measurement, risk: float) -> Bools:
    """Series that break their bound at ``risk`` at one lag or more, whatever is shared with others, shape (S,)."""
    p = _evidence(seen).p
    beyond = broken(p, np.asarray(risk))
    return np.asarray((~beyond & ~np.isnan(p) if seen.certify else beyond).any(axis=1))


def clearest(seen: Measurement) -> tuple[Floats, Floats]:
    """How clearly each series breaks its bound, to sort by, smallest first: the smallest p-value of its lags (infinite
    where it has none), then the distance from the bound in standard errors, negative; both of shape (S,).
    """
    told = _evidence(seen)
    shown = _shown(seen, told.upper, np.full(told.p.shape, np.nan))
    with np.errstate(invalid="ignore", divide="ignore"):
        scale = np.where(shown["standard_error"] > 0, shown["standard_error"], 1.0)
        far = np.nan_to_num(np.abs(seen.observed - shown["bound"]) / scale, nan=0.0)
    p = np.where(np.isnan(told.p), np.inf, 1 - told.p if seen.certify else told.p)
    return p.min(axis=1), -far.max(axis=1)


def _references(seen: Measurement) -> list[tuple[Side, Reference]]:
    both: tuple[tuple[Side, Reference | None], ...] = (("upper", seen.upper), ("lower", seen.lower))
    return [(side, reference) for side, reference in both if reference is not None]


def _levels(rule: Rule, parts: Sequence[Seen], evidence: Sequence[_Evidence]) -> list[Floats]:
    """The risk at which each cell is judged: the largest that any of the rule's ways across series grants it."""
    pooled = np.concatenate([told.p.ravel() for told in evidence])
    share = rule.false_alarm / len(rule.across)
    granted = [_across(way, share, pooled, evidence) for way in rule.across]
    level = np.max(granted, axis=0)
    edges = np.cumsum([told.p.size for told in evidence])[:-1]
    return [
        piece.reshape(part.measurement.observed.shape)
        for piece, part in zip(np.split(level, edges), parts, strict=True)
    ]


def _across(way: str, share: float, pooled: Floats, evidence: Sequence[_Evidence]) -> Floats:
    if way == "discoveries":
        return benjamini_yekutieli(pooled, share)
    if way == "series":
        return np.concatenate([_holm_within(told.p, share).ravel() for told in evidence])
    return holm(pooled, share)


def _holm_within(p: Floats, risk: float) -> Floats:
    """Holm over the lags of each series by itself, shape (S, L)."""
    lags = p.shape[1]
    if lags == 1:
        return np.where(np.isnan(p), np.nan, risk)
    order = np.argsort(p, axis=1, kind="stable")
    ordered = np.take_along_axis(p, order, axis=1)
    told = np.sum(~np.isnan(p), axis=1, keepdims=True)
    steps = risk / np.maximum(told - np.arange(lags), 1)
    stopped = np.maximum.accumulate(~broken(ordered, steps), axis=1)
    first = np.argmax(stopped, axis=1)[:, None]
    steps = np.where(stopped, np.take_along_axis(np.broadcast_to(steps, p.shape), first, axis=1), steps)
    level = np.empty_like(p)
    np.put_along_axis(level, order, np.where(np.isnan(ordered), np.nan, steps), axis=1)
    return level


def _outcome(rule: Rule, part: Seen, told: _Evidence, level: Floats) -> Judged:
    seen = part.measurement
    side_level = np.where(np.isnan(level), rule.false_alarm, level) / told.sides
    shown = _shown(seen, told.upper, side_level)
    failed = broken(told.p, level)
    if seen.certify:
        failed = ~failed & ~np.isnan(told.p)
    outcome = np.where(np.isnan(told.p), UNDECIDED, np.where(failed, FAIL, PASS)).astype(np.int64)
    why, reasons = _why(seen, outcome)
    if seen.unsure is not None:
        idle = (outcome == (FAIL if seen.certify else PASS)) & (seen.unsure >= 0)
        outcome = np.where(idle, UNDECIDED, outcome)
        why = np.where(idle, seen.unsure, why)
    if rule.matters is not None:
        weak = (outcome == PASS) & (shown["detectable"] > rule.matters)
        outcome = np.where(weak, UNDECIDED, outcome)
        why = np.where(weak, len(reasons), why)
        reasons = (*reasons, f"the smallest change that could be found is larger than what matters ({rule.matters:g})")
    quiet = np.full(seen.observed.shape, np.nan)
    return Judged(
        seen=part,
        outcome=outcome,
        why=why,
        reasons=reasons,
        upper=told.upper,
        p_value=quiet if seen.exact else told.p,
        risk_used=quiet if seen.exact else level,
        **shown,
    )


def _why(seen: Measurement, outcome: Ints) -> tuple[Ints, tuple[str, ...]]:
    silent = (outcome == UNDECIDED) & (seen.undecided < 0)
    if not silent.any():
        return seen.undecided, seen.reasons
    return np.where(silent, len(seen.reasons), seen.undecided), (*seen.reasons, "no value to judge")


def _shown(seen: Measurement, upper: Bools, level: Floats) -> dict[str, Floats]:
    """Bound, limits and the rest, of the side that the observation is nearer to break."""

    def told(read: Callable[[Side, Reference], Floats]) -> Floats:
        result = np.full(seen.observed.shape, np.nan)
        for side, reference in _references(seen):
            result = np.where(upper == (side == "upper"), read(side, reference), result)
        return np.where(np.isfinite(result), result, np.nan)

    with np.errstate(invalid="ignore", over="ignore"):
        return {
            "bound": told(lambda _, reference: reference.bound),
            "standard_error": told(lambda _, reference: reference.standard_error),
            "limit": told(lambda side, reference: reference.limit(side, level)),
            "naive_limit": told(lambda side, reference: reference.naive_limit(side, level)),
            "detectable": told(lambda side, reference: reference.detectable(side, level)),
        }
