"""What ``learn`` found, as a page for people and as plain data; depends on ``say``."""

from __future__ import annotations

from collections.abc import Iterable
from math import isinf
from typing import TYPE_CHECKING, Any

import click

from sercheck.cli.say import folded, plain

if TYPE_CHECKING:
    from sercheck.learn import Finding
    from sercheck.taught import Taught

MOST = 2
"""Findings of a kind told one by one, the largest first."""
MOST_RULES = 6
"""Rules told one by one."""


def page(taught: Taught) -> str:
    """Everything a person should know, on a screen."""
    row, lessons = taught.lessons.baseline, taught.lessons
    seasons = f", cycle taken out: {', '.join(lessons.seasons)}" if lessons.seasons else ", no cycle taken out"
    stretch = f"{row.first_stamp} to {row.last_stamp}, {row.series} series{seasons}"
    lines = [
        f"{click.style('LEARNED', bold=True)}  {plain(row.feed)}, {stretch}",
        f"  archive: {taught.archived} rows kept, {taught.there_before} were there before",
    ]
    for what, found in _by_kind(lessons.findings).items():
        lines.append(f"  {len({each.series for each in found})} series with a {what}:")
        lines += [folded(_sentence(each), "    ", "      ") for each in found[:MOST]]
        if len(found) > MOST:
            lines.append(f"    and {len(found) - MOST} more")
    for lack in taught.lacks[:MOST_RULES]:
        more = f"; about {lack.time_more} more would do" if lack.time_more else ""
        why = f"{plain(lack.reason, 300)}{more}"
        lines.append(folded(f"will be undecided: {plain(lack.rule, 80)}: {why}", "  ", "    "))
    if len(taught.lacks) > MOST_RULES:
        lines.append(f"  and {len(taught.lacks) - MOST_RULES} more rules will be undecided")
    lines += [folded(f"note: {plain(note, 400)}", rest="      ") for note in taught.notes]
    lines.append(f"baseline {row.baseline_id}")
    return "\n".join(lines)


def _by_kind(findings: Iterable[Finding]) -> dict[str, list[Finding]]:
    found: dict[str, list[Finding]] = {}
    for each in findings:
        found.setdefault(each.what, []).append(each)
    for same in found.values():
        same.sort(key=lambda each: -abs(each.size))
    return found


def _sentence(each: Finding) -> str:
    from sercheck.learn import KINDS

    who = f"{plain(each.series, 60)}: " if each.series else ""
    column = f" in {plain(each.column, 40)}" if each.column else ""
    if each.what == "level change":
        return f"{who}{each.size:+.4g}{column} from {each.where} on"
    return f"{who}{each.size:.0f} {KINDS[each.what]}{column}, from {each.where} on"


def facts(taught: Taught) -> dict[str, Any]:
    """The same for a program, with the facts of every series and column as the baseline keeps them.

    A fact that is infinite (the degrees of freedom of a normal law) is null here: JSON has no such number.
    """
    row = taught.lessons.baseline
    return {
        "feed": row.feed,
        "baseline_id": row.baseline_id,
        "rules_fingerprint": row.rules_fingerprint,
        "learned_at": row.learned_at,
        "first_stamp": row.first_stamp,
        "last_stamp": row.last_stamp,
        "series": row.series,
        "seasons": list(taught.lessons.seasons),
        "archived": taught.archived,
        "there_before": taught.there_before,
        "findings": [vars(each) for each in taught.lessons.findings],
        "undecided": [vars(lack) for lack in taught.lacks],
        "notes": list(taught.notes),
        "facts": [_finite(row) for row in taught.lessons.facts.to_pylist()],
    }


def _finite(row: dict[str, Any]) -> dict[str, Any]:
    return {name: None if isinstance(fact, float) and isinf(fact) else fact for name, fact in row.items()}
