from __future__ import annotations

import csv
import io
import json

import pytest
from click.testing import CliRunner
from record_samples import batch, judgement, records

from sercheck.cli.ledger import command
from sercheck.cli.table import Head, number, table
from sercheck.errors import StoreError, UsageError
from sercheck.record import COLUMNS
from sercheck.store.ledger import open_ledger


@pytest.fixture
def store(tmp_path, monkeypatch):
    """A store with a held and a released batch."""
    for name in ("SERCHECK_STORE", "SERCHECK_LEDGER"):
        monkeypatch.delenv(name, raising=False)
    with open_ledger(str(tmp_path)) as ledger:
        ledger.add(batch(), judgement(), records(7))
        other = batch("heat-0113-beef", first_stamp="2026-01-13T00:00:00Z", last_stamp="2026-01-13T23:00:00Z")
        found = records(2, "heat-0113-beef", outcome="pass")
        ledger.add(other, judgement("heat-0113-beef", decision="released"), found)
    return str(tmp_path)


def ask(*words: str):
    """Run the command; its errors pass through."""
    return CliRunner().invoke(command, words, catch_exceptions=False)


def test_batches_are_listed_the_newest_first(store):
    """The table has a line for each batch with its decision and counts."""
    lines = ask("batches", "--store", store).output.splitlines()
    assert " ".join(lines[0].split()) == "batch feed newest row (UTC) decision pass fail undecided rows series"
    assert lines[1].split()[:5] == ["f-heat-0113-", "substation_heat", "2026-01-13", "23:00", "released"]
    assert lines[2].split()[4:] == ["held", "3", "3", "1", "144", "6"]
    assert len(lines) == 3


def test_batches_as_json_and_csv_say_the_same(store):
    """Machines get JSON lines or CSV with the whole ids and fingerprints."""
    facts = [json.loads(line) for line in ask("batches", "--store", store, "--format", "json").stdout.splitlines()]
    assert [each["decision"] for each in facts] == ["released", "held"]
    assert facts[1]["counts"] == {"pass": 3, "fail": 3, "undecided": 1}
    assert facts[1]["received"] == ["inbox/heat.csv"]
    rows = list(csv.DictReader(io.StringIO(ask("batches", "--store", store, "--format", "csv").stdout)))
    assert [row["batch_fingerprint"] for row in rows] == [each["batch_fingerprint"] for each in facts]
    assert (rows[1]["pass"], rows[1]["fail"], rows[1]["undecided"]) == ("3", "3", "1")


def test_records_as_json_and_csv_are_records(store):
    """Machines get exactly the records of the ledger."""
    lines = ask("records", "--store", store, "--format", "json", "--batch", "heat-0112").stdout.splitlines()
    assert [json.loads(line) for line in lines] == list(records(7).rows())
    rows = list(csv.DictReader(io.StringIO(ask("records", "--store", store, "--format", "csv").stdout)))
    assert len(rows) == 9
    assert tuple(rows[0]) == COLUMNS


def test_records_are_listed_by_filter(store):
    """Filters work together, and a limit says that there is more."""
    lines = ask("records", "--store", store, "--outcome", "fail", "--series", "s*").output.splitlines()
    assert [line.split()[0] for line in lines] == ["outcome", "fail", "fail", "fail"]
    both = ask("records", "--store", store).output.splitlines()
    assert [line.split()[-1] for line in both] == ["batch", *["f-heat-0113-"] * 2, *["f-heat-0112-"] * 7]
    limited = ask("records", "--store", store, "--limit", "2")
    assert len(limited.stdout.splitlines()) == 3
    assert limited.stderr == "There are more than these 2 records: --limit shows more.\n"


@pytest.mark.parametrize(
    "words, expected",
    [
        (("--since", "2026-01-13"), ["heat-0113-beef"]),
        (("--until", "2026-01-12"), ["heat-0112-abcd"]),
        (("--since", "2026-01-13T00:00:01+01:00", "--until", "2026-01-13T23:00:00"), ["heat-0113-beef"]),
        (("--since", "2026-01-12T23:00:00.5Z", "--until", "2026-01-12T23:00:00Z"), ["heat-0112-abcd"]),
        (("--since", "2026-01-13T00:00:00+02:00", "--until", "2026-01-12"), ["heat-0112-abcd"]),
    ],
)
def test_times_are_dates_or_moments_in_any_zone(store, words, expected):
    """A date means its whole day, a time without offset is UTC, fractions of a second do not matter."""
    lines = ask("batches", "--store", store, "--format", "json", *words).output.splitlines()
    assert [json.loads(line)["batch_id"] for line in lines] == expected


def test_nothing_is_told_in_a_sentence(store, tmp_path):
    """Where nothing matches or no ledger is, people get a sentence and machines an empty answer beside it."""
    assert ask("batches", "--store", store, "--feed", "no").stdout == (
        f"No batches in {store}/ledger.sqlite with --feed no.\n"
    )
    nothing = ask("records", "--store", str(tmp_path / "none"), "--format", "json")
    assert nothing.stdout == ""
    assert nothing.stderr == f"No records in {tmp_path}/none/ledger.sqlite.\n"
    assert nothing.exit_code == 0


def test_show_tells_all_about_a_batch(store):
    """A batch is shown with its judgement and what did not pass, as text, JSON and CSV."""
    text = ask("show", "heat-0112", "--store", store).output
    assert "held, judged at 2026-01-13T06:00:00Z" in text
    assert "3 pass, 3 fail, 1 undecided" in text
    assert [line.split()[0] for line in text.splitlines()[-4:]] == ["fail", "fail", "fail", "undecided"]
    facts = json.loads(ask("show", "heat-0112", "--store", store, "--format", "json").output)
    assert facts["records"] == list(records(7).rows())
    assert len(ask("show", "heat-0112", "--store", store, "--format", "csv").output.splitlines()) == 8


def test_show_tells_all_about_a_record(store):
    """A record is shown by the beginning of its id, without what is null."""
    whole = str(records(7)["record_id"][0])
    text = ask("show", whole[:10], "--store", store).output
    assert "reason             fail because of this" in text
    assert "season" not in text
    assert json.loads(ask("show", whole, "--store", store, "--format", "json").output) == next(records(7).rows())


@pytest.mark.parametrize("name, said", [("nothing", "not in"), ("heat", "several ids begin so"), ("h", "4 letters")])
def test_an_id_that_does_not_say_which_is_an_error(store, name, said):
    """An unknown, ambiguous or too short id is told."""
    with pytest.raises(UsageError, match=said):
        ask("show", name, "--store", store)


def test_a_page_does_not_repeat_a_thousand_failures(tmp_path):
    """A batch with many failures is shown on a screen, with the command that lists them all."""
    with open_ledger(str(tmp_path)) as ledger:
        ledger.add(batch(), judgement(), records(400, outcome="fail"))
    lines = ask("show", "heat-0112", "--store", str(tmp_path)).output.splitlines()
    assert len(lines) < 70
    assert lines[-1] == "and 350 more: sercheck ledger records --batch heat-0112-abcd --outcome fail"


@pytest.mark.parametrize("words", [("batches",), ("records",), ("show", "heat-0112-abcd")])
def test_hostile_names_stay_on_their_line_and_in_their_column(tmp_path, words):
    """Control characters do not reach the terminal and no line is wider than the screen, whatever the names are."""
    names = ["\x1b[31mred", "two\nlines", "漢字" * 90, "x" * 10_000, "\u202eleft", "a\tb", ""]
    found = records(7, feed=names[3], series=names, rule=names[2], outcome="fail", column="漢" * 60, observed=-1e-300)
    with open_ledger(str(tmp_path)) as ledger:
        ledger.add(batch(feed=names[3], received=("\udc80\x1b[2J.csv",)), judgement(), found)
    lines = ask(*words, "--store", str(tmp_path)).output.split("\n")
    assert all(line.isprintable() for line in lines)
    assert max(len(line) for line in lines) <= 100


def test_bad_words_are_refused(store):
    """A time that is none and an unknown outcome end with status 2."""
    for time in ("yesterday", "2026-13-01", "0001-01-01T00:00:00+05:00"):
        assert ask("batches", "--store", store, "--since", time).exit_code == 2
    assert ask("records", "--store", store, "--outcome", "bad").exit_code == 2
    assert ask("records", "--store", store, "--limit", "0").exit_code == 2


def test_trouble_passes_through(tmp_path):
    """A ledger that cannot be read is an error of the store."""
    (tmp_path / "ledger.sqlite").write_text("no database at all, but long enough to be looked at" * 50)
    with pytest.raises(StoreError):
        ask("batches", "--store", str(tmp_path))


def test_a_table_is_aligned_and_fits():
    """Numbers stand to the right, null is a dash, the widest text that may shrink does, wide letters count double."""
    heads = (Head("name", least=4), Head("lag", right=True), Head("p", right=True))
    lines = table(heads, [["漢字", 1, number(0.123456)], ["x" * 200, None, number(None)]]).splitlines()
    assert lines[0] == "name" + " " * 85 + "lag" + " " * 7 + "p"
    assert lines[1].startswith("漢字" + " " * 10)
    assert len(lines[2]) == 100
    assert lines[2].endswith("…    –       –")
    assert lines[1].endswith("    1  0.1235")


@pytest.mark.parametrize("words", [("batches",), ("records",), ("show",)])
def test_the_help_says_what_json_is(words):
    """One object a line: a program must not read it as one document."""
    assert "JSON lines" in ask(*words, "--help").output
