"""Rows to grids: stretches, doubles, wild stamps, blocks, irregular feeds."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from sercheck.errors import BatchError
from sercheck.grid import Grid
from sercheck.intake.assemble import grids
from sercheck.intake.calendar import Cadence
from sercheck.intake.layout import Layout
from sercheck.intake.rows import Rows, fingerprint
from sercheck.intake.zone import NOT_A_STAMP

HOUR = 3_600_000_000_000
START = int(np.datetime64("2026-01-05T00:00", "ns").astype(np.int64))
LAYOUT = Layout("t", ("k",), ("v",), "1h")


def rows(keys: list[str], hours: list[float], values: list[float] | None = None) -> Rows:
    """Rows of the keys at hours after the start (NaN: unreadable stamp)."""
    names, codes = np.unique(np.array(keys, dtype=object), return_inverse=True)
    stamps = np.array([NOT_A_STAMP if np.isnan(h) else START + int(h * HOUR) for h in hours], dtype=np.int64)
    numbers = np.arange(len(hours), dtype=float) if values is None else np.array(values, dtype=float)
    return Rows(names, codes.astype(np.int32), stamps, {"v": numbers})


def one(batch: Rows, history: Rows | None = None, layout: Layout = LAYOUT, need: int | None = None) -> Grid:
    """The only block of the grid."""
    (grid,) = grids(batch, history, Cadence(layout.every, layout.timezone), layout, need)
    return grid


def test_rows_go_to_their_cells() -> None:
    """Every row stands at its series and hour; what was not delivered is missing."""
    grid = one(rows(["b", "a", "a"], [1, 0, 2], [5, 6, 7]))
    assert grid.keys.tolist() == ["a", "b"]
    np.testing.assert_array_equal(grid.values["v"], [[6, np.nan, 7], [np.nan, 5, np.nan]])
    np.testing.assert_array_equal(grid.delivered, [[True, False, True], [False, True, False]])
    assert grid.tally.newest.tolist() == [START + 2 * HOUR, START + HOUR]


def test_last_delivered_of_doubled_rows_wins() -> None:
    """Doubles with the same values are told from differing ones, whatever their order."""
    grid = one(rows(["a"] * 6, [0, 0, 0, 1, 1, 2], [1, 2, 1, 3, 3, 4]))
    assert grid.values["v"].tolist() == [[1, 3, 4]]
    assert grid.tally.rows.tolist() == [6]
    assert grid.tally.doubles.tolist() == [2]
    assert grid.tally.differing.tolist() == [1]


def test_disorder_is_counted_within_a_series() -> None:
    """Only a row earlier than the one before in its own series is out of order."""
    grid = one(rows(["a", "b", "a", "b", "a"], [5, 0, 3, 1, 4]))
    assert grid.tally.disorder.tolist() == [1, 0]


def test_wild_and_unreadable_stamps_are_off_the_grid() -> None:
    """Stamps of 1970 or 2200, between two steps or unreadable do not lengthen the axis, and are counted."""
    far = (np.datetime64("2200-01-01", "ns").astype(np.int64) - START) / HOUR
    grid = one(rows(["a"] * 28, [*range(24), far, -START / HOUR, 3.5, np.nan]))
    assert grid.values["v"].shape == (1, 24)
    assert grid.tally.off_grid.tolist() == [4]
    assert grid.tally.newest.tolist() == [START + 23 * HOUR]


def test_a_feed_far_too_thin_for_its_cadence_is_refused() -> None:
    """Two rows fifty years apart allocate nothing but an error."""
    with pytest.raises(BatchError, match="Is `every` right"):
        one(rows(["a", "a"], [0, 438_000]))


def test_history_stands_before_the_batch() -> None:
    """History fills the steps before the batch; its rows within the batch's stretch give way."""
    grid = one(rows(["a"], [3, 4][:1], [9]), rows(["a"] * 4, [0, 1, 2, 3], [1, 2, 3, 4]))
    assert grid.start == 3
    assert grid.values["v"].tolist() == [[1, 2, 3, 9]]
    assert grid.tally.rows.tolist() == [1]


def test_need_steps_limits_history() -> None:
    """The axis is never longer than asked, nor than history reaches."""
    past = rows(["a"] * 4, [0, 1, 2, 3])
    assert one(rows(["a"], [4]), past, need=2).start == 2
    assert one(rows(["a"], [4]), past, need=100).start == 4
    assert one(rows(["a"], [4]), past, need=0).start == 0


def test_series_that_only_history_knows_has_a_row() -> None:
    """A meter that went silent is seen as missing in the batch."""
    grid = one(rows(["a"], [2]), rows(["a", "b"], [1, 1]))
    assert grid.keys.tolist() == ["a", "b"]
    assert grid.delivered[:, grid.start :].tolist() == [[True], [False]]
    assert grid.tally.rows.tolist() == [1, 0]
    assert grid.tally.newest[1] == NOT_A_STAMP


def test_history_tells_which_stamp_is_wild() -> None:
    """Of two rows fifty years apart the one beside history is the batch."""
    grid = one(rows(["a", "a"], [-438_000, 100]), rows(["a"] * 100, [float(h) for h in range(100)]))
    assert (grid.start, len(grid.axis)) == (100, 101)
    assert grid.tally.off_grid.tolist() == [1]


def test_batch_out_of_reach_of_history_is_refused() -> None:
    """A batch of the wrong year is trouble, not a batch without history."""
    with pytest.raises(BatchError, match="from the history"):
        one(rows(["a"] * 2, [50_000, 50_001]), rows(["a"] * 100, list(range(100))))


DAILY = Layout("t", ("k",), ("v",), "1h", batch_every="1D")


@pytest.mark.parametrize(
    ("batch", "history", "start", "steps"),
    [
        ([2, 3, 20], None, 0, 24),  # the local day that holds all rows
        ([6 + h for h in range(24)], list(range(-30, 6)), 6, 24),  # days that begin at six
        ([8 + h for h in range(20)], list(range(-30, 6)), 6, 24),  # the same with its first two rows lost
        ([6 + h for h in range(24)], None, 6, 24),
        ([0, 60], None, 0, 61),  # does not fit: first to last row
    ],
)
def test_stretch_of_a_daily_batch(batch: list[int], history: list[int] | None, start: int, steps: int) -> None:
    """The batch stands for its day even where its first or last rows are lost."""
    past = None if history is None else rows(["a"] * len(history), [float(h) for h in history])
    grid = one(rows(["a"] * len(batch), [float(h) for h in batch]), past, DAILY)
    assert grid.axis.stamps[grid.start] == START + start * HOUR
    assert len(grid.axis) - grid.start == steps


def test_stretch_of_a_week_of_days_follows_history() -> None:
    """A week whose Monday is lost still begins on Monday when history ends on Sunday."""
    layout = Layout("t", ("k",), ("v",), "D", batch_every="7D")
    past = rows(["a"] * 20, [24.0 * d for d in range(-20, 0)])
    grid = one(rows(["a"] * 6, [24.0 * d for d in range(1, 7)]), past, layout)
    assert grid.start == 20
    assert grid.delivered[0, 20:].tolist() == [False] + [True] * 6


def test_stretch_of_a_month_of_days() -> None:
    """A batch of a month has the days of that month."""
    layout = Layout("t", ("k",), ("v",), "D", "Europe/Oslo", batch_every="MS")
    grid = one(rows(["a"] * 3, [24.0 * 30, 24.0 * 33, 24.0 * 40]), None, layout)  # 4, 7 and 14 February
    assert len(grid.axis) == 28
    assert np.flatnonzero(grid.delivered[0]).tolist() == [3, 6, 13]


def test_one_row_and_all_missing_are_grids() -> None:
    """A single row, or rows without a single number, are judged like any other."""
    assert one(rows(["a"], [0])).values["v"].tolist() == [[0.0]]
    assert np.isnan(one(rows(["a", "a"], [0, 1], [np.nan, np.nan])).values["v"]).all()


@pytest.mark.parametrize("cells", [1, 7, 1000])
def test_blocks_share_the_axis(cells: int) -> None:
    """Cut into blocks of series, the grid is the same."""
    rng = np.random.default_rng(5)
    batch = rows([f"s{i}" for i in rng.integers(0, 9, 60)], [float(h) for h in rng.integers(0, 12, 60)])
    whole = one(batch)
    blocks = list(grids(batch, None, Cadence("1h"), LAYOUT, block_cells=cells))
    assert np.concatenate([block.keys for block in blocks]).tolist() == whole.keys.tolist()
    np.testing.assert_array_equal(np.concatenate([block.values["v"] for block in blocks]), whole.values["v"])
    for name in ("rows", "doubles", "differing", "disorder", "off_grid", "newest"):
        joined = np.concatenate([getattr(block.tally, name) for block in blocks])
        np.testing.assert_array_equal(joined, getattr(whole.tally, name))
    assert all(block.values["v"].size <= max(cells, len(whole.axis)) for block in blocks)


feed = st.lists(
    st.tuples(st.sampled_from(["a", "b", "c"]), st.integers(0, 30), st.sampled_from([0.0, 1.5, float("nan")])),
    min_size=1, max_size=40, unique_by=lambda row: row[:2],
)  # fmt: skip


@given(feed, st.randoms(use_true_random=False), st.integers(1, 50))
@settings(max_examples=60, deadline=None)
def test_order_of_rows_does_not_matter(feed: list[tuple[str, int, float]], random: object, cells: int) -> None:
    """Any order of delivery gives the same values, counts and fingerprint (disorder apart), as a plain loop does."""
    mixed = list(feed)
    random.shuffle(mixed)
    batches = [rows([r[0] for r in part], [float(r[1]) for r in part], [r[2] for r in part]) for part in (feed, mixed)]
    assert fingerprint(batches[0]) == fingerprint(batches[1])
    blocks = list(grids(batches[1], None, Cadence("1h"), LAYOUT, block_cells=cells))
    keys = [key for block in blocks for key in block.keys]
    found = np.concatenate([block.values["v"] for block in blocks])
    first, last = min(r[1] for r in feed), max(r[1] for r in feed)
    naive = np.full((len(keys), last - first + 1), np.nan)
    for key, hour, value in feed:
        naive[keys.index(key), hour - first] = value
    np.testing.assert_array_equal(found, naive)
    assert sum(int(block.tally.rows.sum()) for block in blocks) == len(feed)
    assert sum(int(block.delivered.sum()) for block in blocks) == len(feed)


doubled = st.lists(
    st.tuples(st.sampled_from(["a", "b"]), st.integers(0, 5), st.sampled_from([0.0, 1.0, float("nan")])),
    min_size=1, max_size=40,
)  # fmt: skip


@given(doubled)
@settings(max_examples=80, deadline=None)
def test_counts_are_those_of_a_plain_loop(feed: list[tuple[str, int, float]]) -> None:
    """Doubles, differing rows, disorder and the values kept are what reading row after row would give."""
    grid = one(rows([r[0] for r in feed], [float(r[1]) for r in feed], [r[2] for r in feed]))
    first = min(r[1] for r in feed)
    for place, key in enumerate(grid.keys):
        seen: dict[int, list[str]] = {}
        disorder, doubles, before = 0, 0, None
        for _, hour, value in (r for r in feed if r[0] == key):
            doubles += str(value) in seen.get(hour, [])
            seen.setdefault(hour, []).append(str(value))
            disorder += before is not None and hour < before
            before = hour
        own = [int(array[place]) for array in (grid.tally.doubles, grid.tally.differing, grid.tally.disorder)]
        assert own == [doubles, sum(len(set(contents)) - 1 for contents in seen.values()), disorder]
        for hour, contents in seen.items():
            np.testing.assert_equal(grid.values["v"][place, hour - first], float(contents[-1]))


IRREGULAR = Layout("t", ("k",), ("v",), "irregular")


def test_irregular_series_are_right_aligned() -> None:
    """Order of observation counts; history ends where the batch begins, and shorter series begin empty."""
    history = rows(["a", "a", "b", "a"], [0, 0.1, 0.2, 5], [1, 2, 3, 99])
    batch = rows(["a", "b", "a", "a"], [5, 7, 4, 4], [6, 7, 5, 5])
    grid = one(batch, history, IRREGULAR)
    assert grid.irregular
    assert grid.start == 2
    np.testing.assert_array_equal(grid.values["v"], [[1, 2, 5, 6], [np.nan, 3, np.nan, 7]])
    assert grid.tally.doubles.tolist() == [1, 0]
    assert grid.tally.disorder.tolist() == [1, 0]
    assert one(batch, history, IRREGULAR, need=1).start == 1


def test_irregular_series_cut_into_blocks() -> None:
    """Blocks of an irregular feed are as wide as the feed."""
    batch = rows(["a", "a", "b"], [0, 1, 9], [1, 2, 3])
    blocks = list(grids(batch, None, Cadence("irregular"), IRREGULAR, block_cells=1))
    assert [block.keys.tolist() for block in blocks] == [["a"], ["b"]]
    np.testing.assert_array_equal(blocks[1].values["v"], [[np.nan, 3]])


@pytest.mark.parametrize("change", ["key", "stamp", "value", "missing", "once more"])
def test_fingerprint_sees_every_change(change: str) -> None:
    """Another key, stamp or value, a lost cell or a row delivered twice is another fingerprint."""
    base = (["a", "b"], [0.0, 1.0], [1.0, 2.0])
    other = {
        "key": (["a", "c"], *base[1:]), "stamp": (base[0], [0.0, 2.0], base[2]), "value": (*base[:2], [1.0, 2.5]),
        "missing": (*base[:2], [1.0, np.nan]), "once more": (["a", "b", "b"], [0.0, 1.0, 1.0], [1.0, 2.0, 2.0]),
    }[change]  # fmt: skip
    assert fingerprint(rows(*base)) != fingerprint(rows(*other))


def test_input_is_left_alone() -> None:
    """Making a grid changes neither rows nor history."""
    batch, past = rows(["b", "a", "a"], [9, 8, 8]), rows(["a", "b"], [1, 2])
    before = [array.copy() for r in (batch, past) for array in (r.codes, r.stamps, r.values["v"])]
    one(batch, past)
    after = [array for r in (batch, past) for array in (r.codes, r.stamps, r.values["v"])]
    assert all(np.array_equal(x, y) for x, y in zip(before, after, strict=True))
