"""The answer of ``gate`` on one screen: the decision, what failed and why, what was undecided, how many passed."""

from __future__ import annotations

from datetime import datetime
from typing import TYPE_CHECKING, Any
from zoneinfo import ZoneInfo

import click

from sercheck.cli.say import folded, plain, strong

if TYPE_CHECKING:
    from sercheck.verdict import Verdict

MOST_RULES = 4
"""Failed rules told one by one; more are counted, so that the answer stays on a screen of 30 lines."""
MOST_UNDECIDED = 2
"""Rules told that could not decide, and notes; more are counted."""
MOST_CAUSES = 2
"""Likely causes told."""
MOST_SERIES = 2
"""Series told for each failed rule, the clearest first."""


def answer(verdict: Verdict) -> str:
    """The whole answer as text."""
    lines = [_head(verdict)]
    lines += _causes(verdict)
    lines += _failed(verdict)
    lines += _undecided(verdict)
    lines += [folded(f"note: {plain(note)}", rest="      ") for note in verdict.notes[:MOST_UNDECIDED]]
    if len(verdict.notes) > MOST_UNDECIDED:
        lines.append(f"  and {len(verdict.notes) - MOST_UNDECIDED} more notes")
    if verdict.budget:
        lines.append(folded(f"{verdict.budget} (sercheck measures --rules FILE)", "", "  "))
    lines.append(f"batch {verdict.batch_id}")
    return "\n".join(lines)


def _head(verdict: Verdict) -> str:
    """The decision, the stretch on the feed's own clock, and how many records and rules decided nothing."""
    word = strong(verdict.decision.upper(), good=verdict.released)
    facts, zone = verdict.facts, ZoneInfo(verdict.timezone)
    first, last = (datetime.fromisoformat(stamp).astimezone(zone) for stamp in (facts.first, facts.last))
    stretch = f"{first:%Y-%m-%d %H:%M} to {last:%Y-%m-%d %H:%M} {verdict.timezone}"
    head = f"{word}  {plain(verdict.feed)}, {stretch}, {facts.series} series, {facts.rows} rows"
    counts = verdict.counts
    tally = f"{counts['fail']} of {sum(counts.values())} records fail, {counts['undecided']} are undecided"
    mute = sum(rule["records"] == rule["all"] for rule in verdict.undecided)
    rules = len(set(verdict.table["rule"].tolist()))
    return f"{head}\n  {tally}" + (f": {mute} of {rules} rules could decide nothing" if mute else "")


def _rows(verdict: Verdict, outcome: str) -> dict[str, list[dict[str, Any]]]:
    """Records of one outcome by rule, in the order of the rule file, the clearest first."""
    by_rule: dict[str, list[dict[str, Any]]] = {}
    for row in verdict.table.rows_where("outcome", outcome):
        by_rule.setdefault(str(row["rule"]), []).append(row)
    for rows in by_rule.values():
        rows.sort(key=lambda row: row["p_value"] if row["p_value"] is not None else 0.0)
    return by_rule


def _failed(verdict: Verdict) -> list[str]:
    """For each failed rule its clearest series, how many others there are, and what the rule's author says of it."""
    lines: list[str] = []
    by_rule = _rows(verdict, "fail")
    told = list(by_rule.items())[:MOST_RULES]
    for rule, rows in told:
        action = "" if rows[0]["action"] == "hold" else ", noted only"
        many = f" ({len(rows)} records{action})" if len(rows) > 1 or action else ""
        lines.append(f"  failed: {click.style(plain(rule, 80), bold=True)}{many}")
        each = MOST_SERIES if len(by_rule) == 1 else 1
        lines += [folded(f"{_who(row)}{plain(str(row['reason']), 400)}", "    ", "      ") for row in rows[:each]]
        if rule in verdict.abouts:
            lines.append(folded(plain(verdict.abouts[rule], 300), "    ", "    "))
    if len(by_rule) > len(told):
        lines.append(f"  and {len(by_rule) - len(told)} more rules failed")
    return lines


def _who(row: dict[str, Any]) -> str:
    return f"{plain(str(row['series']), 60)}: " if row["series"] else ""


def _causes(verdict: Verdict) -> list[str]:
    """What probably broke: one or two lines."""
    lines = []
    for told in verdict.likely_causes[:MOST_CAUSES]:
        series = told["series"]
        who = (
            ""
            if not series
            else f", in {plain(str(series[0]), 60)}"
            if len(series) == 1
            else f", in {len(series)} series"
        )
        weight = f" (support {told['support']:.2f}{who})" if told["support"] else who
        lines.append(folded(f"likely cause: {plain(str(told['cause']))}{weight}", "  ", "    "))
    return lines


def _undecided(verdict: Verdict) -> list[str]:
    lines = []
    silent = verdict.undecided
    for told in silent[:MOST_UNDECIDED]:
        others = told["reasons"] - 1
        more = f" (and {others} other reason{'s' if others > 1 else ''})" if others else ""
        many = f" ({told['records']} of {told['all']} records)"
        holds = "undecided, which holds" if told["holds"] else "undecided"
        named = ", ".join(plain(str(key), 60) for key in told["series"])
        who = f"{named}: " if named and len(told["series"]) <= MOST_SERIES else ""
        text = f"{holds}: {plain(told['rule'], 80)}{many}: {who}{plain(str(told['reason']), 300)}{more}"
        lines.append(folded(text, "  ", "    "))
    if len(silent) > MOST_UNDECIDED:
        lines.append(f"  and {len(silent) - MOST_UNDECIDED} more rules undecided")
    return lines
