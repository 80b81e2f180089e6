"""Episodes: what makes a run of failing batches one episode, and what of it is told; depends on ``record``.

A rule that keeps failing on a feed is one episode. It opens with the first batch on which the rule fails, goes on while
it fails, and closes with the first newer batch on which it passes, or when the rule is no longer asked. A batch of
which the rule could say nothing neither prolongs nor closes it. Order is that of the batches' newest rows, whenever
they came. A rule that only notes has episodes too; who is told of them is for the rule file to say.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np

from sercheck.record import Records

State = Literal["fail", "pass", "undecided", "gone"]
Change = Literal["opened", "worse", "spread", "closed", "gone"]
"""What is told of an episode; it is gone when it closes because its rule is no longer asked."""

CLEARLY = 2.0
"""An episode is worse when the observation lies this many times as far from the bound as when it was told last, and
spreads when so many times as many series fail (ours). A doubling can be told only log2 times: six times from one
series to sixty-four, however long the episode lasts."""
GONE = 3
"""Batches of a feed that do not ask a rule before its episode closes (ours: one may be judged by other rules too)."""
CLOSING: frozenset[State] = frozenset({"pass", "gone"})


@dataclass(frozen=True)
class Standing:
    """How one rule stands on one batch after one judgement.

    Attributes:
        state: fail when a record failed or holds the batch because it is undecided; else pass when one passed, else
            undecided; gone for a rule that is no longer asked.
        failed: number of failed records.
        series: number of series with a record that failed or holds.
        action: hold or note, what the failure does; None without one.
        record_id: the worst record: the smallest p-value (an exact rule's is 0), then the farthest beyond.
        p_value: of that record; None for an exact rule.
        beyond: how far the farthest observation lies from its bound, in allowances (1 is the limit itself); for an
            exact rule in its own unit; None where nothing was observed.
    """

    rule: str
    state: State
    passed: int = 0
    failed: int = 0
    undecided: int = 0
    series: int = 0
    action: str | None = None
    record_id: str | None = None
    p_value: float | None = None
    beyond: float | None = None


def standings(records: Records) -> list[Standing]:
    """One standing for each rule, in the order of the records; records without a rule stand for none."""
    names = records["rule"]
    if len(records) and names.strides == (0,):
        return [_standing(str(names[0]), records)]
    return [_standing(rule, records.take(names == rule)) for rule in dict.fromkeys(names.tolist()) if rule is not None]


def _standing(rule: str, own: Records) -> Standing:
    counts = own.counts()
    outcome, action = own["outcome"], own["action"]
    bad = np.flatnonzero((outcome == "fail") | (action == "hold"))
    state: State = "fail" if len(bad) else "pass" if counts["pass"] else "undecided"
    told = Standing(rule, state, counts["pass"], counts["fail"], counts["undecided"])
    if not len(bad):
        return told
    p_value = np.where(outcome[bad] == "fail", np.nan_to_num(own["p_value"][bad], nan=0.0), 2.0)
    beyond = _beyond(own["observed"][bad], own["bound"][bad], own["limit"][bad])
    worst = int(bad[np.lexsort((-np.nan_to_num(beyond, nan=-1.0), p_value))[0]])
    farthest = None if np.isnan(beyond).all() else float(np.nanmax(beyond))
    return Standing(
        rule, state, counts["pass"], counts["fail"], counts["undecided"],
        series=len(set(own["series"][bad].tolist())),
        action="hold" if np.any(action[bad] == "hold") else "note",
        record_id=str(own["record_id"][worst]),
        p_value=None if np.isnan(own["p_value"][worst]) else float(own["p_value"][worst]),
        beyond=farthest,
    )  # fmt: skip


def _beyond(observed: np.ndarray, bound: np.ndarray, limit: np.ndarray) -> np.ndarray:
    """Distance from the bound in allowances, or in its own unit where there is no allowance; NaN is unknown."""
    with np.errstate(over="ignore", invalid="ignore"):
        bound = np.where(np.isnan(bound), 0.0, bound)
        distance, allowance = np.abs(observed - bound), np.abs(limit - bound)
        scaled = np.divide(distance, allowance, out=distance.copy(), where=allowance > 0)
    return np.where(np.isfinite(scaled), scaled, np.nan)


@dataclass(frozen=True)
class Step:
    """A standing at its place in time, as episodes see it.

    Attributes:
        key: newest row of the batch, when the batch was first stored, when the judgement was, its id: the order.
        episode_id: the episode it belonged to before, if any.
    """

    key: tuple[str, str, str, str]
    state: State
    series: int = 0
    beyond: float | None = None
    episode_id: str | None = None


@dataclass(frozen=True)
class Run:
    """The failing steps of one episode, the oldest first, and the step that closes it (None while it is open)."""

    steps: tuple[Step, ...]
    closed_by: Step | None = None


def runs_around(steps: Sequence[Step], own: Step) -> tuple[Run, ...]:
    """The episodes that ``own`` can touch: what lies between the closing step before it and the one after it.

    ``steps`` are those of one rule in any order, ``own`` among them; they must reach back to a closing step before
    ``own`` and on to one after it, where there are such. One run when ``own`` fails, up to two when it closes.
    """
    line = sorted((step for step in steps if step.state != "undecided"), key=lambda step: step.key)
    place = line.index(own)
    first = max((i + 1 for i in range(place) if line[i].state in CLOSING), default=0)
    found: list[Run] = []
    failing: list[Step] = []
    for i, step in enumerate(line[first:], first):
        if step.state == "fail":
            failing.append(step)
            continue
        if failing:
            found.append(Run(tuple(failing), step))
            failing = []
        if i > place:
            break
    if failing:
        found.append(Run(tuple(failing)))
    return tuple(found)


def change_by(steps: Sequence[Step], runs: Sequence[Run], own: Step) -> tuple[Change, Run] | None:
    """What ``own``, stored just now, changes that is worth telling, and of which episode; None for nothing.

    A batch that comes late changes what is told no more than one in time: failing beside an episode it belongs to it,
    and passing in the middle of one, or before the batch that closed it, it closes nothing.
    """
    closed_before = any(step.state in CLOSING and step.key > own.key for step in steps)
    for run in runs:
        if run.closed_by is own:
            if closed_before or run is not runs[-1]:
                return None
            return "gone" if own.state == "gone" else "closed", run
        if own in run.steps:
            told = _grown([step for step in run.steps if step is not own], own)
            return None if told is None else (told, run)
    return None


def _grown(others: Sequence[Step], own: Step) -> Change | None:
    """Opened, worse, spread or none of it, against the levels at which the episode was told before."""
    if not others:
        return "opened"
    beyond, series = others[0].beyond, others[0].series
    for step in others[1:]:
        if _worse(step.beyond, beyond) or step.series >= CLEARLY * series:
            beyond, series = max(beyond or 0.0, step.beyond or 0.0), max(series, step.series)
    if own.series >= CLEARLY * series:
        return "spread"
    return "worse" if _worse(own.beyond, beyond) else None


def _worse(now: float | None, told: float | None) -> bool:
    return now is not None and told is not None and told > 0 and now >= CLEARLY * told


@dataclass(frozen=True)
class Changed:
    """A change of an episode that one batch made: the rule, what changed, which episode."""

    rule: str
    change: Change
    episode_id: str


def for_desks(changes: Sequence[Changed], tell: Mapping[str, Sequence[str]]) -> dict[str, list[Changed]]:
    """What each desk is to be told; ``tell`` names the desks of each rule."""
    told: dict[str, list[Changed]] = {}
    for change in changes:
        for desk in tell.get(change.rule, ()):
            told.setdefault(desk, []).append(change)
    return told
