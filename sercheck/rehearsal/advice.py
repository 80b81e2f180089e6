"""What to change in a rule file after its rehearsal, in sentences; depends on ``verdicts`` and the compiled rules."""

from __future__ import annotations

from collections.abc import Iterable

from scipy.special import pdtr

from sercheck import causes
from sercheck.rehearsal.bench import Outcome
from sercheck.rehearsal.verdicts import Rehearsal, RuleLine, of_rows
from sercheck.rulebook.compiled import Rule, Rulebook

UNLIKELY = 0.975
"""A rule holds more often than its share when fewer would be seen this often: the 97.5 % point of the Poisson law."""
SILENT = 0.9
"""Share of a rule's records from which it decides next to nothing (ours)."""
UNTRIED = frozenset({"freshness"})
"""Measures of which history cannot tell: when its rows arrived."""
SELDOM = 0.2
"""Share caught below which a fault is called missed (ours)."""
FEW = 3
"""Dates told in a sentence."""

WOULD = {
    causes.WRONG_ORDER: ("autocorrelation", "measure: autocorrelation, lag: 1, after: difference"),
    causes.NOISE: ("autocorrelation", "measure: autocorrelation, lag: 1, after: difference"),
    causes.SMOOTHED: ("roughness", "measure: roughness"),
    causes.INTERPOLATED: ("innovations", "measure: innovations, look: variance"),
    causes.DIFFERENCED: ("innovations", "measure: innovations, look: variance"),
    causes.TWICE: ("innovations", "measure: innovations, look: variance"),
    causes.TOTAL: ("innovations", "measure: innovations, look: variance"),
    causes.INTERLEAVED: ("innovations", "measure: innovations, look: variance"),
    causes.UNIT: ("spread", "measure: spread"),
    causes.SIGN: ("seasonal_lag", "measure: seasonal_lag"),
    causes.MIRRORED: ("seasonal_lag", "measure: seasonal_lag"),
    causes.GONE: ("seasonal_lag", "measure: seasonal_lag"),
    causes.FLATTENED: ("seasonal_lag", "measure: seasonal_lag"),
    causes.SPREAD: ("repeats", "measure: repeats, look: share"),
    causes.SLIPPED: ("season_phase", "measure: season_phase, across: together"),
    causes.FILLED: ("repeats", "measure: repeats, look: share"),
    causes.REPEATED: ("repeats", "measure: repeats, look: share"),
    causes.ROUNDED: ("repeats", "measure: repeats, look: share"),
    causes.STUCK: ("repeats", "measure: repeats, look: run"),
    causes.AGAIN: ("replay", "measure: replay"),
    causes.SWAPPED: ("identity", "measure: identity"),
    causes.SHIFTED: ("level", "measure: level"),
    causes.MISSING: ("completeness", "measure: completeness, stays: {above: ...}"),
}
"""For each cause the measure that sees it best, and how a rule of it begins: what the faults do to each statistic was
measured on simulated and real feeds; the season is the feed's shortest."""
OWN = {
    "rows delivered twice": ("spacing doubles", "measure: spacing, look: doubles, stays: {below: 1}"),
    "delivered out of order": ("spacing disorder", "measure: spacing, look: disorder, stays: {below: 1}"),
    "stamps off the clock": ("spacing off_grid", "measure: spacing, look: off_grid, stays: {below: 1}"),
    "values empty": ("rate missing", "measure: rate, of_rows: missing, stays: {below: ...}"),
}
"""The same for faults that a look of its own sees exactly."""


def advice(told: Rehearsal) -> tuple[str, ...]:
    """What to change, a sentence each, false holds first."""
    return (*_too_often(told), *_silent(told), *_idle(told), *_risk(told), *_missed(told))


def _too_often(told: Rehearsal) -> Iterable[str]:
    for line in told.rules:
        if line.rule.otherwise != "hold" or of_rows(line.rule) or not beyond_share(line):
            continue
        dates = [told.feed.began(one.batch)[:10] for one in told.held if line.rule.name in one.held_by]
        shown = ", ".join(dates[:FEW]) + (f" and {len(dates) - FEW} more" if len(dates) > FEW else "")
        yield (
            f"'{line.rule.name}' held {line.false_holds} times where its risk allows {line.share:.2g}: look at "
            f"{shown}; if nothing was wrong, let it note (otherwise: note), name those days closed_days, or drop it."
        )


def beyond_share(line: RuleLine) -> bool:
    """It held a healthy batch more often than its risk explains (the 97.5 % point of the Poisson law)."""
    return line.false_holds > 0 and float(pdtr(line.false_holds - 1, line.share)) > UNLIKELY


def _silent(told: Rehearsal) -> Iterable[str]:
    for line in told.rules:
        if line.records and line.undecided > SILENT * line.records:
            yield (
                f"'{line.rule.name}' could not decide {line.undecided} of {line.records} records: it needs a longer "
                "window or history, or should go."
            )


def _idle(told: Rehearsal) -> Iterable[str]:
    if not any(line.caught for line in told.rules):
        return
    able = [line for line in told.rules if line.rule.otherwise == "hold" and line.rule.measure not in UNTRIED]
    never = [line.rule.name for line in able if not line.caught]
    twice = [line.rule.name for line in able if line.caught and not line.alone]
    if never:
        yield f"No fault was caught by {_listed(never)}: without {_them(never)} the others would share more risk."
    if twice:
        yield (
            f"Whatever {_listed(twice)} caught, another rule caught in the same batch: "
            f"{'it' if len(twice) == 1 else 'each by itself'} could be left out."
        )


def _them(names: list[str]) -> str:
    return "it" if len(names) == 1 else "them"


def _risk(told: Rehearsal) -> Iterable[str]:
    expected, (low, high) = told.expected, told.interval
    if not expected or not told.replayed.finished:
        return
    if low > expected:
        yield (
            f"All in all there were {told.false_holds} false holds where the budget allows {expected:.2g}: its risks "
            "are too loose for this feed."
        )
    elif high < expected:
        yield (
            f"All in all there were {told.false_holds} false holds where the budget allows {expected:.2g}: the rules "
            "keep far less than their risk, so a larger one would catch more at the same price."
        )
    budget = told.feed.book.false_holds
    if budget and told.batches and expected / max(told.periods, 1e-9) < budget.count / 2:
        yield (
            f"The rules' own risks use {expected / told.periods:.2g} of the {budget.count:g} false holds per "
            f"{budget.per}: leave out `false_alarm` to let them share all of it."
        )


def _missed(told: Rehearsal) -> Iterable[str]:
    by_fault: dict[str, list[Outcome]] = {}
    for one in told.replayed.outcomes:
        by_fault.setdefault(one.fault, []).append(one)
    missing: dict[str, list[str]] = {}
    blind: list[str] = []
    for name, group in by_fault.items():
        if sum(one.delay is not None for one in group) >= SELDOM * len(group):
            continue
        kind, rule = OWN.get(name, WOULD.get(group[0].cause, ("", "")))
        if kind and not has(told.feed.book, kind):
            missing.setdefault(_spelled(rule, told.feed.book), []).append(name)
        else:
            blind.append(name)
    for rule, names in missing.items():
        yield f"Hardly anything catches {_listed(names)}: add a rule ({rule})."
    if blind:
        yield (
            f"Hardly anything catches {_listed(blind)}, though a rule that could is there: the feed varies too much "
            "for it, or the rule only notes."
        )


def has(book: Rulebook, kind: str) -> bool:
    """Whether a rule of the measure (and the look, where one is named) holds."""
    measure, _, look = kind.partition(" ")
    return any(rule.measure == measure and rule.otherwise == "hold" and (not look or _looks(rule, look))
               for rule in book.rules)  # fmt: skip


def _looks(rule: Rule, look: str) -> bool:
    return look in (str(value) for value in rule.fields.model_dump().values())


def _spelled(rule: str, book: Rulebook) -> str:
    """The beginning of a rule, with the feed's season where it needs one, and history for its bound."""
    if rule.startswith(("measure: season_phase", "measure: seasonal_lag")):
        rule += f", season: {next(iter(book.seasons), 'day')}"
    return rule if "stays" in rule else f"{rule}, stays: {{like: history}}"


def _listed(names: list[str]) -> str:
    return ", ".join(f"'{name}'" for name in names)
