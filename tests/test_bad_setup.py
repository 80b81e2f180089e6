"""Odd histories, rule files and clocks: told before anything is released, or seen in the answer."""

from __future__ import annotations

import re
from collections.abc import Callable
from pathlib import Path

import pandas as pd
import pytest
from gate_runs import DAY, HEAD, RULES, Place, healthy, one_sentence, place, water, with_values

CLEAN = "0 of 16 records fail, 0 are undecided"


@pytest.fixture
def here(tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> Place:
    """A folder with rules, history and a healthy batch."""
    return place(tmp_path, capsys, monkeypatch)


HISTORIES: dict[str, tuple[Callable[[], str], int, str]] = {
    "the batch itself": (healthy, 0, "no row of the history lies before the batch: nothing was compared"),
    "later than the batch": (
        lambda: water(DAY + pd.Timedelta(days=10), 20, seed=3).to_csv(index=False), 0,
        "no row of the history lies before the batch",
    ),
    "overlapping the batch": (
        lambda: water(DAY - pd.Timedelta(days=40), 41, seed=1).to_csv(index=False), 0, CLEAN,
    ),
    "one row": (lambda: HEAD + "2026-03-09T05:00:00Z,east,200\n", 0, "undecided: level as usual"),
    "without values": (
        lambda: water(DAY - pd.Timedelta(days=40), 40, seed=1).assign(cm="").to_csv(index=False), 0,
        "undecided: level as usual",
    ),
    "without variation": (
        lambda: water(DAY - pd.Timedelta(days=40), 40, seed=1).assign(cm=5).to_csv(index=False), 0,
        "undecided: level as usual",
    ),
    "of other series": (
        lambda: water(DAY - pd.Timedelta(days=40), 40, seed=1).replace({"east": "x", "west": "y"}).to_csv(index=False),
        1, "failed: no gap",
    ),
    "of huge values": (
        lambda: water(DAY - pd.Timedelta(days=40), 40, seed=1).assign(cm=lambda f: f.cm * 1e300).to_csv(index=False),
        1, "failed: level as usual",
    ),
    "empty": (lambda: "", 2, "past.csv: the file is empty"),
    "of another feed": (lambda: "day,price\n2026-03-01,5\n", 2, "past.csv: there is no column 'read_at'"),
    "of another age": (
        lambda: water(pd.Timestamp("1999-01-01", tz="UTC"), 40, seed=1).to_csv(index=False), 2, "Is the year right",
    ),
}  # fmt: skip


@pytest.mark.parametrize("case", HISTORIES)
def test_an_odd_history_is_told(here: Place, case: str) -> None:
    """A history that nothing can be compared with is named: never an accidental pass of what was not compared."""
    make, status, said = HISTORIES[case]
    ended = here.gate("batch.csv", "--no-keep", history=here.write("past.csv", make()))
    assert ended.status == status, ended.err
    assert said in ended.err
    if status == 2:
        one_sentence(ended)


BOMB = "a: &a [x, x]\nb: &b [*a, *a]\nc: &c [*b, *b]\nfeed: *c\n"
RULE_FILES: dict[str, tuple[str | bytes, str]] = {
    "empty": ("", "in.yaml:1:1"),
    "a list": ("- 1\n", "in.yaml:1:1"),
    "no YAML": ("feed: [\n", "not YAML"),
    "a tab": ("feed:\n\tx: 1\n", "in.yaml:2:1"),
    "a bomb": (BOMB, "anchor &a"),
    "a Python object": (
        RULES.replace("harbour_water", "!!python/object/apply:os.system ['touch owned']"), "the tag .*no tags",
    ),
    "nesting": ("feed: " + "[" * 100 + "\n", "nesting deeper"),
    "endless nesting": ("feed: " + "[" * 10_000 + "\n", "nesting"),
    "keys nested": ("feed: " + "{a: " * 5_000 + "\n", "nesting"),
    "too large": ("#" * 1_100_000, "at most 1,000,000"),
    "Latin-1": ("feed: bjørn\n".encode("latin-1"), "no UTF-8"),
    "NUL": ("feed: a\0b\n", "character that YAML does not allow"),
    "an unknown zone": (RULES.replace("every:", "timezone: Europe/Olso\nevery:", 1), "Europe/Oslo"),
    "a zone that is a path": (RULES.replace("every:", "timezone: ../../etc/passwd\nevery:", 1), "etc/passwd"),
    "an unknown key": (RULES.replace("seasons:", "saesons:"), "seasons"),
    "an unknown measure": (RULES.replace("measure: level", "measure: levle"), "level"),
    "a rule twice": (RULES.replace("never flat", "level as usual"), "level as usual"),
    "no rules": (RULES[: RULES.index("rules:")] + "rules: []\n", "at least 1 item"),
    "an endless number": (RULES.replace("0.2", "1e999"), "finite"),
    "a cadence of nothing": (RULES.replace("every: 1h", "every: 0h"), "every|0h"),
    "a cadence below nothing": (RULES.replace("every: 1h", "every: -1h"), "every|-1h"),
}  # fmt: skip


@pytest.mark.parametrize("case", RULE_FILES)
def test_a_bad_rule_file_is_trouble(here: Place, case: str) -> None:
    """Bombs, tags, nesting and mistakes are refused with file, line and column; nothing of them is carried out."""
    content, said = RULE_FILES[case]
    before = here.files
    ended = here.gate("batch.csv", rules=here.write("in.yaml", content))
    assert ended.status == 2
    assert ended.out == ""
    assert re.search(said, ended.err), ended.err
    assert all(line.isprintable() and line.startswith("in.yaml:") for line in ended.err.splitlines()), ended.err
    assert here.files - before == {"in.yaml"}


def test_a_rule_file_for_other_columns_is_trouble(here: Place) -> None:
    """Rules of another feed: the sentence names the batch, the column and those that are there."""
    rules = here.write("in.yaml", RULES.replace("[cm]", "[metres]"))
    assert "no column 'metres'; wanted it among the columns, which are read_at, gauge, cm" in one_sentence(
        here.gate("batch.csv", rules=rules)
    )


def test_a_wrong_zone_shows_on_the_clock(here: Place) -> None:
    """Stamps without an offset read in a zone of half hours do not fit a history of whole hours."""
    rules = here.write("in.yaml", RULES.replace("every:", "timezone: Asia/Kolkata\nevery:", 1))
    ended = here.gate(here.write("in.csv", healthy().replace("Z,", ",")), rules=rules)
    assert ended.status == 1
    assert "failed: all on the clock" in ended.err


def test_a_rule_that_is_for_no_series_is_told(here: Place) -> None:
    """`only` that matches nothing: the release says which rule judged no series."""
    rules = here.write("in.yaml", RULES.replace("name: never flat,", "name: never flat, only: north*,"))
    ended = here.gate("batch.csv", rules=rules)
    assert ended.status == 0
    assert "note: rule 'never flat' judged no series: none is called north*" in ended.err


def test_a_batch_that_no_rule_is_for_is_trouble(here: Place) -> None:
    """When no rule judged anything, nothing is released: the keys of the feed have changed."""
    rules = here.write("in.yaml", RULES.replace(", measure:", ", only: [north, south], measure:"))
    line = one_sentence(here.gate("batch.csv", "--released-to", "released", rules=rules))
    assert "not one rule judged any of its 2 series" in line
    assert "`only`" in line
    assert (here.folder / "batch.csv").exists()


def test_a_release_in_which_nothing_was_decided_says_so(here: Place) -> None:
    """All records undecided: released, as `when_undecided` says, and the screen and the JSON tell it."""
    rules = here.write("in.yaml", RULES[: RULES.index("  - {name: few empty")])
    ended = here.gate("batch.csv", "--no-keep", rules=rules, history=None)
    assert ended.status == 0
    assert "note: nothing could be decided: all 6 records are undecided" in ended.err
    told = here.gate("batch.csv", "--no-keep", "--format", "json", rules=rules, history=None)
    assert "nothing could be decided" in told.out


def test_undecided_rules_hold_when_asked_to(here: Place) -> None:
    """The same batch is held by `when_undecided: hold`."""
    rules = here.write("in.yaml", RULES.replace("rules:", "when_undecided: hold\nrules:"))
    assert here.gate("batch.csv", rules=rules, history=None).status == 1


def test_a_rule_that_holds_wins_over_unreadable_values(here: Place) -> None:
    """A batch without values that a rule holds is held with its records, not refused."""
    rules = here.write("in.yaml", RULES.replace("below: 0.2}, window: 5D", "below: 0.6}, when_undecided: hold"))
    ended = here.gate(here.write("in.csv", with_values(lambda cm: "")), rules=rules)
    assert ended.status == 1
    assert "HELD" in ended.err


def test_one_column_of_garbage_beside_a_good_one_is_trouble(here: Place) -> None:
    """A column whose decimal mark changed is refused although another column can be judged; an empty one is told."""
    rules = here.write("in.yaml", RULES.replace("[cm]", "[cm, flow]"))
    rows = water(DAY, 1, seed=2)
    past = water(DAY - pd.Timedelta(days=40), 40, seed=1)
    history = here.frame("past.csv", past.assign(flow=past.cm / 2))
    garbled = here.frame("in.csv", rows.assign(flow=(rows.cm / 2).astype(str).str.replace(".", ",")))
    assert "holds a number in flow" in one_sentence(here.gate(garbled, "--no-keep", rules=rules, history=history))
    ended = here.gate(here.frame("in.csv", rows.assign(flow="")), "--no-keep", rules=rules, history=history)
    assert "note: no row has a value in flow" in ended.err


@pytest.mark.parametrize(
    ("as_of", "said"),
    [
        ("yesterday", "'yesterday' is no time"),
        ("", "is no time"),
        ("0001-01-01T00:00:00+05:00", "is no time"),
        ("0001-01-01T00:00:00Z", "the year 1;"),
        ("9999-12-31T23:59:59Z", "the year 9999;"),
    ],
)
def test_a_clock_that_cannot_be_is_trouble(here: Place, as_of: str, said: str) -> None:
    """Times that are none or that 64 bits cannot hold are refused."""
    line = one_sentence(here.gate("batch.csv", "--as-of", as_of))
    assert line.startswith("sercheck: --as-of: ")
    assert said in line


def test_a_clock_set_back_changes_only_ages(here: Place) -> None:
    """Judged by a clock before the batch, ages are negative and everything else is as it was."""
    ended = here.gate("batch.csv", "--as-of", "2026-03-09T00:00:00Z", "--records", "r.csv")
    assert ended.status == 0
    back = pd.read_csv(here.folder / "r.csv")
    assert (back.loc[back.rule == "fresh", "observed"] == -47 * 3600).all()
    assert here.gate("batch.csv", "--no-keep", "--records", "now.csv").status == 0
    now = pd.read_csv(here.folder / "now.csv")
    same = back.rule != "fresh"
    pd.testing.assert_frame_equal(back[same].drop(columns="judged_at"), now[same].drop(columns="judged_at"))
