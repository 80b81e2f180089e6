"""Episodes, messages and their filters on the command line."""

from __future__ import annotations

import csv
import io
import json
from datetime import UTC, datetime

import click
import pytest
from click.testing import CliRunner
from record_samples import batch, judgement, records

from sercheck.cli.ledger import command
from sercheck.cli.moments import moment
from sercheck.errors import UsageError
from sercheck.store.episodes import episodes
from sercheck.store.ledger import open_ledger

HOSTILE = "a\nb\x1b[31m\u202e<script>" + "x" * 300


@pytest.fixture
def store(tmp_path):
    """A feed with a closed and an open episode, another one with a name that means harm."""
    with open_ledger(str(tmp_path)) as ledger:
        for feed, rule, words in (("heat", "memory", "fpff"), ("water", HOSTILE, "f")):
            for day, word in enumerate(words, 1):
                name = f"{feed}-{day:02d}"
                outcome = {"f": "fail", "p": "pass"}[word]
                rows = records(3, name, feed=feed, rule=rule, outcome=outcome, action="hold" if word == "f" else None)
                said = judgement(name, decision="held" if word == "f" else "released")
                day_of = f"2026-01-{day:02d}"
                come = batch(name, feed=feed, last_stamp=f"{day_of}T23:00:00Z", first_stamp=day_of)
                ledger.add(come, said, rows, tell={rule: ["heat-desk"]})
    return str(tmp_path)


def ask(*words: str):
    """Run the command; its errors pass through."""
    return CliRunner().invoke(command, words, catch_exceptions=False)


def test_episodes_are_listed_the_open_ones_first(store):
    """A line each: state, feed, rule, since when, how many batches and series."""
    lines = ask("episodes", "--store", store, "--feed", "heat").output.splitlines()
    assert lines[0].split()[:4] == ["state", "feed", "rule", "since"]
    assert [line.split()[:3] for line in lines[1:]] == [["open", "heat", "memory"], ["closed", "heat", "memory"]]
    assert lines[1].split()[6:8] == ["2", "3"]


def test_json_and_csv_of_episodes_say_the_same(store):
    """Every field of an episode, once a line."""
    facts = [json.loads(line) for line in ask("episodes", "--store", store, "--format", "json").stdout.splitlines()]
    rows = list(csv.DictReader(io.StringIO(ask("episodes", "--store", store, "--format", "csv").stdout)))
    assert len(facts) == 3
    assert [list(row) for row in rows] == [list(fact) for fact in facts]
    assert [row["rule"] for row in rows] == [fact["rule"] for fact in facts]
    assert {fact["rule"] for fact in facts} == {"memory", HOSTILE}


@pytest.mark.parametrize(
    ("words", "number"),
    [
        (("--state", "open"), 2),
        (("--rule", "mem*"), 2),
        (("--since", "2026-01-03"), 2),
        (("--until", "2026-01-02"), 2),
        (("--series", "s2", "--feed", "w*"), 1),
        (("--series", "s7"), 0),
        (("--limit", "1"), 1),
    ],
)
def test_episodes_are_filtered(store, words, number):
    """Each filter alone, for a program."""
    answer = ask("episodes", "--store", store, "--format", "json", *words)
    assert len(answer.stdout.splitlines()) == number
    assert ("No episodes in" in answer.stderr) == (number == 0)


def test_show_tells_all_about_an_episode(store):
    """By the beginning of its id, with its batches."""
    with open_ledger(store) as ledger:
        now = episodes(ledger)[0]
    page = ask("show", now.episode_id[:8], "--store", store).output
    assert "state              open" in page
    assert "heat-03" in page
    assert "heat-04" in page
    assert json.loads(ask("show", now.episode_id, "--store", store, "--format", "json").stdout)["batches"] == 2
    with pytest.raises(UsageError, match="not in"):
        ask("show", "0000ffff0000", "--store", store)


def test_a_batch_names_its_episodes_and_who_was_told(store):
    """On its page and as plain data."""
    page = ask("show", "heat-03", "--store", store).output
    assert "open: memory, since 2026-01-03, 2 batches" in page
    assert "heat-desk not told yet (waiting, attempts: 0)" in page
    facts = json.loads(ask("show", "heat-03", "--store", store, "--format", "json").stdout)
    assert facts["episodes"][0]["rule"] == "memory"
    assert facts["messages"][0]["changes"][0]["change"] == "opened"


def test_hostile_names_stay_on_their_line(store):
    """A rule's name with line breaks and control characters is one cell of the table and one fact of a page."""
    answer = ask("episodes", "--store", store, "--feed", "water").output
    assert len(answer.splitlines()) == 2
    assert not set("\x1b\u202e") & set(answer)
    page = ask("show", "water-01", "--store", store).output
    assert not set("\x1b\u202e") & set(page)


def test_a_stretch_may_be_a_length_back_from_now():
    """7D is a week ago; a date as an end is its last second; anything else is refused."""
    now = datetime(2026, 1, 15, 6, tzinfo=UTC)
    assert moment("7D", end=False, now=now) == "2026-01-08T06:00:00"
    assert moment("90min", end=True, now=now) == "2026-01-15T04:30:00Z"
    assert moment("2026-01-12", end=True) == "2026-01-12T23:59:59Z"
    assert moment(None, end=True) is None
    for wrong in ("7", "week", "999999999W", ""):
        with pytest.raises(click.BadParameter, match="7D"):
            moment(wrong, end=False)
