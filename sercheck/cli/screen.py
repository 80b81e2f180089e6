"""The answer of ``gate`` on one screen: the decision, what failed and why, what was undecided, how many passed."""

from __future__ import annotations

from collections import Counter
from typing import TYPE_CHECKING, Any

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
    lines.append(_passed(verdict))
    lines += [folded(f"note: {plain(note)}", rest="      ") for note in verdict.notes[:MOST_UNDECIDED]]
    if len(verdict.notes) > MOST_UNDECIDED:
        lines.append(f"  and {len(verdict.notes) - MOST_UNDECIDED} more notes")
    lines.append(f"batch {verdict.batch_id}")
    return "\n".join(lines)


def _head(verdict: Verdict) -> str:
    word = strong(verdict.decision.upper(), good=verdict.released)
    facts = verdict.facts
    stretch = f"{facts.first} to {facts.last}" if facts.first else "no stretch"
    return f"{word}  {plain(verdict.feed)}, {stretch}, {facts.series} series, {facts.rows} rows"


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
    by_rule = _rows(verdict, "undecided")
    for rule, rows in list(by_rule.items())[:MOST_UNDECIDED]:
        (reason, times), *others = Counter(str(row["reason"]) for row in rows).most_common()
        count = f"{times} series: " if times > 1 else _who(rows[0])
        more = f" (and {len(others)} other reasons)" if others else ""
        lines.append(folded(f"undecided: {plain(rule, 80)}: {count}{plain(reason, 300)}{more}", "  ", "    "))
    if len(by_rule) > MOST_UNDECIDED:
        lines.append(f"  and {len(by_rule) - MOST_UNDECIDED} more rules undecided")
    return lines


def _passed(verdict: Verdict) -> str:
    counts = verdict.counts
    return f"  {counts['pass']} passed, {counts['fail']} failed, {counts['undecided']} undecided"
