"""The alarm budget: who gets which risk, and what the sentences say."""

from __future__ import annotations

import json

import pytest
from click.testing import CliRunner

from sercheck.cli.measures import command
from sercheck.rulebook import load_rules
from sercheck.rulebook.budget import expected_false_holds, explain, in_short

HEAD = """feed: heat
columns: {time: at, values: [kwh]}
every: 1h
seasons: {day: 1D}
"""
BUDGET = "batch_every: 1D\nfalse_holds: 1 per 90D\n"
LEVEL = "{measure: level, stays: {like: history}, name: "
SPREAD = "{measure: spread, stays: {like: history}, name: "
FRESH = "{measure: freshness, stays: {below: 6h}, name: "


def book(head: str, *rules: str):
    """A file of the rules given in flow style."""
    return load_rules(HEAD + head + "rules:\n" + "".join(f"  - {rule}\n" for rule in rules))


def risks(head: str, *rules: str) -> list[float]:
    """The risk of each rule."""
    return [rule.false_alarm for rule in book(head, *rules).rules]


def test_the_budget_is_divided_by_weight_among_the_rules_that_hold():
    """Two spreads of weight 1 and 3 get a quarter and three quarters of 1/90."""
    assert risks(BUDGET, SPREAD + "a}", SPREAD + "b, weight: 3}") == pytest.approx([1 / 360, 3 / 360])


def test_level_weighs_a_quarter_unless_it_says_otherwise():
    """The measure brings its own weight."""
    assert risks(BUDGET, SPREAD + "a}", LEVEL + "b}") == pytest.approx([0.8 / 90, 0.2 / 90])
    assert risks(BUDGET, SPREAD + "a}", LEVEL + "b, weight: 1}") == pytest.approx([0.5 / 90, 0.5 / 90])


def test_a_rule_that_notes_takes_nothing_from_the_others():
    """It gets what an unweighted holding rule gets."""
    noting = SPREAD + "b, otherwise: note}"
    assert risks(BUDGET, SPREAD + "a}", noting) == pytest.approx([1 / 90, 1 / 90])
    assert risks(BUDGET, SPREAD + "a, weight: 3}", noting) == pytest.approx([1 / 90, 1 / 270])


def test_rules_that_only_note_share_as_if_they_held():
    """A file without holding rules still divides its budget."""
    noting = [SPREAD + f"{name}, otherwise: note}}" for name in "ab"]
    assert risks(BUDGET, *noting) == pytest.approx([1 / 180, 1 / 180])


def test_a_rules_own_risk_comes_first():
    """It is spent before the rest is divided, so that the budget is kept."""
    got = risks(BUDGET, SPREAD + "a}", SPREAD + "b, false_alarm: 0.001}", SPREAD + "c}")
    assert got == pytest.approx([(1 / 90 - 0.001) / 2, 0.001, (1 / 90 - 0.001) / 2])
    assert sum(got) == pytest.approx(1 / 90)


def test_the_files_risk_is_every_rules_risk():
    """false_alarm of the file is not divided."""
    assert risks("false_alarm: 0.01\n", SPREAD + "a}", LEVEL + "b, false_alarm: 0.02}") == [0.01, 0.02]


def test_a_file_that_says_nothing_gets_one_in_a_thousand():
    """The default risk of a rule."""
    assert risks("", SPREAD + "a}", LEVEL + "b}") == [0.001, 0.001]


def test_exact_rules_take_no_share():
    """A measure without sampling error gives no false alarm by chance."""
    assert risks(BUDGET, SPREAD + "a}", FRESH + "b}") == pytest.approx([1 / 90, 0.0])


def test_a_batch_by_the_calendar_counts_its_mean_length():
    """Twelve months make a year."""
    monthly = book("batch_every: MS\nfalse_holds: 1 per 10YS\n", SPREAD + "a}")
    assert monthly.rules[0].false_alarm == pytest.approx(1 / 120)


def test_the_expected_false_holds_are_those_of_the_budget():
    """Dividing and adding up again gives the number that was asked for; without batch_every nobody can say."""
    assert expected_false_holds(book(BUDGET, SPREAD + "a}", LEVEL + "b}")) == (pytest.approx(1.0), "90D")
    hourly = book("batch_every: 1h\nfalse_alarm: 0.001\n", SPREAD + "a}")
    assert expected_false_holds(hourly) == (pytest.approx(0.001 * 24 * 90), "90D")
    assert expected_false_holds(book("", SPREAD + "a}")) is None


def test_the_arithmetic_is_told_in_sentences():
    """Budget, shares, the sum, and how often a risk of one in a thousand fires every hour."""
    told = " ".join(explain(book(BUDGET, SPREAD + "a}", LEVEL + "b}", FRESH + "c}")))
    for words in ("1 × 1D / 90D = 0.0111", "weight 0.25 of 1.25", "No share: 'c'", "4.06 a year"):
        assert words in told
    hourly = " ".join(explain(book("batch_every: 1h\nfalse_alarm: 0.001\n", SPREAD + "a}")))
    assert "8.77 a year" in hourly


def test_the_budget_in_a_line():
    """Expected false holds, who shares the risk and how much it is; nothing where nothing holds by chance."""
    told = in_short(book(BUDGET, SPREAD + "a}", LEVEL + "b}", FRESH + "c}", LEVEL + "d, otherwise: note}"))
    assert told == "at most 1 false hold per 90D: 2 rules share 0.0111 a batch"
    hourly = in_short(book("batch_every: 1h\nfalse_alarm: 0.001\n", SPREAD + "a}"))
    assert hourly == "at most 2.16 false holds per 90D: 1 rule has a risk of 0.001 a batch"
    assert in_short(book("", SPREAD + "a}")) == "1 rule has a risk of 0.001 that a healthy batch is held"
    assert in_short(book(BUDGET, FRESH + "c}")) == ""


def test_the_command_explains_the_budget_of_a_rule_file(tmp_path):
    """Sentences and each rule's risk; the same as JSON; not together with the name of a measure."""
    path = tmp_path / "rules.yaml"
    rules = book(BUDGET, SPREAD + "wide as ever, weight: 3}", LEVEL + "b, otherwise: note}", FRESH + "c}")
    path.write_text(rules.text)
    text = CliRunner().invoke(command, ["--rules", str(path)]).output
    assert "so the risk of one batch is 1 × 1D / 90D = 0.0111." in " ".join(text.split())
    lines = {line.split("  ")[0]: line.split() for line in text.splitlines()}
    assert lines["wide as ever"][3:] == ["spread", "hold", "3", "0.0111", "false_holds"]
    assert lines["c"][1:] == ["freshness", "hold", "–", "0", "–"]
    told = json.loads(CliRunner().invoke(command, ["--rules", str(path), "--format", "json"]).output)
    assert told["alarm_budget"] == explain(rules)
    assert told["false_holds_expected"] == {"per": "90D", "count": pytest.approx(1.0)}
    assert [(each["rule"], each["false_alarm"]) for each in told["rules"]] == [
        (rule.name, rule.false_alarm) for rule in rules.rules
    ]
    assert CliRunner().invoke(command, ["level", "--rules", str(path)]).exit_code == 2
