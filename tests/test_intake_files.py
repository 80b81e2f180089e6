"""Files and frames of every format to the same rows, and one sentence for every broken one."""

from __future__ import annotations

import gzip
import subprocess
import sys
from collections.abc import Callable
from decimal import Decimal
from itertools import pairwise
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from sercheck.errors import BatchError
from sercheck.grid import Grid
from sercheck.intake.layout import Layout
from sercheck.intake.rows import Rows
from sercheck.intake.stream import MemorySource, StreamSource, feed_grids, open_feed

FEEDS = Path(__file__).parent / "reference" / "feeds"
LAYOUT = Layout("read_at", ("substation",), ("kwh",), "1h", "Europe/Oslo")
HEADER = "read_at,substation,kwh\n"


def rows_of(path: object, layout: Layout = LAYOUT) -> Rows:
    """All rows of a feed."""
    return open_feed(path, layout).rows()


def grid_of(path: object, layout: Layout) -> Grid:
    """The feed's grid, one block."""
    (grid,) = feed_grids(open_feed(path, layout), None, layout)
    return grid


def csv(folder: Path, text: str, name: str = "batch.csv") -> Path:
    """A CSV file with a header."""
    path = folder / name
    path.write_text(HEADER + text)
    return path


def frame(n: int = 30) -> pd.DataFrame:
    """Rows of three substations, with a column nobody asks for."""
    rng = np.random.default_rng(3)
    hours = pd.date_range("2026-01-05", periods=n, freq="h", tz="UTC")
    keys = np.repeat([17, 4, 250], n)
    feed = pd.DataFrame({"read_at": hours.append([hours, hours]), "other": "x", "substation": keys})
    return feed.assign(kwh=rng.normal(size=3 * n))


WRITERS: dict[str, Callable[[pd.DataFrame, Path], object]] = {
    "a.csv": lambda f, p: f.to_csv(p, index=False),
    "a.csv.gz": lambda f, p: f.to_csv(p, index=False),
    "a.tsv": lambda f, p: f.to_csv(p, index=False, sep="\t"),
    "a.parquet": lambda f, p: f.to_parquet(p),
    "a.pq": lambda f, p: f.to_parquet(p, row_group_size=7),
    "a.jsonl": lambda f, p: f.to_json(p, orient="records", lines=True, date_format="iso", double_precision=15),
    "a.ndjson": lambda f, p: f.to_json(p, orient="records", lines=True, date_format="epoch", double_precision=15),
    "a.json.gz": lambda f, p: f.to_json(p, orient="records", lines=True, date_format="iso", double_precision=15),
    "a.json": lambda f, p: f.to_json(p, orient="records", date_format="iso", double_precision=15),
}


@pytest.mark.filterwarnings("ignore:The default 'epoch' date format:DeprecationWarning", "ignore:.*epoch")
@pytest.mark.parametrize("name", WRITERS)
def test_every_format_gives_the_same_rows(tmp_path: Path, name: str) -> None:
    """The same feed in any format has the same grid and the same fingerprint, the bits of every number kept."""
    feed = frame()
    feed["kwh"] = feed["kwh"].round(10)  # as many digits as pandas writes to JSON
    WRITERS[name](feed, tmp_path / name)
    source = open_feed(tmp_path / name, LAYOUT)
    assert source.fingerprint == open_feed(feed, LAYOUT).fingerprint
    (grid,) = feed_grids(source, None, LAYOUT)
    assert grid.keys.tolist() == ["17", "250", "4"]
    expected = feed.pivot_table(index="substation", columns="read_at", values="kwh").loc[[17, 250, 4]].to_numpy()
    np.testing.assert_array_equal(grid.values["kwh"], expected)


@pytest.mark.parametrize(
    "keys",
    [["17", "4"], [17, 4], [17.0, 4.0], pd.Categorical(["17", "4"]), [Decimal("17.00"), Decimal(4)],
     pd.array([17, 4], dtype="Int64"), pd.array(["17", "4"], dtype="string")],
)  # fmt: skip
def test_keys_become_text(tmp_path: Path, keys: object) -> None:
    """The name of a series does not depend on the type of its key column, in a frame, in CSV or in Parquet."""
    feed = pd.DataFrame({"read_at": ["2026-01-05T00:00Z"] * 2, "substation": keys, "kwh": [1.0, 2.0]})
    feed.to_csv(tmp_path / "a.csv", index=False)
    feed.to_parquet(tmp_path / "a.parquet")
    for given_ in (feed, tmp_path / "a.csv", tmp_path / "a.parquet"):
        assert rows_of(given_).keys.tolist() == ["17", "4"]


def test_odd_keys() -> None:
    """A key text NA stays, a missing key is the empty text, parts of a compound key are joined unmistakably."""
    feed = pd.DataFrame({
        "read_at": ["2026-01-05"] * 4, "substation": ["NA", None, "a/b", "a"], "unit": ["1", "2", "c", "b/c\\"],
    }).assign(kwh=1.0)  # fmt: skip
    assert rows_of(feed).keys.tolist() == ["", "NA", "a", "a/b"]
    both = Layout("read_at", ("substation", "unit"), ("kwh",), "1h")
    assert sorted(rows_of(feed, both).keys) == sorted(["NA/1", "/2", "a\\/b/c", "a/b\\/c\\\\"])


def test_key_text_na_in_csv_stays(tmp_path: Path) -> None:
    """Only value cells know words for missing."""
    path = csv(tmp_path, "2026-01-05,NA,1\n2026-01-05,,2\n2026-01-05,007,3\n")
    assert rows_of(path).keys.tolist() == ["", "007", "NA"]


CELLS = ["1.5", "", "NA", "null", "NaN", "abc", "1,5", "1.000,5", "inf", "-Infinity", "true", "+2", "1e3", "12 kWh"]
NUMBERS = [1.5, *[np.nan] * 9, 1.0, 2.0, 1000.0, np.nan]


def test_cells_of_text(tmp_path: Path) -> None:
    """Missing, unreadable and infinite cells are told apart and counted; in CSV, JSON, Parquet and a frame alike."""
    feed = pd.DataFrame({
        "read_at": pd.date_range("2026-01-05", periods=len(CELLS), freq="h"), "substation": "a", "kwh": CELLS,
    })  # fmt: skip
    feed.to_csv(tmp_path / "a.csv", index=False)
    feed.to_parquet(tmp_path / "a.parquet")
    feed.to_json(tmp_path / "a.jsonl", orient="records", lines=True, date_format="iso")
    prints = set()
    for given_ in (feed, tmp_path / "a.csv", tmp_path / "a.parquet", tmp_path / "a.jsonl"):
        grid = grid_of(given_, LAYOUT)
        np.testing.assert_array_equal(grid.values["kwh"], [NUMBERS])
        assert grid.tally.unreadable["kwh"].tolist() == [4]
        assert grid.tally.infinite["kwh"].tolist() == [2]
        assert grid.delivered.all()
        prints.add(open_feed(given_, LAYOUT).fingerprint)
    assert len(prints) == 1


@pytest.mark.parametrize(
    "column",
    [pa.array([1, None], pa.int64()), pa.array([Decimal("1.0"), None], pa.decimal128(5, 1)), pa.array([1.0, np.nan]),
     pa.array([True, None]), pa.array([1, None], pa.uint8()), pa.array(["1", ""]).dictionary_encode()],
)  # fmt: skip
def test_types_of_numbers(tmp_path: Path, column: pa.Array) -> None:
    """Integers, decimals, booleans and codes are numbers; null is missing."""
    pq.write_table(pa.table({"read_at": ["2026-01-05T00", "2026-01-05T01"], "substation": ["a", "a"], "kwh": column}),
                   tmp_path / "a.parquet")  # fmt: skip
    np.testing.assert_array_equal(rows_of(tmp_path / "a.parquet").values["kwh"], [1.0, np.nan])


def test_numbers_keep_their_bits(tmp_path: Path) -> None:
    """A number written with 17 digits is read back exactly."""
    numbers = np.random.default_rng(8).normal(size=200) * 10.0 ** np.arange(-100, 100)
    lines = [f"2026-01-05T{i // 60:02d}:{i % 60:02d}Z,a,{x!r}\n" for i, x in enumerate(map(float, numbers))]
    path = csv(tmp_path, "".join(lines))
    assert np.array_equal(rows_of(path).values["kwh"], numbers)


def test_columns_that_are_not_needed_are_not_read(tmp_path: Path) -> None:
    """Rubbish in another column does not matter; quotes may hold a separator or a line's end."""
    path = tmp_path / "a.csv"
    head = b"\xef\xbb\xbfread_at,note,substation,kwh"
    lines = (head, b'2026-01-05,"a, \xff\nb","x, y",1', b"", b'2026-01-06,,"x, y",2')
    path.write_bytes(b"\r\n".join(lines))
    rows = rows_of(path, Layout("read_at", ("substation",), ("kwh",), "D"))
    assert rows.keys.tolist() == ["x, y"]
    assert rows.values["kwh"].tolist() == [1, 2]


def test_index_of_a_frame_may_hold_columns() -> None:
    """A column may be a level of the frame's index, and the frame stays as it was."""
    feed = frame(5)
    indexed = feed.set_index(["read_at", "substation"])
    before = indexed.copy(deep=True)
    assert open_feed(indexed, LAYOUT).fingerprint == open_feed(feed, LAYOUT).fingerprint
    pd.testing.assert_frame_equal(indexed, before)


def test_periods_and_mixed_stamps_of_a_frame() -> None:
    """Periods, and datetimes of several zones in one column, are read as what they say."""
    monthly = Layout("read_at", (), ("kwh",), "MS")
    feed = pd.DataFrame({"read_at": pd.period_range("1949-01", periods=3, freq="M"), "kwh": [1.0, 2.0, 3.0]})
    assert grid_of(feed, monthly).values["kwh"].tolist() == [[1, 2, 3]]
    both = np.array([pd.Timestamp("2026-01-05T01:00+01:00"), pd.Timestamp("2026-01-05T02:00")], dtype=object)
    mixed = pd.DataFrame({"read_at": both, "kwh": 1.0})
    stamps = rows_of(mixed, Layout("read_at", (), ("kwh",), "1h", "Europe/Oslo")).stamps
    assert np.diff(stamps).tolist() == [3_600_000_000_000]


def test_several_files_and_globs(tmp_path: Path) -> None:
    """Files are read in the order given, those of a glob in order of name."""
    csv(tmp_path, "2026-01-05T00Z,a,1\n", "b1.csv")
    csv(tmp_path, "2026-01-05T00Z,a,2\n", "b2.csv")
    assert rows_of(str(tmp_path / "b*.csv")).values["kwh"].tolist() == [1, 2]
    assert rows_of([tmp_path / "b2.csv", tmp_path / "b1.csv"]).values["kwh"].tolist() == [2, 1]
    assert open_feed(str(tmp_path / "b?.csv"), LAYOUT).paths == (str(tmp_path / "b1.csv"), str(tmp_path / "b2.csv"))


@given(
    st.permutations(range(12)), st.lists(st.integers(0, 12), max_size=3),
    st.sampled_from(["a.csv", "a.parquet", "a.jsonl"]),
)  # fmt: skip
@settings(max_examples=25, deadline=None)
def test_order_and_split_into_files_do_not_matter(
    tmp_path_factory: pytest.TempPathFactory, order: list[int], cuts: list[int], name: str
) -> None:
    """Any order of rows and any split into files gives the same grid and fingerprint."""
    whole = frame(4).round({"kwh": 3})
    folder = tmp_path_factory.mktemp("split")
    ends = [0, *sorted(cuts), 12]
    paths = []
    for number, (low, high) in enumerate(pairwise(ends)):
        if low < high:
            paths.append(folder / f"{number}{name}")
            WRITERS[name](whole.iloc[order[low:high]], paths[-1])
    source, reference = open_feed(paths, LAYOUT), open_feed(whole, LAYOUT)
    assert source.fingerprint == reference.fingerprint
    (grid,), (same,) = feed_grids(source, None, LAYOUT), feed_grids(reference, None, LAYOUT)
    assert grid.keys.tolist() == same.keys.tolist()
    np.testing.assert_array_equal(grid.values["kwh"], same.values["kwh"])
    np.testing.assert_array_equal(grid.axis.stamps, same.axis.stamps)


def written(folder: Path, name: str, content: bytes) -> Path:
    """A file of these bytes."""
    path = folder / name
    path.write_bytes(content)
    return path


def _parquet(folder: Path) -> bytes:
    frame(3).to_parquet(folder / "whole.parquet")
    return (folder / "whole.parquet").read_bytes()


GOOD = (HEADER + "2026-01-05,a,1\n").encode()
BROKEN: dict[str, tuple[Callable[[Path], object], str]] = {
    "empty": (lambda d: written(d, "b.csv", b""), "empty"),
    "blank lines": (lambda d: written(d, "b.csv", b"\n\n"), "empty"),
    "header only": (lambda d: written(d, "b.csv", HEADER.encode()), "no rows"),
    "header without end": (lambda d: written(d, "b.csv", HEADER.strip().encode()), "no rows"),
    "wrong column": (
        lambda d: written(d, "b.csv", b"read_at,substation,KWh\n1,2,3\n"),
        "read_at, substation, KWh.*Did you mean 'KWh'",
    ),
    "column twice": (lambda d: written(d, "b.csv", b"read_at,substation,kwh,kwh\n1,2,3,4\n"), "2 times"),
    "semicolons": (lambda d: written(d, "b.csv", GOOD.replace(b",", b";")), "separated by ';'"),
    "ragged": (lambda d: written(d, "b.csv", GOOD + b"2026-01-05,b\n"), "different length"),
    "directory": (lambda d: d, "directory"),
    "no file": (lambda d: d / "batsh.csv", "no such file"),
    "no match": (lambda d: str(d / "*.csv"), "matches no file"),
    "nothing": (lambda _: [], "no file is named"),
    "suffix": (lambda d: written(d, "b.xlsx", b"x"), "suffix .xlsx"),
    "truncated parquet": (lambda d: written(d, "b.parquet", _parquet(d)[:-200]), "not Parquet, or breaks off"),
    "no parquet": (lambda d: written(d, "b.parquet", GOOD), "not Parquet, or breaks off"),
    "latin": (lambda d: written(d, "b.csv", GOOD + "2026-01-06,Trømsø,1\n".encode("latin-1")), "not UTF-8"),
    "utf-16": (lambda d: written(d, "b.csv", GOOD.decode().encode("utf-16")), "UTF-16"),
    "not gzip": (lambda d: written(d, "b.csv.gz", GOOD), "not gzip"),
    "cut gzip": (lambda d: written(d, "b.csv.gz", gzip.compress(GOOD * 99)[:-12]), "breaks off|broken"),
    "no stamps": (lambda d: written(d, "b.csv", HEADER.encode() + b"soon,a,1\nlater,a,2\n"), "not one of 2 stamps"),
    "small stamps": (lambda d: written(d, "b.csv", HEADER.encode() + b"1,a,1\n2,a,2\n"), "numbers such as 1"),
    "huge cell": (lambda d: written(d, "b.csv", GOOD + b'2026-01-05,"' + b"x" * 40_000_000 + b'",1\n'), "longer than"),
    "no json": (lambda d: written(d, "b.jsonl", b'{"read_at": "2026-01-05", \n'), "no JSON"),
    "json numbers": (lambda d: written(d, "b.jsonl", b"1\n2\n"), "no JSON object"),
    "json column": (lambda d: written(d, "b.jsonl", b'{"read_at": "2026", "substation": 1}\n'), "no column 'kwh'"),
    "json latin": (lambda d: written(d, "b.jsonl", b'{"read_at": "\xff"}\n'), "not UTF-8"),
    "frame column": (lambda _: frame(2).drop(columns="kwh"), "DataFrame: there is no column 'kwh'"),
    "empty frame": (lambda _: frame(2).iloc[:0], "no rows"),
    "stamps as values": (lambda _: frame(2).assign(kwh=lambda f: f.read_at), "timestamp"),
}


@pytest.mark.parametrize("case", BROKEN)
def test_broken_input_gets_one_sentence(tmp_path: Path, case: str) -> None:
    """Whatever is wrong with a feed, one line says where, what came and what was wanted."""
    make, sentence = BROKEN[case]
    with pytest.raises(BatchError, match=sentence) as caught:
        rows_of(make(tmp_path))
    assert "\n" not in str(caught.value)


def test_no_permission(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A file that the system refuses to open is told as such (root may open every file, so the refusal is played)."""
    path = csv(tmp_path, "2026-01-05,a,1\n")

    def refuse(*_: object, **__: object) -> None:
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(pa, "input_stream", refuse)
    with pytest.raises(BatchError, match="no permission"):
        rows_of(path)


def test_stream_is_recognised_and_equal_to_memory(tmp_path: Path) -> None:
    """Parquet sorted by key is streamed in blocks of whole series, with the grids and fingerprint of memory."""
    feed = pd.concat([frame(50).assign(substation=f"s{i:03d}") for i in range(7)], ignore_index=True)
    feed["substation"] = [f"s{i // 37:03d}" for i in range(len(feed))]  # series of 37 rows straddle groups of 50
    feed["read_at"] = pd.date_range("2026-01-05", periods=37, freq="h", tz="UTC").append(
        [pd.date_range("2026-01-05", periods=37, freq="h", tz="UTC")] * 28)[: len(feed)]  # fmt: skip
    feed.to_parquet(tmp_path / "a.parquet", row_group_size=50)
    stream = open_feed(tmp_path / "a.parquet", LAYOUT, block_rows=120)
    memory = open_feed(feed, LAYOUT)
    assert isinstance(stream, StreamSource)
    assert isinstance(memory, MemorySource)
    blocks = list(stream.blocks())
    assert len(blocks) > 3
    assert sum(len(block.keys) for block in blocks) == len(memory.rows().keys)
    assert stream.fingerprint == memory.fingerprint
    grids = list(feed_grids(stream, None, LAYOUT))
    (whole,) = feed_grids(memory, None, LAYOUT)
    assert np.concatenate([grid.keys for grid in grids]).tolist() == whole.keys.tolist()
    np.testing.assert_array_equal(np.concatenate([grid.values["kwh"] for grid in grids]), whole.values["kwh"])
    batch = feed[feed.substation.isin(["s001", "s020"])].assign(read_at=lambda f: f.read_at + pd.Timedelta("37h"))
    batch = pd.concat([batch, batch.assign(substation="new")])
    beside = list(feed_grids(open_feed(batch, LAYOUT), stream, LAYOUT, 24))
    (together,) = feed_grids(open_feed(batch, LAYOUT), memory, LAYOUT, 24)
    order = np.argsort(np.concatenate([grid.keys for grid in beside]))
    np.testing.assert_array_equal(np.concatenate([g.values["kwh"] for g in beside])[order], together.values["kwh"])
    assert {grid.start for grid in beside} == {24} == {together.start}


def test_unsorted_parquet_is_read_whole(tmp_path: Path) -> None:
    """Row groups out of order, or a wild stamp in a stream, change nothing in the grid."""
    feed = frame(50)
    feed.to_parquet(tmp_path / "a.parquet", row_group_size=20)
    assert isinstance(open_feed(tmp_path / "a.parquet", LAYOUT, block_rows=30), MemorySource)
    ordered = feed.sort_values(["substation", "read_at"], ignore_index=True)
    ordered.loc[60, "read_at"] = pd.Timestamp("2200-01-01", tz="UTC")
    ordered.to_parquet(tmp_path / "b.parquet", row_group_size=20)
    source = open_feed(tmp_path / "b.parquet", LAYOUT, block_rows=30)
    assert isinstance(source, StreamSource)
    grids = list(feed_grids(source, None, LAYOUT))
    assert {len(grid.axis) for grid in grids} == {50}
    assert sum(int(grid.tally.off_grid.sum()) for grid in grids) == 1


REAL = {
    # file, layout: series, steps, off the grid, missing steps
    "seattle_temperature_hourly": (Layout("date", (), ("temp",), "1h", "America/Los_Angeles"), 1, 8760, 1, 2),
    "electricity_hourly": (Layout("ts", (), ("y",), "1h", "America/New_York"), 1, 26304, 3, 3),
    "airport_weather_hourly": (Layout("time_hour", ("origin",), ("temp", "pressure"), "1h"), 3, 8730, 0, 75),
    "road_occupancy_hourly": (Layout("ts", (), ("y",), "1h"), 1, 17544, 0, 0),
    "bike_rentals_hourly": (Layout("ts", (), ("count",), "1h"), 1, 40897, 0, 0),
}


@pytest.mark.parametrize("name", REAL)
def test_real_feeds(name: str) -> None:
    """Real feeds lie on their grid, but for the hours that their clocks skipped or had twice."""
    layout, series, steps, off_grid, missing = REAL[name]
    grid = grid_of(FEEDS / f"{name}.csv.gz", layout)
    assert grid.delivered.shape == (series, steps)
    assert int(grid.tally.off_grid.sum()) == off_grid
    assert int((~grid.delivered).sum()) == missing
    assert int(grid.tally.doubles.sum() + grid.tally.differing.sum() + grid.tally.disorder.sum()) == 0


@pytest.mark.parametrize(
    ("day", "steps", "missing", "off_grid"),
    [("2012-03-10", 24, 0, 0), ("2012-03-11", 23, 0, 1), ("2012-11-04", 25, 1, 0)],
)
def test_days_of_clock_changes(day: str, steps: int, missing: int, off_grid: int) -> None:
    """The electricity feed gives every day 24 rows: one too many in spring, one too few in autumn."""
    feed = pd.read_csv(FEEDS / "electricity_hourly.csv.gz")
    batch = feed[feed.ts.str.startswith(day)]
    grid = grid_of(batch, Layout("ts", (), ("y",), "1h", "America/New_York", batch_every="1D"))
    assert len(grid.axis) == steps
    assert int((~grid.delivered).sum()) == missing
    assert grid.tally.off_grid.tolist() == [off_grid]


MEASURE = """
import resource, sys
from sercheck.intake.layout import Layout
from sercheck.intake.stream import feed_grids, open_feed
layout = Layout("read_at", ("meter",), ("kwh",), "1h")
cells = sum(grid.values["kwh"].size for grid in feed_grids(open_feed(sys.argv[1], layout), None, layout))
print(cells, resource.getrusage(resource.RUSAGE_SELF).ru_maxrss)
"""


@pytest.mark.scale
def test_memory_of_a_stream_is_flat(tmp_path: Path) -> None:
    """Four times as many series of a sorted file take no more memory."""
    steps, peaks = 1000, []
    hours = np.datetime64("2026-01-01", "us") + np.arange(steps) * np.timedelta64(1, "h")
    for series in (4000, 16000):
        path = tmp_path / f"{series}.parquet"
        schema = pa.schema({"meter": pa.string(), "read_at": pa.timestamp("us"), "kwh": pa.float64()})
        with pq.ParquetWriter(path, schema) as out:
            for first in range(0, series, 1000):
                keys = np.repeat([f"m{i:06d}" for i in range(first, first + 1000)], steps)
                numbers = np.random.default_rng(first).normal(size=len(keys))
                out.write_table(pa.table({"meter": keys, "read_at": np.tile(hours, 1000), "kwh": numbers}, schema))
        found = subprocess.run([sys.executable, "-c", MEASURE, str(path)], capture_output=True, text=True, check=True)
        cells, peak = map(int, found.stdout.split())
        assert cells == series * steps
        peaks.append(peak)
    assert peaks[1] < 1.15 * peaks[0]
