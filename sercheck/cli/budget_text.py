"""The alarm budget of a rule file, as a page for people and as plain data; depends on ``table`` and ``say``."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from sercheck.cli.say import folded, plain
from sercheck.cli.table import NOTHING, Head, number, table
from sercheck.rulebook.budget import expected_false_holds, explain

if TYPE_CHECKING:
    from sercheck.rulebook.compiled import Rulebook

FROM = {
    "rule": "its false_alarm", "file": "the file's false_alarm", "budget": "false_holds", "default": "the default",
    "exact": NOTHING,
}  # fmt: skip
"""Where a rule's risk comes from, in the words of the rule file."""
LONGEST = 2_000
"""Letters of a sentence, which names every rule of a group."""


def page(book: Rulebook) -> str:
    """The arithmetic in sentences, then each rule with its risk for one batch."""
    heads = (
        Head("rule", least=12), Head("measure"), Head("on failure"), Head("weight", right=True),
        Head("risk", right=True), Head("from"),
    )  # fmt: skip
    rows = [
        [
            rule.name, rule.measure, rule.otherwise, number(rule.weight) if rule.weight else NOTHING,
            number(rule.false_alarm, 3), FROM[rule.risk_from],
        ]
        for rule in book.rules
    ]  # fmt: skip
    sentences = [folded(plain(sentence, LONGEST), rest="  ") for sentence in explain(book)]
    return "\n".join([f"Alarm budget of {plain(book.feed)}", "", *sentences, "", table(heads, rows)])


def facts(book: Rulebook) -> dict[str, Any]:
    """The same for a program."""
    expected = expected_false_holds(book)
    return {
        "feed": book.feed,
        "alarm_budget": explain(book),
        "false_holds_expected": None if expected is None else {"per": expected[1], "count": expected[0]},
        "rules": [
            {
                "rule": rule.name,
                "measure": rule.measure,
                "otherwise": rule.otherwise,
                "weight": rule.weight,
                "false_alarm": rule.false_alarm,
                "risk_from": rule.risk_from,
            }
            for rule in book.rules
        ],
    }
