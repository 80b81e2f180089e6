"""The first comment of a draft and its hints: where it came from, what was found, how it was rehearsed.

Depends on the shape, the figures and the trial.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass

from sercheck.drafting.figures import Figures
from sercheck.drafting.shape import Shape
from sercheck.drafting.text import VERBATIM
from sercheck.drafting.trial import Trial, counted
from sercheck.plain import without_secrets
from sercheck.portrait.findings import Finding
from sercheck.portrait.whole import Study

FINDINGS = 8
"""Oddities of history told."""
CLOSED = 12
"""Days told that may be closed days."""
EVENTS = 2
"""Rules that must fail on one day for it to be called an event (ours)."""


@dataclass(frozen=True)
class Story:
    """All that the preface tells.

    Attributes:
        study: the history as it was studied.
        shape: what the rules were chosen by.
        figures: what was counted.
        budget: the alarm budget.
        trial: the rehearsal of the rules as they are, or None.
        rehearsed: its batches were enough to count false holds.
        within: it kept the budget.
        command: how the draft was asked for.
    """

    study: Study
    shape: Shape
    figures: Figures
    budget: str | None
    trial: Trial | None
    rehearsed: bool
    within: bool
    command: str


def head(story: Story) -> list[str]:
    """The paragraphs of the first comment."""
    study, figures, shape = story.study, story.figures, story.shape
    alarm = [] if not story.rehearsed or story.within else [f"OVER ITS BUDGET. {notes(story)[0]}"]
    command = without_secrets(story.command)
    length = f"{figures.rows:,} rows of {shape.series} series" if shape.series > 1 else f"{figures.rows:,} rows"
    between = f", {study.first} to {study.last}" if study.first else ""
    paragraphs = [
        *alarm,
        f"Rules for {study.feed}, drafted from its history{' by' if command else ''}",
        f"{VERBATIM}{command}" if command else "",
        f"History: {length}{between}; fingerprint {figures.fingerprint}.",
        f"Found, not given: {'; '.join(study.told)}." if study.told else "",
        f"Seasons: {_seasons(story)}.",
        _people(shape),
        *notes(story)[len(alarm) :],
        "Before it goes live, put faults into it: sercheck rehearse RULES HISTORY",
    ]
    return [each for each in paragraphs if each]


def notes(story: Story) -> tuple[str, ...]:
    """What a person should know about the draft, a sentence or two each."""
    return tuple(each for each in (_rehearsal(story), _short(story), _odd(story)) if each)


def hints(story: Story) -> list[str]:
    """What a person may want to add to the keys of the file."""
    told = [
        "tell: [desk]                    # whom to tell; SERCHECK_DESK_DESK holds the address",
        "runbook: docs/what-to-do.md     # a key of each rule: where to read what to do",
    ]
    silent = () if story.figures.batches is None else story.figures.batches.silent
    if silent:
        days = ", ".join(silent[-CLOSED:])
        more = f" (the last {CLOSED} of {len(silent)})" if len(silent) > CLOSED else ""
        told.append(f"closed_days: [{days}]  # no series had a row{more}: keep those on which none was due")
    events = _events(story)
    if events:
        told.append(f"closed_days: [{', '.join(events)}]  # several rules failed at once: keep those that were events")
    return told


def _events(story: Story) -> list[str]:
    """Days on which several rules failed."""
    if story.trial is None or not story.rehearsed:
        return []
    lines = story.trial.lines
    days: Counter[str] = Counter(
        day for name, dates in story.trial.dates.items() if lines[name].rule.false_alarm > 0 for day in set(dates)
    )
    return sorted(day for day, many in days.items() if many >= EVENTS)[-CLOSED:]


def _seasons(story: Story) -> str:
    found: dict[str, list[float]] = {}
    for one in story.study.portraits:
        for season in one.seasons:
            found.setdefault(season.name or f"{season.steps} steps", []).append(season.share)
    if not found:
        return "none was found"
    many = len(story.study.portraits)
    return ", ".join(
        f"{name} ({min(shares):.0%}{f' to {max(shares):.0%}' if len(shares) > 1 else ''} of the variance"
        + (f", in {len(shares)} of {many} series" if many > 1 else "") + ")"
        for name, shares in found.items()
    )  # fmt: skip


def _people(shape: Shape) -> str:
    if shape.kind != "days" or not shape.season:
        return ""
    if shape.people:
        return "There is a cycle by week, so people make this feed: the profile is by hour of week."
    return (
        "There is no cycle by week, so this is weather or a machine: the profile is by hour of day. In weather a slip "
        "of an hour, a flat day and a halved cycle are nearly invisible."
    )


def _rehearsal(story: Story) -> str:
    if story.shape.kind == "irregular":
        return "Not rehearsed: the feed has no cadence, so nothing says which rows came in one batch."
    if story.trial is None:
        return "Not rehearsed: history is one batch."
    if not story.rehearsed:
        return (
            f"Not rehearsed: {counted(story.trial.told.batches, 'batch')} of history judged to see which rules can "
            "decide, no false hold counted."
        )
    told = story.trial.told
    low, high = told.interval
    allowed = f" where the budget ({story.budget}) allows {told.expected:.2g}" if told.expected is not None else ""
    first = told.feed.began(told.replayed.healthy[0].batch)[:10]
    said = (
        f"Rehearsed on the last {counted(told.batches, 'batch')} (from {first} on, no faults put in): "
        f"{counted(told.false_holds, 'false hold')}{allowed} (exact 95 % interval {low:.2g} to {high:.2g})"
    )
    data = f"; held for missing or doubled rows of history itself: {len(told.by_data)}" if told.by_data else ""
    if story.within:
        return f"{said}{data}."
    return f"{said}{data}. The file exceeds its budget, and no rule is left to leave out."


def _short(story: Story) -> str:
    batches, shape = story.figures.batches, story.shape
    if shape.batch_every is None:
        return "Rules that compare with history only note. With a cadence (--every) it could be rehearsed."
    have = 1 if batches is None else batches.count
    if have > shape.fewest:
        return ""
    return (
        f"History holds {counted(have, 'batch')} of {shape.batch_every}; more than {shape.fewest} are "
        "needed before rules that compare with it may hold. Until then only exact rules hold; draft again with more."
    )


def _odd(story: Story) -> str:
    kinds: dict[str, list[tuple[str, Finding]]] = {}
    for one in story.study.portraits:
        for found in one.findings:
            label = " ".join(part for part in (one.series, one.column) if part)
            kinds.setdefault(found.what, []).append((label, found))
    if not kinds:
        return ""
    told = []
    for what, group in list(kinds.items())[:FINDINGS]:
        label, first = max(group, key=lambda pair: pair[1].size)
        more = f", and in {len(group) - 1} more series" if len(group) > 1 else ""
        told.append(f"{what} ({label}, {first.where}: {first.about}{more})")
    return f"Odd in history: {'; '.join(told)}."
