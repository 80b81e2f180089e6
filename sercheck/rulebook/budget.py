"""Divides the alarm budget among the rules, and explains it in sentences; depends on the compiled form and lengths."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from sercheck.measure import Measure
from sercheck.rulebook.compiled import Action, FalseHolds, RiskFrom, Rule, Rulebook
from sercheck.rulebook.lengths import mean_seconds, seconds

DEFAULT_RISK = 0.001
"""Risk of a rule when the file says nothing: the smallest at which the methods were measured closely (one batch in a
thousand)."""

LARGEST_BATCH_RISK = 0.5
"""A budget that stops a healthy batch more often than not is a slip of the pen."""

YEAR = 365.2425 * 86400.0
"""Seconds in a Gregorian year."""


@dataclass(frozen=True)
class Claim:
    """What one rule brings to the division: its action, own risk, own weight, and its measure."""

    otherwise: Action
    false_alarm: float | None
    weight: float | None
    measure: type[Measure]

    @property
    def heft(self) -> float:
        """Its weight when it holds."""
        return self.measure.weight if self.weight is None else self.weight

    @property
    def takes_part(self) -> bool:
        """It is given a share of the budget (it has sampling error and no risk of its own)."""
        return self.false_alarm is None and not self.measure.exact


@dataclass(frozen=True)
class Share:
    """What one rule gets: its risk for one batch, where that comes from, and its weight in the budget."""

    false_alarm: float
    risk_from: RiskFrom
    weight: float


def batch_risk(budget: FalseHolds, batch_every: str) -> float:
    """Risk of one batch: count × (time between batches) / period."""
    return budget.count * (mean_seconds(batch_every) or 0.0) / seconds(budget.per)


def divide(claims: Sequence[Claim], file_risk: float | None, of_batch: float | None) -> list[Share]:
    """Give every rule its risk.

    A rule's own ``false_alarm`` wins; else the file's; else its part of the batch's risk. The part of a rule that
    holds is weight / (sum of the weights of the rules that hold and have no risk of their own); the risks that holding
    rules ask for themselves come out of the batch's risk first, so that the budget is kept. A rule that only notes
    costs no hold and gets what a holding rule of weight 1 would get. A measure without sampling error gives no false
    alarm by chance and takes nothing.

    Args:
        claims: the rules, in their order.
        file_risk: the file's ``false_alarm``, or None.
        of_batch: risk of one batch by the file's ``false_holds``, or None.
    """
    spent = sum(claim.false_alarm for claim in claims if claim.false_alarm and claim.otherwise == "hold")
    holding = [claim for claim in claims if claim.takes_part and claim.otherwise == "hold"]
    sharing = holding or [claim for claim in claims if claim.takes_part]
    total = sum(claim.heft if holding else claim.weight or 1.0 for claim in sharing)
    unit = max((of_batch or 0.0) - spent, 0.0) / total if total else 0.0
    return [_share(claim, file_risk, unit if of_batch is not None else None) for claim in claims]


def _share(claim: Claim, file_risk: float | None, unit: float | None) -> Share:
    if claim.measure.exact:
        return Share(0.0, "exact", 0.0)
    weight = claim.heft if claim.otherwise == "hold" else claim.weight or 1.0
    if claim.false_alarm is not None:
        return Share(claim.false_alarm, "rule", 0.0)
    if file_risk is not None:
        return Share(file_risk, "file", weight)
    if unit is not None:
        return Share(unit * weight, "budget", weight)
    return Share(DEFAULT_RISK, "default", weight)


def expected_false_holds(book: Rulebook) -> tuple[float, str] | None:
    """Most false holds that a healthy feed has on average, and in which period.

    The sum of the holding rules' risks (their alarms taken as never coinciding) times the batches in the period: the
    budget's own, else 90 days. None when the file does not say how often a batch comes.
    """
    if book.batch_every is None:
        return None
    per = book.false_holds.per if book.false_holds else "90D"
    apart = mean_seconds(book.batch_every)
    return (round(_held_risk(book) * seconds(per) / apart, 9), per) if apart else None


def _held_risk(book: Rulebook) -> float:
    return sum(rule.false_alarm for rule in book.rules if rule.otherwise == "hold")


def in_short(book: Rulebook) -> str:
    """The budget in a line, such as "at most 1 false hold per 90D: 8 rules share 0.0111 a batch"; empty for no risk."""
    held, sharing = _held_risk(book), [rule for rule in book.rules if rule.otherwise == "hold" and rule.false_alarm > 0]
    if not sharing:
        return ""
    who = f"{len(sharing)} rules share" if len(sharing) > 1 else "1 rule has a risk of"
    expected = expected_false_holds(book)
    if expected is None:
        return f"{who} {held:.3g} that a healthy batch is held"
    count, per = expected
    return f"at most {count:.3g} false hold{'' if count == 1 else 's'} per {per}: {who} {held:.3g} a batch"


def explain(book: Rulebook) -> list[str]:
    """The arithmetic of the budget, a sentence each."""
    said: list[str] = []
    if book.false_holds and book.batch_every:
        budget = book.false_holds
        said.append(
            f"The budget is {budget.count:g} false hold{'' if budget.count == 1 else 's'} per {budget.per}; "
            f"a batch comes every {book.batch_every}, so the risk of one batch is "
            f"{budget.count:g} × {book.batch_every} / {budget.per} = {batch_risk(budget, book.batch_every):.3g}."
        )
    said.extend(_groups(book.rules))
    held = _held_risk(book)
    if held > 0:
        said.append(f"Together the rules that hold stop a healthy batch with a probability of at most {held:.3g}.")
    expected = expected_false_holds(book)
    if expected and held > 0:
        count, per = expected
        apart = mean_seconds(book.batch_every or "")
        yearly = held * YEAR / apart if apart else 0.0
        said.append(
            f"A healthy feed then has at most {count:.3g} false hold{'' if count == 1 else 's'} per {per} on average "
            f"({yearly:.3g} a year): "
            "a risk kept exactly still gives false holds when batches are many."
        )
    if any(isinstance(rule.window, int) or rule.window != "batch" for rule in book.rules):
        said.append(
            "Windows longer than the batch overlap, so one false alarm of such a rule may last several batches: count "
            "runs of failures."
        )
    return said


def _groups(rules: Sequence[Rule]) -> list[str]:
    """One sentence for each group of rules with the same origin, action, weight and risk."""
    groups: dict[tuple[RiskFrom, Action, float, float], list[str]] = {}
    for rule in rules:
        groups.setdefault((rule.risk_from, rule.otherwise, rule.weight, rule.false_alarm), []).append(rule.name)
    whole = sum(rule.weight for rule in rules if rule.risk_from == "budget" and rule.otherwise == "hold")
    return [_sentence(key, names, whole) for key, names in groups.items()]


def _sentence(key: tuple[RiskFrom, Action, float, float], names: list[str], whole: float) -> str:
    origin, action, weight, risk = key
    who = ", ".join(f"'{name}'" for name in names)
    if origin == "exact":
        return f"No share: {who} (no sampling error, no false alarm by chance)."
    reasons = {
        "rule": "its own false_alarm",
        "file": "the file's false_alarm",
        "default": "the default, as the file says nothing",
        "budget": f"weight {weight:g} of {whole:g} among the rules that hold"
        if action == "hold"
        else f"weight {weight:g}; it only notes and takes nothing from the others",
    }
    return f"Risk {risk:.3g} for one batch{' each' if len(names) > 1 else ''}: {who} ({reasons[origin]})."


def of_measure(measure: type[Measure]) -> str:
    """What a rule of a measure takes of the alarm budget, in a sentence."""
    if measure.exact:
        return "It has no sampling error, gives no false alarm by chance and takes no share of the alarm budget."
    if measure.weight == 1:
        return "A rule that holds takes one share of the alarm budget (weight 1)."
    return (
        f"A rule that holds takes a share of weight {measure.weight:g} of the alarm budget unless it says otherwise: "
        "on real feeds it alarms more often than its risk."
    )
