"""The answer of ``gate`` on one screen: the decision, what failed and why, what was undecided, how many passed."""

from __future__ import annotations

from collections import Counter
from typing import TYPE_CHECKING, Any

import click

from sercheck.cli.say import folded, plain, strong

if TYPE_CHECKING:
    from sercheck.verdict import Verdict

MOST_RULES = 6
"""Rules told one by one; more are counted, so that the answer stays on a screen of 24 lines."""
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
    lines += [folded(f"note: {plain(note)}", rest="      ") for note in verdict.notes[:MOST_RULES]]
    if len(verdict.notes) > MOST_RULES:
        lines.append(f"  and {len(verdict.notes) - MOST_RULES} more notes")
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
    lines: list[str] = []
    by_rule = _rows(verdict, "fail")
    for rule, rows in list(by_rule.items())[:MOST_RULES]:
        action = "" if rows[0]["action"] == "hold" else " (noted, does not hold)"
        lines.append(f"  failed: {click.style(plain(rule, 80), bold=True)}{action}")
        lines += [
            folded(f"{_who(row)}{plain(str(row['reason']), 400)}", "    ", "      ") for row in rows[:MOST_SERIES]
        ]
        more = len(rows) - MOST_SERIES
        if more > 0:
            lines.append(f"    and {more} more")
        if rule in verdict.abouts:
            lines.append(folded(plain(verdict.abouts[rule], 300), "    ", "    "))
    if len(by_rule) > MOST_RULES:
        lines.append(f"  and {len(by_rule) - MOST_RULES} more rules failed")
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
    for rule, rows in list(by_rule.items())[:MOST_RULES]:
        (reason, times), *others = Counter(str(row["reason"]) for row in rows).most_common()
        count = f"{times} series: " if times > 1 else _who(rows[0])
        more = f" (and {len(others)} other reasons)" if others else ""
        lines.append(folded(f"undecided: {plain(rule, 80)}: {count}{plain(reason, 300)}{more}", "  ", "    "))
    if len(by_rule) > MOST_RULES:
        lines.append(f"  and {len(by_rule) - MOST_RULES} more rules undecided")
    return lines


def _passed(verdict: Verdict) -> str:
    counts = verdict.counts
    return f"  {counts['pass']} passed, {counts['fail']} failed, {counts['undecided']} undecided"
