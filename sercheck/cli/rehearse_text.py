"""The answer of ``rehearse`` on one screen: false holds against the budget, rules, faults, what to change."""

from __future__ import annotations

from typing import TYPE_CHECKING

from sercheck.cli.say import folded, plain, strong
from sercheck.cli.table import Head, number, table

if TYPE_CHECKING:
    from sercheck.rehearsal.verdicts import Rehearsal, RuleLine

MOST_RULES, MOST_FAULTS, MOST_ADVICE, MOST_DATES = 10, 10, 4, 3
"""Lines told of each; more are counted, so that the answer stays on a screen of 40 lines."""

FAR = 10
"""Budgets in the interval from which it says next to nothing (ours)."""


def answer(told: Rehearsal, missed: list[str]) -> str:
    """The whole answer as text."""
    lines = [_head(told), *(folded(line, "  ", "    ") for line in (false_holds(told), *_held(told)) if line)]
    lines += [_rules(told)]
    if told.faults:
        lines += [_caught(told), _faults(told)]
    lines += [folded(plain(sentence, 500), "advice: ", "        ") for sentence in told.advice[:MOST_ADVICE]]
    if len(told.advice) > MOST_ADVICE:
        lines.append(f"        and {len(told.advice) - MOST_ADVICE} more: see --format json or --page")
    lines += [folded(f"{strong('MISSED', good=False)}: {sentence}") for sentence in missed]
    return "\n".join(line for line in lines if line)


def missed(told: Rehearsal, max_false_holds: float | None, min_caught: float | None) -> list[str]:
    """The targets that were missed, a sentence each."""
    short = []
    if max_false_holds is not None and told.false_holds > max_false_holds:
        short.append(f"{told.false_holds} false holds, at most {max_false_holds:g} wanted")
    if min_caught is not None:
        if told.caught is None:
            short.append(f"no fault could be tried, so none was caught; {min_caught:.0%} wanted")
        elif told.caught < min_caught:
            short.append(f"{told.caught:.1%} of the faults caught, at least {min_caught:.1%} wanted")
    return short


def false_holds(told: Rehearsal) -> str:
    """False holds against the budget, in one sentence."""
    low, high = told.interval
    count = f"{told.false_holds} false hold{'' if told.false_holds == 1 else 's'}"
    rate = f"{told.false_holds / told.periods:.2g} per {told.period}"
    between = f"exact 95 % interval {low / told.periods:.2g} to {high / told.periods:.2g}"
    budget = told.feed.book.false_holds
    allowed = f"; the budget is {budget.count:g} per {budget.per}" if budget else ""
    if told.expected is not None and not budget:
        allowed = f"; the rules' risks allow {told.expected / told.periods:.2g} per {told.period}"
    verdict = ""
    if budget:
        verdict = (
            ", more than that" if low / told.periods > budget.count
            else ", less than that" if high / told.periods < budget.count
            else ", which so few batches cannot tell" if high / told.periods > FAR * budget.count else ", which fits"
        )  # fmt: skip
    return f"{count}: {rate} ({between}){allowed}{verdict}."


def _head(told: Rehearsal) -> str:
    first, last = (told.feed.began(one.batch)[:10] for one in (told.replayed.healthy[0], told.replayed.healthy[-1]))
    head = (
        f"{plain(told.feed.book.feed)}, {told.batches} batches from {first} to {last}, {len(told.feed.keys)} series, "
        f"{len(told.replayed.outcomes)} faults put in"
    )
    if told.replayed.finished:
        return f"{strong('REHEARSED', good=True)}  {head}"
    batches, faults = told.replayed.planned
    unfinished = f"{told.batches} of {batches} batches and {len(told.replayed.outcomes)} of {faults} faults"
    finished = folded(f"told is what was finished: {unfinished}", "  ", "  ")
    return f"{strong('INTERRUPTED', good=False)}  {head}\n{finished}"


def _held(told: Rehearsal) -> list[str]:
    lines = []
    for what, held in (("held", told.held), ("held for rows missing, doubled or out of order", told.by_data)):
        if held:
            shown = [f"{told.feed.began(one.batch)[:10]} ({', '.join(one.held_by)})" for one in held[:MOST_DATES]]
            more = f" and {len(held) - MOST_DATES} more" if len(held) > MOST_DATES else ""
            lines.append(f"{what}: {plain('; '.join(shown), 400)}{more}")
    if told.feed.unplaced:
        lines.append(f"{told.feed.unplaced} rows could not be placed in time and belong to no batch")
    return lines


def _rules(told: Rehearsal) -> str:
    heads = [
        Head("rule", least=24), Head("false holds", right=True), Head("allowed", right=True),
        Head("undecided", right=True), Head("caught", right=True), Head("alone", right=True),
    ]  # fmt: skip
    ranked = sorted(told.rules, key=_interest)[:MOST_RULES]
    shown = [line for line in told.rules if line in ranked]
    rows = [
        [
            line.rule.name + (" (notes)" if line.rule.otherwise == "note" else ""),
            str(line.false_holds) + (f" + {line.data} of rows" if line.data else ""), number(line.share, 2),
            f"{line.undecided / line.records:.0%}" if line.records else None, str(line.caught), str(line.alone),
        ]
        for line in shown
    ]  # fmt: skip
    more = len(told.rules) - len(shown)
    return table(heads, rows) + (f"\n  and {more} more rules without false hold" if more else "")


def _interest(line: RuleLine) -> tuple[bool, bool, int, float]:
    """What a reader wants to see first: false holds, then holding rules, by what only they caught."""
    silent = line.undecided / line.records if line.records else 1.0
    return (not (line.false_holds or line.data), line.rule.otherwise != "hold", -line.alone, silent)


def _caught(told: Rehearsal) -> str:
    tried = sum(line.tried for line in told.faults)
    first, caught = (sum(getattr(line, name) for line in told.faults) for name in ("first", "caught"))
    return folded(
        f"{caught / tried:.0%} of {tried} faults caught within {told.looked} batches, {first / tried:.0%} in the first."
        " Worst caught (first / all batches):"
    )


def _faults(told: Rehearsal) -> str:
    heads = [
        Head("fault", least=16), Head("size", least=8), Head("one series", right=True), Head("all", right=True),
        Head("delay", right=True), Head("cause named", right=True), Head("caught by", least=12),
    ]  # fmt: skip
    shown = told.sums[:MOST_FAULTS]
    rows = [
        [
            one.fault, one.sizes, _shares(one.shares(every=False)), _shares(one.shares(every=True)),
            number(one.median_delay, 2), None if one.cause_right is None else f"{one.cause_right:.0%}", one.caught_by,
        ]
        for one in shown
    ]  # fmt: skip
    more = len(told.sums) - len(shown)
    return table(heads, rows) + (f"\n  and {more} more faults, caught at least as often" if more else "")


def _shares(shares: tuple[float, float] | None) -> str | None:
    """Share held in the first batch and in all."""
    return None if shares is None else f"{shares[0]:.0%} / {shares[1]:.0%}"
