"""The archive: what was released comes back once, the newest release of each stamp, whoever dies and whoever races."""

from __future__ import annotations

import signal
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from feed_memory import (
    ALWAYS,
    CADENCE,
    FIRST,
    HOUR,
    LAYOUT,
    RULES,
    cells_of,
    dying,
    environment,
    put,
    read,
    rows_of,
    wave,
)
from hypothesis import given, settings
from hypothesis import strategies as st

import sercheck
from sercheck.archived import archived, keep, keep_history, tidied
from sercheck.errors import BatchError, SercheckError
from sercheck.intake.calendar import Cadence
from sercheck.intake.stream import MemorySource, feed_grids
from sercheck.rulebook import load_rules
from sercheck.store.archive import Archive, feed_folder
from sercheck.store.ledger import open_ledger
from sercheck.verdict import Verdict, gate


@pytest.fixture
def archive(tmp_path: Path) -> Archive:
    """An archive that is not there yet."""
    return Archive(tmp_path / "archive", "tide")


def test_what_was_kept_is_read_again(archive):
    """Series, stamps and values come back, sorted, whatever the order of delivery."""
    cells = [("b", 5, 1.5), ("a", 30, 2.5), ("b", 4, 3.5), ("a", 2, np.nan)]
    assert put(archive, "one", cells) == 4
    found = read(archive)
    assert found.keys() == {("b", 5), ("a", 30), ("b", 4), ("a", 2)}
    assert found["b", 5] == 1.5
    assert np.isnan(found["a", 2])


def test_no_archive_is_no_history_and_nothing_is_made(archive):
    """Looking makes no folder."""
    assert read(archive) == {}
    assert archive.log().entries == ()
    assert not archive.folder.exists()


def test_rows_lie_under_their_local_day(archive):
    """23:00 UTC is the next day in Oslo."""
    put(archive, "one", [("a", 22, 1.0), ("a", 23, 2.0)])
    days = sorted(path.parent.name for path in archive.folder.rglob("*.parquet"))
    assert days == ["2026-03-01", "2026-03-02"]


def test_files_are_sorted_by_series_and_stamp(archive):
    """Any reader of Parquet finds each day in order."""
    put(archive, "one", [("b", 3, 1.0), ("a", 4, 2.0), ("b", 2, 3.0), ("a", 1, 4.0)])
    (path,) = archive.folder.rglob("*.parquet")
    day = pd.read_parquet(path)
    assert day["series"].tolist() == ["a", "a", "b", "b"]
    assert day["value.x"].tolist() == [4.0, 2.0, 3.0, 1.0]


cell = st.tuples(st.sampled_from(["a", "b", "ø"]), st.integers(0, 60), st.floats(-5, 5))
batches = st.lists(st.lists(cell, min_size=1, max_size=25), min_size=1, max_size=5)


@settings(max_examples=40, deadline=None)
@given(batches, st.integers(0, 60), st.integers(0, 60), st.integers(1, 40))
def test_history_is_the_union_of_the_releases_and_the_newest_wins(tmp_path_factory, released, low, high, block):
    """A plain dictionary filled release by release says the same, for any stretch and any size of blocks."""
    archive = Archive(tmp_path_factory.mktemp("archive"), "tide")
    told: dict[tuple[str, int], float] = {}
    for number, cells in enumerate(released):
        put(archive, f"batch {number}", cells)
        told |= {(key, hour): value for key, hour, value in cells}
    wanted = {place: value for place, value in told.items() if low <= place[1] < high}
    assert read(archive, low, high, block_rows=block) == wanted


def test_a_repeat_of_an_older_batch_changes_nothing(archive):
    """Kept again, a batch does not become the newest."""
    put(archive, "one", [("a", 1, 1.0)])
    put(archive, "two", [("a", 1, 2.0)])
    before = archive.log().states
    assert set(before) == {"one", "two"}
    archive.mark(before["one"], "released")
    assert read(archive) == {("a", 1): 2.0}
    assert len(archive.log().entries) == 2


def test_rows_that_wait_are_no_history(archive):
    """A held batch is there and not read; let in by a person it counts, discarded it does not, as was said last."""
    put(archive, "one", [("a", 1, 1.0), ("a", 2, 1.0)])
    put(archive, "two", [("a", 2, 2.0)], "held")
    assert read(archive) == {("a", 1): 1.0, ("a", 2): 1.0}
    archive.mark(archive.log().states["two"], "settled")
    assert read(archive) == {("a", 1): 1.0, ("a", 2): 2.0}
    assert [entry.batch_id for entry in archive.log().settled] == ["two"]
    archive.mark(archive.log().states["two"], "discarded")
    assert read(archive) == {("a", 1): 1.0, ("a", 2): 1.0}


def test_a_broken_entry_of_the_log_is_told(archive):
    """The history cannot be known then; files of others in the folder disturb nobody."""
    put(archive, "one", [("a", 1, 1.0)])
    (archive.folder / "log" / "notes.txt").write_text("mine")
    assert len(read(archive)) == 1
    (entry,) = (archive.folder / "log").glob("*.json")
    entry.write_text("{")
    with pytest.raises(SercheckError, match="this entry of the archive's log cannot be read"):
        Archive(archive.folder.parent, "tide").log()


def test_only_the_days_asked_for_are_opened(archive):
    """A broken file of another day disturbs nobody; one of the day asked for is told."""
    put(archive, "one", [("a", 10, 1.0), ("a", 24 * 9 + 10, 2.0)])
    broken = archive.folder / "2026-03-10" / "one.parquet"
    broken.write_bytes(b"no parquet")
    assert read(archive, 0, 24 * 5) == {("a", 10): 1.0}
    with pytest.raises(BatchError, match="2026-03-10"):
        read(archive)


def test_a_new_column_is_missing_in_old_days(archive):
    """The rule file may ask for a column that was not kept then."""
    put(archive, "one", [("a", 1, 1.0)])
    source = archived(archive, replace(LAYOUT, values=("x", "y")), *ALWAYS)
    assert source is not None
    assert np.isnan(source.rows().values["y"]).all()


def test_a_daily_row_is_replaced_by_a_later_one_of_the_same_day(archive):
    """A correction need not carry the same hour."""
    daily = Cadence("1D", "Europe/Oslo")
    for name, hour, value in (("one", 13, 1.0), ("two", 7, 2.0)):
        keep(archive, name, name, [rows_of([("a", hour, value)])], daily, "released", ALWAYS)
    source = archived(archive, LAYOUT, *ALWAYS)
    assert source is not None
    assert source.rows().values["x"].tolist() == [2.0]


def test_wild_and_unreadable_stamps_are_not_kept():
    """They have no day to be kept under."""
    rows = rows_of([("a", 1, 1.0), ("a", 90_000, 2.0), ("a", 2, 3.0)])
    stamps = rows.stamps.copy()
    stamps[2] = np.iinfo(np.int64).min
    kept = tidied(replace(rows, stamps=stamps), CADENCE, *ALWAYS)
    assert cells_of(kept) == {("a", 1): 1.0}


def test_feeds_do_not_share_a_folder():
    """Names that differ in what a file system minds, or only at the end of a long one, stay apart."""
    names = ["a/b", "a b", "a_b", "..", ".", "A%2Fb", "å", "x" * 300, "x" * 299 + "y"]
    folders = [feed_folder(name) for name in names]
    assert len(set(folders)) == len(names)
    assert all("/" not in folder and folder.strip(".") and len(folder.encode()) < 255 for folder in folders)


def test_blocks_of_series_are_those_of_the_whole(archive, monkeypatch):
    """Read with flat memory, by blocks of series over all days, history is the same, and so is its fingerprint."""
    monkeypatch.setattr("sercheck.store.archive.GROUP_ROWS", 20)
    cells = [(f"k{series:02d}", hour, float(series * hour)) for hour in range(60) for series in range(12)]
    put(archive, "one", cells)
    put(archive, "two", [("k03", 20, -1.0), ("k11", 70, -2.0)])
    whole = archived(archive, LAYOUT, *ALWAYS)
    blocks = archived(archive, LAYOUT, *ALWAYS, block_rows=150)
    assert whole is not None
    assert blocks is not None
    parts = list(blocks.blocks())
    assert len(parts) > 2
    assert sum(len(part.keys) for part in parts) == 12
    assert blocks.fingerprint == whole.fingerprint
    assert blocks.extent(CADENCE).first == FIRST
    assert blocks.extent(CADENCE).last == FIRST + 70 * HOUR
    grids = list(feed_grids(MemorySource(rows_of([("k03", 71, 5.0)]), LAYOUT), blocks, LAYOUT))
    assert sum(len(grid.keys) for grid in grids) == 12
    assert all(grid.start == 71 for grid in grids)


def test_history_fills_the_archive_once(archive):
    """Two quarters of history are kept in two steps; the same history again adds nothing."""
    cells = [("a", 24 * day, float(day)) for day in range(200)]
    source = MemorySource(rows_of(cells), LAYOUT)
    between = (FIRST, FIRST + 24 * 199 * HOUR)
    assert keep_history(archive, source, CADENCE, archive.log(), between) == (200, 0)
    assert keep_history(archive, source, CADENCE, archive.log(), between) == (0, 200)
    assert len(archive.log().entries) >= 2
    assert read(archive) == {(key, hour): value for key, hour, value in cells}


DIES = """
import os, signal, sys
from pathlib import Path
import sercheck.outputs as outputs
from feed_memory import put
from sercheck.store.archive import Archive
moment = int(sys.argv[1])
replace, seen = Path.replace, [0]
def counted(self, target):
    if seen[0] == moment:
        os.kill(os.getpid(), signal.SIGKILL)
    seen[0] += 1
    return replace(self, target)
Path.replace = counted
put(Archive("archive", "tide"), "two", [("a", hour, 2.0) for hour in range(0, 72, 6)])
"""


@pytest.mark.parametrize("moment", range(5))
def test_killed_between_any_two_steps_there_is_the_old_state_or_the_new(tmp_path, moment):
    """Killed before the entry of the log nothing counts; a repeat brings the batch in whole."""
    archive = Archive(tmp_path / "archive", "tide")
    put(archive, "one", [("a", 0, 1.0), ("a", 1, 1.0)])
    old = {("a", 0): 1.0, ("a", 1): 1.0}
    new = old | {("a", hour): 2.0 for hour in range(0, 72, 6)}
    ended = dying(DIES, tmp_path, str(moment))
    steps = 4  # three local days and the entry
    assert ended.returncode == (-signal.SIGKILL if moment < steps else 0), ended.stderr
    assert read(archive) == (old if moment < steps else new)
    assert dying(DIES, tmp_path, "99").returncode == 0
    assert read(archive) == new


RIVAL = """
import sys
from feed_memory import put
from sercheck.store.archive import Archive
archive = Archive("archive", "tide")
for number in range(20):
    put(archive, f"{sys.argv[1]} {number}", [(sys.argv[1], number, 1.0), ("both", number, float(number))])
"""


def test_two_processes_at_once_lose_nothing(tmp_path):
    """Each keeps twenty batches of the same feed at the same time; all forty are there."""
    rivals = [
        subprocess.Popen([sys.executable, "-c", RIVAL, name], cwd=tmp_path, env=environment())
        for name in ("left", "right")
    ]
    assert [rival.wait(timeout=60) for rival in rivals] == [0, 0]
    archive = Archive(tmp_path / "archive", "tide")
    assert len(archive.log().states) == 40
    assert len(read(archive)) == 60


# The gate and the archive


class Feed:
    """A feed with a store in a folder, judged day by day."""

    def __init__(self, folder: Path, rules: str = RULES) -> None:
        self.store = folder / "store"
        self.rules = folder / "rules.yaml"
        self.rules.write_text(rules)
        self.book = load_rules(self.rules)

    def gate(self, frame: pd.DataFrame, **more: object) -> Verdict:
        """Judge with the store."""
        return gate(self.book, frame, store=self.store, as_of="2026-12-01", **more)  # type: ignore[arg-type]

    @property
    def archive(self) -> Archive:
        """The feed's archive."""
        return Archive(self.store / "archive", "tide")


@pytest.fixture
def feed(tmp_path: Path) -> Feed:
    """A feed of two series."""
    return Feed(tmp_path)


def undecided(verdict: Verdict, rule: str) -> int:
    """Undecided records of one rule."""
    return sum(row["rule"] == rule for row in verdict.table.rows_where("outcome", "undecided"))


def test_released_days_become_the_history(feed):
    """After seventy released days the next is judged against them, without any --history."""
    frame = wave("2026-01-01", 71, seed=1)
    frame["day"] = frame["t"].str[:10]
    days = [part.drop(columns="day") for _, part in frame.groupby("day")]
    first = feed.gate(days[0])
    assert undecided(first, "level as usual") == 2
    past = pd.concat(days[1:70])
    keep(
        feed.archive, "the days between", "f", [read_in(past, feed).rows()], CADENCE, "released",
        (FIRST - 70 * 24 * HOUR, FIRST + 70 * 24 * HOUR),
    )  # fmt: skip
    last = feed.gate(days[70])
    assert undecided(last, "level as usual") == 0
    given = gate(feed.book, days[70], pd.concat(days[:70]), as_of="2026-12-01")
    for name in ("observed", "p_value", "limit", "outcome"):
        assert last.table[name].tolist() == given.table[name].tolist()


def read_in(frame: pd.DataFrame, feed: Feed) -> MemorySource:
    """A frame as intake reads it."""
    from sercheck.intake.stream import open_feed
    from sercheck.verdict import layout_of

    source = open_feed(frame, layout_of(feed.book))
    assert isinstance(source, MemorySource)
    return source


@pytest.mark.parametrize("suffix", ["csv", "parquet"])
def test_a_batch_file_is_archived_as_it_was(feed, tmp_path, suffix):
    """Every row of the file is in the archive once the batch is released."""
    frame = wave("2026-03-01", 1, seed=2)
    path = tmp_path / f"batch.{suffix}"
    frame.to_csv(path, index=False) if suffix == "csv" else frame.to_parquet(path)
    verdict = gate(feed.book, path, store=feed.store, as_of="2026-12-01")
    assert verdict.released
    kept = read(feed.archive)
    assert len(kept) == 48
    assert kept["a", 5] == frame["x"][5]


def test_without_keep_the_archive_is_read_and_not_written(feed):
    """The history counts, the batch leaves no trace."""
    feed.gate(wave("2026-03-01", 1, seed=2))
    files = sorted(feed.store.rglob("*"))
    verdict = feed.gate(wave("2026-03-02", 1, seed=3), keep=False)
    assert verdict.table["baseline_id"][0] is not None
    assert [path for path in sorted(feed.store.rglob("*")) if path not in files] == []
    assert gate(feed.book, wave("2026-03-02", 1, seed=3)).table["baseline_id"][0] is None


def test_a_batch_judged_again_has_the_same_records(feed):
    """Also when later days were released in between, and when the baseline was learned anew since."""
    days = [wave(f"2026-03-{day:02d}", 1, seed=day) for day in range(1, 14)]
    first = [feed.gate(day) for day in days]
    again = [feed.gate(day) for day in days]
    for one, other in zip(first, again, strict=True):
        assert one.table["record_id"].tolist() == other.table["record_id"].tolist()
        assert any("that judgement stands" in note for note in other.notes)
    assert len({verdict.table["baseline_id"][0] for verdict in first}) == 3
    assert len(feed.archive.log().entries) == 13


def test_the_baseline_is_learned_anew_when_it_is_old(feed):
    """After a week, as `refresh` says; the note tells from which rows."""
    notes = [feed.gate(wave(f"2026-03-{day:02d}", 1, seed=day)).notes for day in range(1, 12)]
    said = [number for number, told in enumerate(notes, 1) if any("learned anew" in note for note in told)]
    assert said == [9]
    quick = Feed(feed.store.parent, RULES + "baseline: {refresh: 2D}\n")
    assert not any("learned anew" in note for note in quick.gate(wave("2026-03-12", 1, seed=12)).notes)
    told = [quick.gate(wave(f"2026-03-{day}", 1, seed=day)).notes for day in (13, 14, 15)]
    assert [any("learned anew" in note for note in notes) for notes in told] == [False, True, False]


def test_a_baseline_that_ends_with_the_newest_row_is_new(tmp_path):
    """However long a batch is, the same one judged again is not learned for again."""
    feed = Feed(tmp_path, RULES.replace("batch_every: 1D", "batch_every: 14D"))
    for first in ("2026-03-01", "2026-03-15"):
        feed.gate(wave(first, 14, seed=1))
    last = wave("2026-03-29", 14, seed=2)
    assert any("learned anew" in note for note in feed.gate(last).notes)
    assert not any("learned anew" in note for note in feed.gate(last).notes)


def test_corrected_rows_win_and_stand_once(feed):
    """A day delivered again with other values replaces the first; the history of the next day has it once."""
    feed.gate(wave("2026-03-01", 1, seed=1))
    corrected = wave("2026-03-01", 1, seed=9)
    assert feed.gate(corrected).released
    kept = read(feed.archive)
    assert len(kept) == 48
    assert kept["b", 7] == corrected[corrected["key"] == "b"]["x"].iloc[7]


def versions(verdict: Verdict) -> list[str]:
    """The notes on stamps that another batch brought before."""
    return [note for note in verdict.notes if "newest release wins" in note]


def test_another_version_of_the_same_hours_is_noted(feed):
    """With the number of stamps and the batch that brought them; the same batch again is no other version."""
    first = feed.gate(wave("2026-03-01", 1, seed=1))
    assert versions(first) == versions(feed.gate(wave("2026-03-01", 1, seed=1))) == []
    assert versions(feed.gate(wave("2026-03-02", 1, seed=2))) == []
    half = wave("2026-03-01", 1, seed=9)
    half = half[half["t"] >= half["t"].sort_values().unique()[18]]
    (note,) = versions(feed.gate(half))
    assert note.startswith(f"6 of its stamps were released before by batch {first.batch_id};")
    (note,) = versions(feed.gate(wave("2026-03-01", 1, seed=8)))
    assert note.startswith("24 of its stamps")
    assert " and 1 more;" in note


def test_another_version_is_counted_whole_where_it_is_streamed(feed, tmp_path, monkeypatch):
    """Of a sorted file read block by block every stamp counts, not those of a sample."""
    monkeypatch.setattr("sercheck.intake.stream.open_feed.__defaults__", (40, None))
    first = feed.gate(wave("2026-03-01", 2, seed=1))
    frame = wave("2026-03-02", 2, seed=9).sort_values(["key", "t"])
    frame["t"] = pd.to_datetime(frame["t"])
    frame.to_parquet(tmp_path / "later.parquet", row_group_size=16)
    verdict = gate(feed.book, tmp_path / "later.parquet", store=feed.store, as_of="2026-12-01")
    (note,) = versions(verdict)
    assert note.startswith(f"24 of its stamps were released before by batch {first.batch_id};")
    again = gate(feed.book, tmp_path / "later.parquet", store=feed.store, as_of="2026-12-01")
    assert versions(again) == [note]


def test_hours_that_only_wait_are_no_other_version(feed):
    """A held batch brought nothing into the history yet."""
    put(feed.archive, "waits", [("a", hour, 1.0) for hour in range(24)], "held")
    assert versions(feed.gate(wave("2026-03-01", 1, seed=1))) == []
    feed.archive.mark(feed.archive.log().states["waits"], "settled")
    (note,) = versions(feed.gate(wave("2026-03-01", 1, seed=2)))
    assert "and 1 more" in note


def test_another_version_of_a_day_is_noted_whatever_its_hour(tmp_path):
    """Daily rows lie at their day, also when a correction carries another hour."""
    feed = Feed(
        tmp_path,
        "feed: tide\ncolumns: {time: t, series: key, values: [x]}\nevery: 1D\nbatch_every: 1D\n"
        "rules: [{name: all come, measure: completeness, stays: {above: 0.5}}]\n",
    )
    frame = pd.DataFrame({"t": ["2026-03-01T13:00:00Z"] * 2, "key": ["a", "b"], "x": [1.0, 2.0]})
    feed.gate(frame)
    later = frame.assign(t="2026-03-01T07:00:00Z", x=[1.5, 2.5])
    (note,) = versions(feed.gate(later))
    assert note.startswith("1 of its stamps")


def test_rows_of_the_window_are_no_history(feed, monkeypatch):
    """Judging a day that the archive holds already looks only at what lies before it."""
    for day in (1, 2, 3):
        feed.gate(wave(f"2026-03-{day:02d}", 1, seed=day))
    seen = []
    from sercheck.engine import measure_block

    def looked(grid, run):
        seen.append(grid)
        return measure_block(grid, run)

    monkeypatch.setattr("sercheck.blocks.measure_block", looked)
    feed.gate(wave("2026-03-02", 1, seed=2))
    (grid,) = seen
    assert (grid.start, len(grid.axis)) == (24, 48)


def test_only_the_stretch_that_teaches_is_read(tmp_path, monkeypatch):
    """`baseline: from` in days or as a date cuts history, wherever it comes from."""
    lengths = []
    from sercheck.engine import measure_block

    def looked(grid, run):
        lengths.append(grid.start // 24)
        return measure_block(grid, run)

    monkeypatch.setattr("sercheck.blocks.measure_block", looked)
    past, batch = wave("2026-01-01", 40, seed=1), wave("2026-02-10", 1, seed=2)
    for extra in ("baseline: {from: 9D}\n", "baseline: {from: 2026-02-03}\n"):
        folder = tmp_path / str(len(lengths))
        folder.mkdir()
        feed = Feed(folder, RULES + extra)
        gate(feed.book, batch, past)
        sercheck.gate(feed.book, past, store=feed.store, as_of="2026-12-01")
        feed.gate(batch)
    assert [lengths[0], lengths[2], lengths[3], lengths[5]] == [9, 9, 7, 7]


def test_what_the_rule_file_names_fills_in_before_the_archive(tmp_path, monkeypatch):
    """One archived day does not hide forty days of files."""
    past = wave("2026-01-01", 40, seed=1)
    past.to_csv(tmp_path / "past.csv", index=False)
    feed = Feed(tmp_path, RULES + f"history: [{tmp_path}/past.csv]\n")
    starts = []
    from sercheck.engine import measure_block

    def looked(grid, run):
        starts.append(int(grid.delivered[:, : grid.start].sum()))
        return measure_block(grid, run)

    monkeypatch.setattr("sercheck.blocks.measure_block", looked)
    feed.gate(wave("2026-02-10", 1, seed=2))
    feed.gate(wave("2026-02-11", 1, seed=3))
    assert starts == [40 * 48, 41 * 48]


@pytest.mark.parametrize("stream", [False, True])
def test_a_history_file_that_holds_the_batch_teaches_only_what_lies_before_it(tmp_path, monkeypatch, stream):
    """The baseline ends before the window, also where the file is read block by block."""
    frame = wave("2026-01-01", 45, seed=1).sort_values(["key", "t"])
    frame["t"] = pd.to_datetime(frame["t"])
    frame.to_parquet(tmp_path / "all.parquet", row_group_size=300)
    if stream:
        monkeypatch.setattr("sercheck.intake.stream.open_feed.__defaults__", (500, None))
    feed = Feed(tmp_path, RULES + f"history: [{tmp_path}/all.parquet]\n")
    batch = frame[frame["t"] >= pd.Timestamp("2026-02-10", tz="UTC")][:24]
    verdict = feed.gate(batch)
    with open_ledger(str(feed.store)) as ledger:
        kept = ledger.baseline("tide", feed.book.fingerprint, "2026-12-01T00:00:00Z")
    assert kept is not None
    assert (kept.first_stamp, kept.last_stamp) == ("2026-01-01T00:00:00Z", "2026-02-09T23:00:00Z")
    assert verdict.table["baseline_id"][0] == kept.baseline_id


def test_a_crash_between_ledger_and_archive_is_healed_by_a_repeat(feed, monkeypatch):
    """The ledger has the decision, the archive failed: the same call again keeps the rows."""
    with monkeypatch.context() as broken:
        broken.setattr("sercheck.history.keep", lambda *_: (_ for _ in ()).throw(KeyboardInterrupt))
        with pytest.raises(KeyboardInterrupt):
            feed.gate(wave("2026-03-01", 1, seed=1))
    assert len(open_ledger(str(feed.store)).batches()) == 1
    assert read(feed.archive) == {}
    assert feed.gate(wave("2026-03-01", 1, seed=1)).released
    assert len(read(feed.archive)) == 48


GATE_DIES = """
import os, signal
import sercheck.history as history
history.keep = lambda *_: os.kill(os.getpid(), signal.SIGKILL)
from sercheck.verdict import gate
gate("rules.yaml", "batch.csv", store="store", as_of="2026-12-01")
"""


def test_a_kill_between_ledger_and_archive_is_healed_by_a_repeat(feed):
    """As above, by a real kill: the decision stands, the rows follow, the records are the same."""
    folder = feed.store.parent
    wave("2026-03-01", 1, seed=1).to_csv(folder / "batch.csv", index=False)
    assert dying(GATE_DIES, folder).returncode == -signal.SIGKILL
    with open_ledger(str(feed.store)) as ledger:
        (stored,) = ledger.batches()
        ids = ledger.records(stored.batch.batch_id)["record_id"].tolist()
    assert read(feed.archive) == {}
    again = feed.gate(pd.read_csv(folder / "batch.csv"))
    assert again.table["record_id"].tolist() == ids
    assert len(read(feed.archive)) == 48


GATES = """
import sys
from sercheck.verdict import gate
for day in sys.argv[1:]:
    gate("rules.yaml", f"{day}.csv", store="store", as_of="2026-12-01")
"""


def test_two_gates_at_once_lose_nothing(feed):
    """Two processes judge days of one feed at the same time, some of them both: every day is kept once."""
    folder = feed.store.parent
    days = [f"2026-03-{day:02d}" for day in range(1, 7)]
    for number, day in enumerate(days):
        wave(day, 1, seed=number).to_csv(folder / f"{day}.csv", index=False)
    gates = [
        subprocess.Popen([sys.executable, "-c", GATES, *own], cwd=folder, env=environment())
        for own in (days[:4], days[2:])
    ]
    assert [gate.wait(timeout=120) for gate in gates] == [0, 0]
    assert len(read(feed.archive)) == 6 * 48
    with open_ledger(str(feed.store)) as ledger:
        assert len(ledger.batches()) == 6


def test_an_archive_that_cannot_be_written_is_told_before_the_work(feed):
    """A file where the folder should be: one sentence, and no judgement is stored."""
    feed.store.mkdir()
    (feed.store / "archive").write_text("")
    with pytest.raises(SercheckError, match="archive"):
        feed.gate(wave("2026-03-01", 1, seed=1))
    assert open_ledger(str(feed.store)).batches() == ()


@pytest.mark.parametrize("day", ["2026-05-20", "2026-11-20"])
def test_a_silent_feed_comes_back(feed, day):
    """After months of silence the next day can be judged, with little history or none."""
    feed.gate(wave("2026-03-01", 1, seed=1))
    assert feed.gate(wave(day, 1, seed=2)).released


def test_a_batch_of_another_year_is_refused(feed):
    """Two years after the newest row the clock of the source is wrong."""
    feed.gate(wave("2026-03-01", 1, seed=1))
    with pytest.raises(BatchError, match="Is the year right"):
        feed.gate(wave("2028-03-02", 1, seed=2))
