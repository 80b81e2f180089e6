"""A brief for a terminal, and as Markdown for a chat; depends on the view.

Both say what the page says, in its order, without plots. Texts of the view hold no control characters; what Markdown
would read as a mark is escaped.
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import asdict
from itertools import zip_longest
from textwrap import fill
from typing import Any

from sercheck.brief.view import FIGURES, Brief, Failed
from sercheck.brief.words import listed, many

WIDTH = 100
"""Columns of a line."""
STATES = {"released": "RELEASED", "held": "HELD", "settled": "LET IN BY A PERSON", "discarded": "DISCARDED"}
_MARKS = re.compile(r"([\\`*_{}\[\]<>#|~!&@]|:(?=//)|(?<=[A-Za-z])\.(?=[A-Za-z]))")


def text(brief: Brief) -> str:
    """Lines of at most 100 columns."""
    lines = [f"{STATES[brief.state]}  {brief.feed}, {brief.stretch} {brief.zone}"]
    lines += [_fold(brief.why, "  ")]
    lines += [_fold(f"{label}: {said}", "  ", "    ") for label, said in _facts(brief)]
    for rule in brief.failed:
        lines += ["", _fold(f"failed{_aside(rule)}: {rule.rule}", "  ", "    ")]
        lines += [_fold(f"{rule.who}: {rule.reason}" if rule.who else rule.reason, "    ", "      ")]
        lines += [_fold(said, "    ", "    ") for said in _sayings(rule)]
        lines += [f"    {line}" for line in _figures(rule)]
    lines += ["", *(_fold(said, "  ", "    ") for said in _rest(brief))] if _rest(brief) else []
    lines += [""]
    for what, command in brief.commands:
        lines += [f"  {what}:", f"    {command}"]
    return "\n".join(lines)


def markdown(brief: Brief) -> str:
    """Markdown that CommonMark and the chats built on it show alike; every text from outside is escaped."""
    e = escaped
    lines = [f"**{STATES[brief.state]}** {e(brief.feed)}, {e(brief.stretch)} {e(brief.zone)}", "", e(brief.why), ""]
    lines += [f"- {label}: {e(said)}" for label, said in _facts(brief)]
    for rule in brief.failed:
        lines += ["", f"**{e(rule.rule)}**{_aside(rule)}", ""]
        lines += [f"{e(rule.who)}: {e(rule.reason)}." if rule.who else f"{e(rule.reason)}."]
        lines += [f"{e(said)}" if said != rule.link else f"<{said}>" for said in _sayings(rule, link=True)]
        lines += ["", f"| {' | '.join(FIGURES)} |", f"|{' --- |' * len(FIGURES)}"]
        lines += [f"| {' | '.join(map(e, row))} |" for row in rule.figures[:3]]
        lines += ["", f"and {many(rule.records - 3, 'more record')}"] if rule.records > 3 else []
    lines += ["", *(f"- {e(said)}" for said in _rest(brief))] if _rest(brief) else []
    for what, command in brief.commands:
        lines += ["", f"{what}:", "", f"    {command}"]
    return "\n".join(lines)


def plain_data(brief: Brief) -> dict[str, Any]:
    """Everything as plain data for a program; the same keys always."""
    told = asdict(brief)
    told["counts"] = dict(brief.counts)
    told["versions"] = dict(brief.versions)
    told["commands"] = [{"what": what, "command": command} for what, command in brief.commands]
    for rule, shown in zip(brief.failed, told["failed"], strict=True):
        shown["figures"] = [dict(zip_longest(FIGURES, row)) for row in rule.figures]
    return told


def escaped(said: str) -> str:
    """A text that Markdown shows letter by letter; addresses do not become links, names do not call anybody."""
    return _MARKS.sub(r"\\\1", said)


def _facts(brief: Brief) -> Iterator[tuple[str, str]]:
    if brief.settled:
        yield "settled", brief.settled
    for cause in brief.causes:
        support = "" if cause.support is None else f" (support {cause.support:.2f})"
        names = listed(cause.worst, 3) if cause.series <= len(cause.worst) else _some(cause.worst, cause.series)
        where = f", {many(cause.series, 'series', 'series')}: {names}" if cause.series else ""
        yield "likely cause", f"{cause.what}{support}{where}"
    if brief.more_causes:
        yield "likely cause", f"{brief.more_causes} more"
    if brief.since:
        yield "since when", brief.since
    if brief.before:
        yield "how often", brief.before
    yield "batch", f"{brief.batch_id}, {many(brief.series, 'series', 'series')}, {many(brief.rows, 'row')}"


def _some(names: tuple[str, ...], count: int) -> str:
    return f"{', '.join(names[:3])} and {count - 3:,} more"


def _aside(rule: Failed) -> str:
    return "" if rule.holds else " (only noted)"


def _sayings(rule: Failed, *, link: bool = False) -> list[str]:
    counted = f"{many(rule.records, 'record')} in {many(rule.series, 'series', 'series')}; " if rule.series > 1 else ""
    told = [rule.about, f"{counted}{rule.since}" + (f"; {rule.before}" if rule.before else "")]
    if rule.runbook:
        told.append(rule.runbook if link else f"runbook: {rule.runbook}")
    return [said for said in told if said]


def _figures(rule: Failed, most: int = 3) -> list[str]:
    rows = [FIGURES, *rule.figures[:most]]
    short = [tuple(cell if len(cell) <= 24 else f"{cell[:23]}…" for cell in row) for row in rows]
    widths = [max(len(cell) for cell in column) for column in zip(*short, strict=True)]
    lines = [
        "  ".join([row[0].ljust(widths[0]), *(c.rjust(w) for c, w in zip(row[1:], widths[1:], strict=True))])
        for row in short
    ]
    return [*lines, *([f"and {many(rule.records - most, 'more record')}"] if rule.records > most else [])]


def _rest(brief: Brief) -> list[str]:
    told = [f"and {many(brief.more_failed, 'more rule')} failed"] if brief.more_failed else []
    told += [
        f"undecided{', which holds' if each.holds else ''}: {each.rule} ({many(each.records, 'record')}): {each.reason}"
        for each in brief.undecided
    ]
    told += [f"and {many(brief.more_undecided, 'more rule')} undecided"] if brief.more_undecided else []
    return told + [f"note: {note}" for note in brief.notes]


def _fold(said: str, first: str, rest: str | None = None) -> str:
    indent = first if rest is None else rest
    return fill(said, WIDTH, initial_indent=first, subsequent_indent=indent, break_on_hyphens=False)
