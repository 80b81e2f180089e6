"""Feeds of a folder, replayed through the gate: their clocks, their faults, and what the tables say of them."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from tests import gated_feeds
from tests.feeds import FOLDER, columns, sources
from tests.found import Found, share, table
from tests.gated_feeds import HISTORY, Gated, episodes

HELD_OUT = FOLDER.parent / "held_out"


def only(folder: Path, *names: str):
    """The columns of a folder with these names in them."""
    return [column for source in sources(folder) for column in columns(source, names)]


def test_a_folder_without_words_is_read_by_its_defaults(tmp_path):
    """Stamps in the first column, each number column a feed, UTC, cycles by day and week; text is no feed."""
    stamps = pd.date_range("2026-01-05", periods=50, freq="30min", tz="UTC")
    rows = pd.DataFrame({"at": stamps, "kwh": np.arange(50.0), "note": "x", "flow": np.arange(50.0) + 1})
    rows.to_csv(tmp_path / "plant.csv", index=False)
    rows.to_parquet(tmp_path / "other.parquet")
    got = only(tmp_path)
    assert [column.name for column in got] == ["other kwh", "other flow", "plant kwh", "plant flow"]
    for column in got:
        assert column.per_day == 48
        assert column.days == ["2026-01-05", "2026-01-06"]
        np.testing.assert_array_equal(column.edges, [0, 48, 50])
        assert column.axis_values().shape == (1, 96)
        np.testing.assert_array_equal(column.phase[:50], np.arange(50))


def test_the_cycle_runs_on_its_own_clock():
    """Stamps on a fixed clock: the phase follows the local one, an hour on in summer."""
    road = only(FOLDER, "road_occupancy")[0]
    firsts = [road.edges[road.days.index(day)] for day in ("2015-02-02", "2015-07-06")]
    np.testing.assert_array_equal(road.phase[road.step[firsts]] % 24, [0, 1])


def test_broken_days_are_named_by_feed_and_by_column():
    """What feeds.yaml says of a file holds for all of its columns, what it says of a column for that one."""
    by_name = {column.name: column.broken for column in only(HELD_OUT, "Queen", "K Road")}
    assert "2023-09-25" in by_name["auckland_footfall 150 K Road"]
    assert "2023-05-09" not in by_name["auckland_footfall 150 K Road"]
    assert "2023-05-09" in by_name["auckland_footfall 205 Queen Street"]


def test_a_file_that_is_not_there_is_said(tmp_path):
    """feeds.yaml that names a missing file, and a folder without any, end with a sentence."""
    with pytest.raises(SystemExit, match="no file that ends with"):
        sources(tmp_path)
    pd.DataFrame({"t": [1], "v": [2.0]}).to_csv(tmp_path / "a.csv", index=False)
    (tmp_path / "feeds.yaml").write_text("b.csv: {zone: UTC}\n")
    with pytest.raises(SystemExit, match=r"no file b\.csv"):
        sources(tmp_path)


@pytest.mark.parametrize(("column", "day", "rule"), [
    ("205 Queen Street", "2023-05-09", "level"),  # a counter that loses nine of ten
    ("59 High Street", "2023-10-13", "run"),  # nothing for five hours
    ("205 Queen Street", "2023-09-29", "phase"),  # stamps an hour early
])  # fmt: skip
def test_faults_of_held_out_feeds_are_held(column, day, rule):
    """Faults that feeds came with on which nothing was chosen are held by the rule that is for them."""
    gated = Gated(only(HELD_OUT, column)[0])
    verdict = gated.verdict(gated.column.rows, gated.column.days.index(day))
    assert not verdict.released
    assert rule in {row["rule"] for row in verdict.table.rows_where("action", "hold")}


@pytest.mark.parametrize(("fault", "within"), [("smoothed over 3", 7), ("stuck 6 h", 1), ("last week again", 1)])
def test_faults_put_into_a_held_out_feed_are_held(fault, within):
    """A fault put into copies of a held-out road's days is held that day or that week; the first day is released."""
    gated = Gated(only(HELD_OUT, "traffic_volume")[0])
    day, rows = next((day, rows) for day, name, rows in gated.broken_copies(10_000, 3) if name == fault)
    assert gated.verdict(gated.column.rows, day).released
    assert any(not gated.verdict(rows, day + k).released for k in range(within))


def test_a_hold_that_lasts_counts_once():
    """Runs of days in a row are one episode."""
    assert episodes(["2026-01-01", "2026-01-02", "2026-01-04"]) == 2
    assert episodes([]) == 0


def test_each_feed_has_one_vote():
    """The table gives every trial's share with its exact interval, and the mean over feeds beside it."""
    many, few = Found("many", weather=True), Found("few", weather=False)
    many.add("shuffled", 90, 0, 9)
    few.add("shuffled", 10, 10, 10)
    lines = table([many, few, Found("none", weather=True)])
    assert "0.10 (0.05-0.18)" in lines[1]  # Clopper and Pearson, R binom.test(10, 100)
    assert "0.50/0.55" in lines[1]
    assert lines[3].split()[1:3] == ["0.00", "(0.00-0.04)"]
    assert share(0, 0) == "-"


def test_the_command_prints_both_tables(tmp_path, capsys):
    """A folder of one short feed: a column that is skipped is named with the reason."""
    stamps = pd.date_range("2026-01-05", periods=24 * 20, freq="h")
    pd.DataFrame({"t": stamps, "v": np.arange(480.0)}).to_csv(tmp_path / "short.csv", index=False)
    gated_feeds.main(["--folder", str(tmp_path)])
    assert f"skipped: 20 days, more than {HISTORY} are needed" in capsys.readouterr().out
