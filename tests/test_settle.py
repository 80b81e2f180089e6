"""A person overrules: released, discarded, a new regime; what it does to the history of the next batches."""

from __future__ import annotations

import json
import signal
import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from feed_memory import CADENCE, FIRST, HOUR, RULES, dying, environment, read, wave
from gate_runs import process

from sercheck.archived import keep
from sercheck.engine import measure_block
from sercheck.errors import SercheckError, UsageError
from sercheck.history import Memory
from sercheck.intake.stream import open_feed
from sercheck.rulebook import load_rules
from sercheck.settle import settle
from sercheck.store.archive import Archive
from sercheck.store.ledger import open_ledger
from sercheck.verdict import Verdict, gate, layout_of

DAYS = 70
DAY = pd.Timestamp("2026-01-01") + pd.Timedelta(days=DAYS)


class Feed:
    """A feed with seventy released days in its store."""

    def __init__(self, folder: Path) -> None:
        self.folder, self.store = folder, folder / "store"
        (folder / "rules.yaml").write_text(RULES)
        self.book = load_rules(folder / "rules.yaml")
        self.archive = Archive(self.store / "archive", "tide")
        source = open_feed(wave("2026-01-01", DAYS, seed=1), layout_of(self.book))
        reach = (FIRST - 9_000 * HOUR, FIRST + 9_000 * HOUR)
        keep(self.archive, "before", source.fingerprint, source.blocks(), CADENCE, "released", reach)

    def gate(self, frame: pd.DataFrame, **more: object) -> Verdict:
        """Judge with the store."""
        return gate(self.book, frame, store=self.store, as_of="2026-12-01", **more)  # type: ignore[arg-type]

    def settle(self, verdict: Verdict, what: str | None = None, **more: str) -> None:
        """Ana says so."""
        settle(
            verdict.batch_id, release_as=what, store=self.store,
            **{"by": "Ana", "because": "she looked", **more},  # type: ignore[arg-type]
        )  # fmt: skip


@pytest.fixture
def feed(tmp_path: Path) -> Feed:
    """The feed."""
    return Feed(tmp_path)


def flat(day: int = 0, value: float = 200.0) -> pd.DataFrame:
    """A day that does not move."""
    frame = wave(str((DAY + pd.Timedelta(days=day)).date()), 1, seed=100 + day)
    frame["x"] = value
    return frame


def healthy(day: int) -> pd.DataFrame:
    """A day as ever."""
    return wave(str((DAY + pd.Timedelta(days=day)).date()), 1, seed=100 + day)


def rows(feed: Feed) -> int:
    """Rows of history in the archive."""
    return len(read(feed.archive))


BEFORE = DAYS * 48


def test_a_held_batch_waits_and_is_no_history(feed):
    """Its rows are kept apart from what the next batch is judged against."""
    assert not feed.gate(flat()).released
    assert rows(feed) == BEFORE
    assert feed.gate(healthy(1)).released
    assert rows(feed) == BEFORE + 48


def test_released_by_a_person_its_rows_become_history(feed):
    """And the batch judged again says who released it; its records stay as they were."""
    held = feed.gate(flat())
    feed.settle(held, "released")
    assert rows(feed) == BEFORE + 48
    again = feed.gate(flat())
    assert again.released
    assert again.counts == held.counts
    assert any("held by its rules; released by Ana" in note and "she looked" in note for note in again.notes)


def test_discarded_it_never_teaches(feed):
    """Not even when it is judged again, or by other rules that would let it in."""
    held = feed.gate(flat())
    feed.settle(held, "discarded")
    lenient = load_rules(_write(feed.folder / "lenient.yaml", RULES + "otherwise: note\n"))
    again = gate(lenient, flat(), store=feed.store, as_of="2026-12-01")
    assert not again.released
    assert rows(feed) == BEFORE


def _write(path: Path, text: str) -> Path:
    path.write_text(text)
    return path


def test_what_is_said_last_stands_and_all_stays(feed):
    """Released, discarded, released: the ledger has all three."""
    held = feed.gate(flat())
    for what in ("released", "discarded", "released"):
        feed.settle(held, what)
    assert rows(feed) == BEFORE + 48
    with open_ledger(str(feed.store)) as ledger:
        said = ledger.batch(held.batch_id).settlements
    assert [each.what for each in said] == ["released", "discarded", "released"]
    assert {each.settled_by for each in said} == {"Ana"}
    assert len({each.settled_at for each in said}) == 3


def test_its_steps_are_marked_for_what_must_not_learn_from_them(feed, monkeypatch):
    """Level and profile learn from a day let in by a person, looks and the histories of other statistics do not."""
    held = feed.gate(flat(0))
    feed.settle(held, "released")
    grids = []

    def looked(grid, run):
        grids.append(grid)
        return measure_block(grid, run)

    monkeypatch.setattr("sercheck.blocks.measure_block", looked)
    feed.gate(healthy(1))
    (grid,) = grids
    marked = np.flatnonzero(grid.axis.held)
    assert marked.tolist() == list(range(DAYS * 24, DAYS * 24 + 24))
    assert grid.delivered[:, marked].all()
    assert grid.start == DAYS * 24 + 24


def test_a_day_let_in_leaves_the_memory_of_steps_alone(feed, tmp_path, monkeypatch):
    """The autocorrelation of the next day is judged as if the odd day had not been, its level is not."""
    monkeypatch.setattr(Memory, "held_by", lambda *_: frozenset())  # what rests after a hold is another matter
    odd = healthy(0)
    odd["x"] = np.random.default_rng(5).permutation(odd["x"].to_numpy()) + 25
    held = feed.gate(odd)
    assert not held.released
    feed.settle(held, "released")
    after = feed.gate(healthy(1)).table
    unmarked = tmp_path / "unmarked"
    unmarked.mkdir()
    other = Feed(unmarked)
    source = open_feed(odd, layout_of(other.book))
    reach = (FIRST - 9_000 * HOUR, FIRST + 9_000 * HOUR)
    keep(other.archive, "odd", source.fingerprint, source.blocks(), CADENCE, "released", reach)
    plain = other.gate(healthy(1)).table
    missing = tmp_path / "missing"
    missing.mkdir()
    without = Feed(missing).gate(healthy(1)).table

    def limits(table, rule):
        return [row["limit"] for row in table.rows() if row["rule"] == rule]

    assert limits(after, "steps as ever") == pytest.approx(limits(without, "steps as ever"), rel=0.03)
    assert limits(plain, "steps as ever") != pytest.approx(limits(without, "steps as ever"), rel=0.03)
    assert limits(after, "level as usual") == limits(plain, "level as usual")


def test_a_rule_that_held_rests_its_longer_look_for_seven_batches(feed, monkeypatch):
    """The days of a hold are not held against the next ones again: for a week each is looked at by itself."""
    odd = healthy(0)
    odd["x"] = np.random.default_rng(5).permutation(odd["x"].to_numpy()) + 25
    feed.settle(feed.gate(odd), "released")
    asked = []

    def looked(grid, run):
        asked.append(run.rests)
        return measure_block(grid, run)

    monkeypatch.setattr("sercheck.blocks.measure_block", looked)
    for day in range(1, 9):
        feed.gate(healthy(day))
    assert "steps as ever" in asked[0]
    assert all("steps as ever" in rests for rests in asked[:7])
    assert "steps as ever" not in asked[7]


def test_a_new_regime_forgets_what_was_before(feed):
    """History before the day no longer teaches; the baseline is another one; the note says so."""
    first = feed.gate(healthy(0))
    feed.settle(first, relearn_from="2026-03-01", because="new gauges")
    verdict = feed.gate(healthy(1))
    assert verdict.counts["undecided"] > first.counts["undecided"]
    assert any("history before 2026-03-01T00:00:00Z no longer teaches" in note for note in verdict.notes)
    assert verdict.table["baseline_id"][0] != first.table["baseline_id"][0]
    given = feed.gate(healthy(2), history=wave("2026-01-01", DAYS, seed=1))
    assert given.counts["undecided"] > first.counts["undecided"]


def test_the_day_of_a_new_regime_is_local(tmp_path):
    """Midnight in Oslo is an hour before that in UTC."""
    (tmp_path / "rules.yaml").write_text(RULES + "timezone: Europe/Oslo\n")
    verdict = gate(tmp_path / "rules.yaml", healthy(0), store=tmp_path / "store", as_of="2026-12-01")
    settle(verdict.batch_id, by="Ana", because="x", relearn_from="2026-02-01", store=tmp_path / "store")
    with open_ledger(str(tmp_path / "store")) as ledger:
        assert ledger.relearn_from("tide") == "2026-01-31T23:00:00Z"


def test_a_feed_held_for_long_is_not_locked_out(feed):
    """With less than half of its history left the old baseline is kept, and the note says so; with all of it thrown
    away nothing could be decided.
    """
    first = feed.gate(healthy(0))
    for day in range(1, 90):
        source = open_feed(flat(day), layout_of(feed.book))
        reach = (FIRST - 9_000 * HOUR, FIRST + 9_000 * HOUR)
        keep(feed.archive, f"held {day}", source.fingerprint, source.blocks(), CADENCE, "held", reach)
    verdict = feed.gate(healthy(90))
    assert any("less than half of the rows" in note and "is kept" in note for note in verdict.notes)
    assert verdict.table["baseline_id"][0] == first.table["baseline_id"][0]
    told = {row["rule"] for row in verdict.table.rows() if row["outcome"] != "undecided"}
    assert {"level as usual", "never flat"} <= told  # the steps lack the row before the batch
    wrong = feed.gate(flat(91))
    assert not wrong.released


SENTENCES = {
    "unknown batch": ({"batch_id": "nothing-of-the-kind"}, "not in the ledger"),
    "nothing asked": ({"release_as": None}, "nothing is asked for"),
    "nobody": ({"by": " "}, "--by: it is empty"),
    "no reason": ({"because": ""}, "--because: it is empty"),
    "no date": ({"relearn_from": "yesterday"}, "'yesterday' is no date"),
}


@pytest.mark.parametrize("case", SENTENCES)
def test_what_cannot_be_settled_is_said_in_one_sentence(feed, case):
    """And nothing is written."""
    held = feed.gate(flat())
    changed, said = SENTENCES[case]
    asked = {"batch_id": held.batch_id, "by": "Ana", "because": "x", "release_as": "released", **changed}
    with pytest.raises(UsageError, match=said):
        settle(store=feed.store, **asked)
    with open_ledger(str(feed.store)) as ledger:
        assert ledger.batch(held.batch_id).settlements == ()
    assert rows(feed) == BEFORE


def test_what_was_released_cannot_be_released(feed):
    """By its rules, or by a person before."""
    released, held = feed.gate(healthy(0)), feed.gate(flat(1))
    with pytest.raises(UsageError, match="it was released by its rules"):
        feed.settle(released, "released")
    feed.settle(held, "released")
    with pytest.raises(UsageError, match="settled already: released by Ana"):
        feed.settle(held, "released")


def test_a_batch_that_its_rules_released_is_taken_back(feed):
    """It teaches no longer, also when it is judged again; said twice it is kept once; it can be let in again."""
    released = feed.gate(healthy(0))
    assert rows(feed) == BEFORE + 48
    for _ in range(2):
        feed.settle(released, "discarded")
        assert rows(feed) == BEFORE
    again = feed.gate(healthy(0))
    assert not again.released
    assert rows(feed) == BEFORE
    assert any("released by its rules; discarded by Ana" in note for note in again.notes)
    with open_ledger(str(feed.store)) as ledger:
        assert [each.what for each in ledger.batch(released.batch_id).settlements] == ["discarded"]
    shown = process("ledger", "show", released.batch_id, "--store", str(feed.store)).stdout
    assert "released, judged at" in shown
    assert "discarded by Ana" in shown
    assert "released, then discarded" in process("ledger", "batches", "--store", str(feed.store)).stdout
    feed.settle(released, "released")
    assert rows(feed) == BEFORE + 48


def test_the_command_and_the_ledger_tell_it(feed, monkeypatch):
    """Status 0 and 2; `ledger batches` and `ledger show` name who said what; gate ends with 0 then."""
    monkeypatch.chdir(feed.folder)
    flat().to_csv("flat.csv", index=False)
    command = ("--store", "store")
    assert process("gate", "rules.yaml", "flat.csv", "--as-of", "2026-12-01", *command).returncode == 1
    batch = json.loads(process("ledger", "batches", "--format", "json", *command).stdout)["batch_fingerprint"][:12]
    settled = process("settle", batch, "--as", "released", "--by", "Ana", "--because", "calm sea", *command)
    assert (settled.returncode, settled.stdout) == (0, "")
    assert "released by Ana" in settled.stderr
    twice = process("settle", batch, "--as", "released", "--by", "Bo", "--because", "me too", *command)
    assert (twice.returncode, twice.stderr.count("\n")) == (2, 1)
    assert process("gate", "rules.yaml", "flat.csv", "--as-of", "2026-12-01", *command).returncode == 0
    assert "held, then released" in process("ledger", "batches", *command).stdout
    assert "because calm sea" in process("ledger", "show", batch, *command).stdout
    told = json.loads(process("ledger", "show", batch, "--format", "json", *command).stdout)["settlements"]
    assert [(each["what"], each["settled_by"]) for each in told] == [("released", "Ana")]
    assert "calm sea" in process("ledger", "batches", "--format", "csv", *command).stdout
    nobody = process("settle", batch, "--as", "released", *command)
    assert nobody.returncode == 2


DIES = """
import os, signal, sys
from sercheck.store.archive import Archive
Archive.mark = lambda *_: os.kill(os.getpid(), signal.SIGKILL)
from sercheck.settle import settle
settle(sys.argv[1], by="Ana", because="x", release_as="released", store="store")
"""


@pytest.mark.parametrize("healer", ["settle", "gate"])
def test_killed_between_ledger_and_archive_it_is_healed(feed, healer):
    """The ledger was told, the archive was not: the same call again, or the next gate of the batch, mends it."""
    held = feed.gate(flat())
    assert dying(DIES, feed.folder, held.batch_id).returncode == -signal.SIGKILL
    assert rows(feed) == BEFORE
    if healer == "settle":
        feed.settle(held, "released")
    else:
        assert feed.gate(flat()).released
    assert rows(feed) == BEFORE + 48
    with open_ledger(str(feed.store)) as ledger:
        assert len(ledger.batch(held.batch_id).settlements) == 1


def test_two_people_at_once_are_both_heard(feed):
    """One releases, one discards, at the same time: the ledger has both, and what it has last stands."""
    held = feed.gate(flat())
    script = (
        "import sys; from sercheck.settle import settle; "
        "settle(sys.argv[1], by=sys.argv[2], because='x', release_as=sys.argv[2], store='store')"
    )
    people = [
        subprocess.Popen([sys.executable, "-c", script, held.batch_id, what], cwd=feed.folder, env=environment())
        for what in ("released", "discarded")
    ]
    assert [person.wait(timeout=60) for person in people] == [0, 0]
    with open_ledger(str(feed.store)) as ledger:
        said = ledger.batch(held.batch_id).settlements
    assert {each.settled_by for each in said} == {"released", "discarded"}
    standing = said[-1].what
    assert feed.gate(flat()).released == (standing == "released")
    assert rows(feed) == BEFORE + (48 if standing == "released" else 0)


def test_a_store_that_cannot_be_used_is_one_sentence(tmp_path):
    """Nothing is there: nothing is made."""
    with pytest.raises(SercheckError, match="not in the ledger"):
        settle("tide-2026", by="Ana", because="x", release_as="released", store=tmp_path / "none")
    assert not (tmp_path / "none").exists()
