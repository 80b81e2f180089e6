"""Mistakes in rule files: each is told with its place, what is allowed and the nearest known word, all at once."""

from __future__ import annotations

import re
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import BaseModel, ConfigDict, model_validator

from sercheck.errors import RuleFileError
from sercheck.measures import get
from sercheck.rulebook import load_rules

BAD = sorted((Path(__file__).parent / "bad_rules").glob("*.yaml"))
GOOD = Path(__file__).parent.parent / "rules"
SMALL = """feed: heat
columns: {time: at, values: [kwh]}
every: 1h
rules:
  - name: level as usual
    measure: level
    stays: {like: history}
"""


def mistakes(source: str | Path) -> list[str]:
    """The sentences of all mistakes."""
    with pytest.raises(RuleFileError) as caught:
        load_rules(source)
    return [mistake.sentence() for mistake in caught.value.mistakes]


@pytest.mark.parametrize("path", BAD, ids=lambda path: path.stem)
def test_every_mistake_of_a_bad_file_is_told_where_it_stands(path):
    """The file's own header says where its mistakes are; exactly those are found, in order."""
    expected = re.findall(r"^# at (\d+:\d+): (.*)$", path.read_text(), flags=re.MULTILINE)
    said = mistakes(path)
    assert len(said) == len(expected)
    for sentence, (place, words) in zip(said, expected, strict=True):
        assert sentence.startswith(f"{path}:{place}: ")
        assert words in sentence


def test_there_are_many_kinds_of_mistakes():
    """The collection of broken files does not shrink unseen."""
    assert len(BAD) >= 60


TEXTS = {
    "not YAML": ("feed: [a\nrules: 3\n", "text:2:6", "not YAML"),
    "a tab": ("feed:\n\theat\n", "text:2:1", "not YAML"),
    "a list": ("- 1\n- 2\n", "text:1:1", "a mapping with the keys"),
    "nothing": ("# nothing here\n\n", "text:1:1", "an empty file"),
    "a tag that builds an object": ("feed: !!python/object/apply:os.getcwd []\n", "text:1:7", "the tag"),
    "a harmless tag": ("feed: !!str heat\n", "text:1:7", "the tag"),
    "an anchor": ("feed: &a heat\nabout: *a\n", "text:1:7", "the anchor &a"),
    "an alias": ("feed: *a\n", "text:1:7", "the alias *a"),
    "a second document": ("feed: heat\n---\nfeed: heat\n", "text:2:1", "a second document"),
    "deep nesting": ("feed: " + "[" * 50 + "\n", "text:1:18", "nesting deeper"),
    "deep mappings": ("feed: " + "{a: " * 5000 + "\n", "text:1:48", "nesting deeper"),
    "bottomless lists": ("feed: " + "[" * 100_000 + "\n", "text:1:", "nesting"),
    "a list as a key": ("? [a, b]\n: 1\n", "text:1:3", "as a key"),
    "a control character": ("feed: heat\nabout: a\x07b\n", "text:2:9", "does not allow"),
    "a huge text": ("feed: " + "x" * 1_000_001 + "\n", "text:1:1", "1,000,008 characters"),
    "a number without end": ("feed: heat\nfalse_alarm: 1e999\n", "text:2:14", "the number 1e999"),
}


@pytest.mark.parametrize("name", TEXTS)
def test_what_is_no_rule_file_is_refused_with_its_place(name):
    """Broken YAML, tags, aliases and bombs end in a sentence that says where."""
    text, place, words = TEXTS[name]
    found = [sentence for sentence in mistakes(text) if sentence.startswith(place.replace("text", "rules"))]
    assert any(words in sentence for sentence in found)


def test_a_bomb_of_aliases_is_refused_in_one_sentence():
    """A billion laughs ends at its first anchor."""
    bomb = "a: &a [x, x]\n" + "".join(f"{b}: &{b} [*{a}, *{a}]\n" for a, b in zip("abcdefgh", "bcdefghi", strict=True))
    assert len(mistakes(bomb)) == 1


def test_words_of_yaml_are_read_as_people_mean_them():
    """Text such as no and 12:30 stays text, and 1e-3 is a number."""
    book = load_rules(SMALL.replace("level as usual", "no") + "    false_alarm: 1e-3\n    runbook: 12:30\n")
    assert (book.rules[0].name, book.rules[0].false_alarm, book.rules[0].runbook) == ("no", 0.001, "12:30")


def test_files_that_cannot_be_read_are_named(tmp_path):
    """A missing file, a folder and a file that is no text give a rule file error."""
    binary = tmp_path / "binary.yaml"
    binary.write_bytes(b"feed: heat\nabout: \xff\xfe\n")
    assert mistakes(tmp_path / "none.yaml")[0].startswith(f"{tmp_path / 'none.yaml'}: the rule file cannot be read")
    assert "cannot be read" in mistakes(tmp_path)[0]
    assert mistakes(binary)[0].startswith(f"{binary}:2:8: bytes that are no UTF-8")


def test_a_wrong_date_in_the_calendar_is_told_in_its_own_file(tmp_path):
    """The place of a bad closed day is the line of the file of closed days."""
    (tmp_path / "closed.txt").write_text("# feast days\n2026-12-25\n2026-12-32\nsoon\n")
    (tmp_path / "rules.yaml").write_text(SMALL + "closed_days: closed.txt\n")
    said = mistakes(tmp_path / "rules.yaml")
    assert [sentence.split(": ")[0] for sentence in said] == [f"{tmp_path / 'closed.txt'}:{line}:1" for line in (3, 4)]


@settings(max_examples=150, deadline=None)
@given(st.data())
def test_a_damaged_file_never_fails_otherwise(data):
    """Whatever a slip does to a rule file, it is read or refused with places, and nothing else happens."""
    text = data.draw(st.sampled_from([path.read_text() for path in sorted(GOOD.glob("*.yaml"))]))
    start = data.draw(st.integers(0, len(text)))
    end = data.draw(st.integers(start, min(start + 30, len(text))))
    damaged = text[:start] + data.draw(st.text(max_size=8)) + text[end:] + "\n"
    try:
        load_rules(damaged)
    except RuleFileError as error:
        assert all(re.match(r"rules:\d+:\d+$", mistake.place) for mistake in error.mistakes)  # noqa: PT017  both ends are right


class Needs(BaseModel):
    """Fields of a measure whose own check reads a key that a rule may have forgotten."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    low: float
    high: float

    @model_validator(mode="after")
    def _ordered(self) -> Needs:
        if self.low > self.high:
            raise ValueError("'low' below 'high'")
        return self


def test_a_check_that_reads_a_forgotten_key_is_left_out(monkeypatch):
    """Only the key that is missing is told; with both there what they say against each other is."""
    monkeypatch.setattr(type(get("level")), "Fields", Needs)
    (lacks,) = mistakes(SMALL + "    low: 3\n")
    assert "no 'high'" in lacks
    (odd,) = mistakes(SMALL + "    low: 3\n    high: 2\n")
    assert "low: 3 and high: 2; wanted 'low' below 'high'" in odd
