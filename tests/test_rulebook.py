"""Rule files that are right: what they compile to."""

from __future__ import annotations

from datetime import date
from pathlib import Path

import pytest

from sercheck.measure import Stays
from sercheck.rulebook import lengths, load_rules
from sercheck.rulebook.compiled import FalseHolds, Transform

RULES = sorted((Path(__file__).parent.parent / "rules").glob("*.yaml"))
WHOLE = """feed: substation_heat
about: Heat delivered by each substation.
columns: {time: read_at, series: [region, substation], values: [kwh, flow]}
every: 1h
timezone: Europe/Oslo
season_clock: UTC
closed_days: [2026-12-25, 2026-05-17, 2026-12-25]
seasons: {day: 1D, week: 7D, shift: 8}
window: 14D
batch_every: 1D
false_holds: 2 per 90D
otherwise: hold
when_undecided: hold
tell: [heat-desk, night-desk]
history: [past/*.csv, /data/old.parquet, s3://bucket/heat]
baseline: {from: 2026-01-01, refresh: 7D}
limits: {memory: 2GB, time: 10min}
rules:
  - name: level as usual
    measure: level
    of: kwh
    only: [a*, b?]
    after: [log, {difference: day}, {without_season: week}, {every: 1D, take: sum}]
    of_the: mean
    across: [together, batch]
    stays: {between: [1, 2.5]}
    weight: 2
    matters: 0.5
    otherwise: note
    when_undecided: release
    tell: level-desk
    runbook: https://example.org/level
    window: 48
    about: Why.
  - name: spread
    measure: spread
    stays: {like: history}
"""


def test_every_key_reaches_the_compiled_rules():
    """All keys of a file are read, and the file's defaults fill the rules."""
    book = load_rules(WHOLE)
    assert (book.feed, book.time, book.series, book.values) == (
        "substation_heat", "read_at", ("region", "substation"), ("kwh", "flow"),
    )  # fmt: skip
    assert (book.every, book.timezone, book.season_clock) == ("1h", "Europe/Oslo", "UTC")
    assert book.closed_days == (date(2026, 5, 17), date(2026, 12, 25))
    assert book.seasons == {"day": "1D", "week": "7D", "shift": 8}
    assert (book.batch_every, book.false_holds) == ("1D", FalseHolds(2.0, "90D"))
    assert book.history == ("past/*.csv", "/data/old.parquet", "s3://bucket/heat")
    assert book.baseline == {"from": "2026-01-01", "refresh": "7D"}
    assert book.limits == {"memory": 2e9, "time": 600.0}
    level, spread = book.rules
    assert level.stays == Stays("between", 1.0, 2.5)
    assert level.fields.model_dump() == {"of_the": "mean"}
    assert (level.columns, level.only, level.window) == (("kwh",), ("a*", "b?"), 48)
    assert level.after == (
        Transform("log"),
        Transform("difference", "day"),
        Transform("without_season", "week"),
        Transform("every", "1D", "sum"),
    )
    assert (level.across, level.matters) == (("together", "batch"), 0.5)
    assert (level.otherwise, level.when_undecided, level.tell) == ("note", "release", ("level-desk",))
    assert (level.runbook, level.about, level.line) == ("https://example.org/level", "Why.", 19)
    assert (spread.columns, spread.after, spread.window) == (("kwh", "flow"), (), "14D")
    assert (spread.otherwise, spread.when_undecided, spread.tell) == ("hold", "hold", ("heat-desk", "night-desk"))
    assert spread.stays == Stays("like_history")


@pytest.mark.parametrize(
    ("given", "stays"),
    [
        ("{below: 1}", Stays("below", high=1.0)),
        ("{above: -1e-3}", Stays("above", low=-0.001)),
        ("{between: [-1, 1]}", Stays("between", -1.0, 1.0)),
        ("{like: history}", Stays("like_history")),
    ],
)
def test_every_kind_of_bound_compiles(given, stays):
    """A bound below is the high one, a bound above the low one."""
    book = load_rules(WHOLE.replace("stays: {between: [1, 2.5]}", f"stays: {given}"))
    assert book.rules[0].stays == stays


@pytest.mark.parametrize(
    ("given", "transforms"),
    [
        ("difference", (Transform("difference"),)),
        ("{difference: 24}", (Transform("difference", 24),)),
        ("[detrended, ranks]", (Transform("detrended"), Transform("ranks"))),
        ("{every: 6, take: max}", (Transform("every", 6, "max"),)),
    ],
)
def test_after_takes_a_word_a_mapping_or_a_list(given, transforms):
    """One transform needs no list."""
    after = "[log, {difference: day}, {without_season: week}, {every: 1D, take: sum}]"
    assert load_rules(WHOLE.replace(after, given)).rules[0].after == transforms


def test_a_source_and_a_query_become_a_database_address():
    """The address tells the source's name only; what it stands for lives in the environment."""
    history = "[past/*.csv, /data/old.parquet, s3://bucket/heat]"
    book = load_rules(WHOLE.replace(history, "{source: HEAT, query: 'select * from heat where x = 1'}"))
    assert book.history == ("db:HEAT?query=select%20%2A%20from%20heat%20where%20x%20%3D%201",)
    assert load_rules(WHOLE.replace(history, "{source: HEAT, table: heat}")).history == ("db:HEAT?table=heat",)


def test_files_are_named_from_the_rule_file(tmp_path):
    """Closed days and history are looked for beside the rule file; the folder does not change the fingerprint."""
    text = WHOLE.replace("[2026-12-25, 2026-05-17, 2026-12-25]", "closed.txt")
    books = []
    for folder in ("one", "two"):
        (tmp_path / folder).mkdir()
        (tmp_path / folder / "closed.txt").write_text("# feast days\n2026-12-25  # Christmas\n\n2026-05-17\n")
        (tmp_path / folder / "rules.yaml").write_text(text)
        books.append(load_rules(tmp_path / folder / "rules.yaml"))
    assert books[0].closed_days == (date(2026, 5, 17), date(2026, 12, 25))
    assert books[0].history[0] == str(tmp_path / "one" / "past/*.csv")
    assert books[0].fingerprint == books[1].fingerprint == load_rules(WHOLE).fingerprint


def test_the_fingerprint_follows_the_content_only():
    """Comments, quotes and order of keys leave it; a number, a name or a new rule change it."""
    first = load_rules(WHOLE).fingerprint
    moved = WHOLE.replace("every: 1h\ntimezone: Europe/Oslo\n", "timezone: 'Europe/Oslo' # here\nevery: 1h\n")
    assert moved != WHOLE
    assert load_rules("# a comment\n" + moved).fingerprint == first
    for old, new in (("2.5]", "2.6]"), ("name: spread", "name: width"), ("of_the: mean", "of_the: location")):
        assert load_rules(WHOLE.replace(old, new)).fingerprint != first


@pytest.mark.parametrize("path", RULES, ids=lambda path: path.stem)
def test_the_rule_files_of_the_project_load(path):
    """Each compiles, and each of its rules says what a failure means."""
    book = load_rules(path)
    assert book.about
    assert all(rule.about for rule in book.rules)


def test_a_feed_of_stamps_only_needs_no_values():
    """Without value columns a feed can still be judged by the clock."""
    text = "feed: doors\ncolumns: {time: at}\nevery: irregular\nrules:\n"
    book = load_rules(text + "  - {name: fresh, measure: freshness, stays: {below: 6h}}\n")
    assert book.rules[0].columns == ()
    assert book.rules[0].stays == Stays("below", high=6 * 3600.0)


@pytest.mark.parametrize(
    ("text", "seconds"),
    [("14D", 1209600), ("6h", 21600), ("90min", 5400), ("250ms", 0.25), ("2W", 1209600), ("5B", 7 * 86400.0)],
)
def test_lengths_in_time_are_read_in_seconds(text, seconds):
    """A length is a whole number and a unit."""
    assert lengths.seconds(text) == pytest.approx(seconds, rel=1e-12)


@pytest.mark.parametrize("text", ["", "D", "0D", "-1D", "1.5h", "1h30min", "1 h", "1d", "1m", "1D\n", "9999999999D"])
def test_other_lengths_are_refused(text):
    """No guess is made at what a length could mean."""
    with pytest.raises(ValueError, match="a length in time"):
        lengths.seconds(text)


@pytest.mark.parametrize("text", ["1h", "15min", "D", "B", "MS", "W", "W-MON", "QS-FEB", "YE", "irregular", "2B"])
def test_cadences_are_those_of_pandas(text):
    """Every cadence except 'irregular' is an offset that pandas knows."""
    from pandas.tseries.frequencies import to_offset

    assert lengths.cadence(text) == text
    if text != "irregular":
        assert to_offset(text).n >= 1
