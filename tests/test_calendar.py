"""The cadence, the wall clock and the axis."""

from __future__ import annotations

from datetime import UTC, date, datetime, timedelta
from zoneinfo import ZoneInfo

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from sercheck.errors import UsageError
from sercheck.intake.axis import build_axis, irregular_axis
from sercheck.intake.calendar import Cadence
from sercheck.intake.layout import Layout
from sercheck.intake.zone import Zone

HOUR = 3_600_000_000_000
EPOCH = datetime.fromtimestamp(0, UTC).replace(tzinfo=None)


def ns(*texts: str) -> np.ndarray:
    """Nanoseconds UTC of ISO texts."""
    return np.array([np.datetime64(text, "ns") for text in texts]).astype(np.int64)


def hours(first: str, n: int) -> np.ndarray:
    """Stamps of ``n`` hours."""
    return ns(first)[0] + np.arange(n) * HOUR


def layout(every: str, **changes: object) -> Layout:
    """A feed of one series."""
    return Layout("t", (), ("v",), every, **changes)


@pytest.mark.parametrize("name", ["Europe/Oslo", "America/New_York", "Australia/Lord_Howe", "Asia/Kolkata", "UTC"])
@given(seconds=st.lists(st.integers(0, 2_000_000_000), min_size=1, max_size=20))
@settings(max_examples=25, deadline=None)
def test_wall_clock_is_that_of_the_zone(name: str, seconds: list[int]) -> None:
    """Every instant shows on the wall what the standard library says, and comes back from it."""
    zone, stamps = Zone(name), np.array(seconds, dtype=np.int64) * 1_000_000_000
    local = zone.local(stamps)
    for second, shown in zip(seconds, local, strict=True):
        wall = datetime.fromtimestamp(second, ZoneInfo(name)).replace(tzinfo=None)
        assert EPOCH + timedelta(seconds=int(shown) // 1_000_000_000) == wall
    first, second_time = zone.utc(local), zone.utc(local, np.ones(len(local), dtype=bool))
    assert ((first == stamps) | (second_time == stamps)).all()
    assert not zone.doubtful(local)[1].any()


def test_doubtful_readings() -> None:
    """The autumn hour comes twice and the spring hour never."""
    twice, never = Zone("America/New_York").doubtful(ns("2012-11-04T01:30", "2012-03-11T02:00", "2012-06-01T02:00"))
    assert twice.tolist() == [True, False, False]
    assert never.tolist() == [False, True, False]


def test_unknown_zone_is_refused() -> None:
    """A zone that does not exist is named in the error."""
    with pytest.raises(UsageError, match="Europe/Olso"):
        Zone("Europe/Olso")


CADENCES = ["1h", "15min", "10min", "7h", "D", "7D", "W", "B", "MS", "ME", "QS", "QS-FEB", "YS", "2MS", "5B", "1s"]


@pytest.mark.parametrize("every", CADENCES)
@pytest.mark.parametrize("zone", ["UTC", "America/New_York"])
def test_stamp_of_a_step_lies_in_that_step(every: str, zone: str) -> None:
    """Steps to stamps and back is the identity, and every such stamp is on the cadence."""
    cadence = Cadence(every, zone)
    middle = int(cadence.index_of(ns("2012-03-05T12:00"))[0][0])
    index = np.arange(middle - 60, middle + 60)
    back, on_grid = cadence.index_of(cadence.stamp_of(index))
    assert np.array_equal(back, index)
    assert on_grid.all()


def test_index_does_not_depend_on_the_batch() -> None:
    """Two batches number the same hour alike, anchored or not."""
    first = Cadence("1h").anchored(hours("2026-01-01T00:05", 30))
    second = Cadence("1h").anchored(hours("2026-01-02T00:05", 3))
    assert first.index_of(ns("2026-01-02T01:05")) == second.index_of(ns("2026-01-02T01:05"))
    assert first.index_of(ns("2026-01-02T01:05"))[1].all()
    assert not first.index_of(ns("2026-01-02T01:00"))[1].any()


def test_commonest_place_is_the_grid() -> None:
    """One stamp off the others' minute is off the grid, not the others."""
    stamps = np.append(hours("2026-01-01T00:05", 20), ns("2026-01-01T20:17"))
    assert Cadence("1h").anchored(stamps).index_of(stamps)[1].tolist() == [True] * 20 + [False]


def test_six_hours_on_the_wall_clock_stay_on_the_grid_over_a_clock_change() -> None:
    """Local stamps at 0, 6, 12 and 18 o'clock are consecutive steps in summer and winter."""
    zone = Zone("Europe/Oslo")
    local = ns("2026-03-01")[0] + np.arange(4 * 60) * 6 * HOUR
    stamps = zone.utc(local)
    cadence = Cadence("6h", "Europe/Oslo").anchored(stamps)
    index, on_grid = cadence.index_of(stamps)
    assert on_grid.all()
    assert (np.diff(index) == 1).all()
    assert np.array_equal(cadence.stamp_of(index), stamps)


def test_days_are_local_days() -> None:
    """Midnight and late evening of a local day are one step although they are two days in UTC."""
    stamps = ns("2012-06-01T04:00", "2012-06-02T03:59", "2012-06-02T04:00")
    index, _ = Cadence("D", "America/New_York").index_of(stamps)
    assert (index - index[0]).tolist() == [0, 0, 1]


def test_business_days_skip_the_weekend() -> None:
    """Monday follows Friday, and a Saturday is off the grid."""
    index, on_grid = Cadence("B").index_of(ns("2026-01-09", "2026-01-10", "2026-01-12"))
    assert index[2] - index[0] == 1
    assert on_grid.tolist() == [True, False, True]


def test_months_take_first_and_last_days() -> None:
    """Stamps at either end of a month stand for it, and are labelled by the cadence's own end."""
    start, end = Cadence("MS"), Cadence("ME")
    assert np.diff(start.index_of(ns("2026-01-31", "2026-02-01"))[0]).tolist() == [1]
    assert np.array_equal(end.stamp_of(end.index_of(ns("2028-02-10"))[0]), ns("2028-02-29"))


@pytest.mark.parametrize(
    ("every", "length", "steps"),
    [("1h", "1D", 24), ("15min", "1h", 4), ("15min", "W", 672), ("D", "7D", 7), ("D", "W", 7), ("B", "7D", 5),
     ("MS", "YS", 12), ("MS", "QS", 3), ("QS", "Y", 4), ("1h", 5, 5), ("10min", "1D", 144), ("irregular", 7, 7),
     ("24h", "7D", 7)],
)  # fmt: skip
def test_lengths_in_steps(every: str, length: str | int, steps: int) -> None:
    """A length in time is so many steps."""
    assert Cadence(every).steps(length) == steps


@pytest.mark.parametrize(
    ("every", "length"), [("7h", "1D"), ("1h", "90min"), ("D", "1h"), ("MS", "7D"), ("B", "2D"), ("irregular", "1D"),
                          ("1h", "soon"), ("1h", 0), ("QS", "MS"), ("1h", "0h")],
)  # fmt: skip
def test_lengths_that_do_not_divide_are_refused(every: str, length: str | int) -> None:
    """A length that is no whole number of steps gets a sentence."""
    with pytest.raises(UsageError):
        Cadence(every).steps(length)


def test_phase_follows_the_wall_clock_over_the_clock_change() -> None:
    """Eight in the morning has phase 8 before and after the change, and hour of the week counts from Monday."""
    lay = layout("1h", timezone="Europe/Oslo", seasons={"day": "1D", "week": "7D", "five": 5})
    cadence = Cadence("1h", "Europe/Oslo")
    first = int(cadence.index_of(ns("2026-03-27T23:00"))[0][0])  # Saturday 2026-03-28 00:00 on the wall
    axis = build_axis(cadence, lay, first, first + 71)
    assert axis.phases["day"][:24].tolist() == list(range(24))
    assert axis.phases["day"][24:47].tolist() == [0, 1, *range(3, 24)]
    assert axis.phases["week"][[0, 24, 47]].tolist() == [120, 144, 0]
    assert axis.phases["five"].tolist() == [(first + i) % 5 for i in range(71)]
    assert dict(axis.lengths) == {"day": 24, "week": 168, "five": 5}


def test_season_clock_may_differ() -> None:
    """The phase follows ``season_clock`` where it is given."""
    lay = layout("1h", seasons={"day": "1D"}, season_clock="Asia/Tokyo")
    assert build_axis(Cadence("1h"), lay, 0, 3).phases["day"].tolist() == [9, 10, 11]


def test_week_begins_on_monday_for_days_and_business_days() -> None:
    """Phase 0 is a Monday; twelve months begin in January."""
    daily = Cadence("D")
    monday = int(daily.index_of(ns("2026-01-12"))[0][0])
    axis = build_axis(daily, layout("D", seasons={"w": "7D"}), monday, monday + 8)
    assert axis.phases["w"].tolist() == [0, 1, 2, 3, 4, 5, 6, 0]
    working = Cadence("B")
    monday = int(working.index_of(ns("2026-01-12"))[0][0])
    axis = build_axis(working, layout("B", seasons={"w": "7D"}), monday, monday + 6)
    assert axis.phases["w"].tolist() == [0, 1, 2, 3, 4, 0]
    monthly = Cadence("MS")
    march = int(monthly.index_of(ns("2026-03-01"))[0][0])
    assert build_axis(monthly, layout("MS", seasons={"year": 12}), march, march + 2).phases["year"].tolist() == [2, 3]


def test_closed_days_are_local_dates() -> None:
    """Hours of a closed local day are marked but still expected; a closed day of a daily feed is not expected."""
    closed = (date(2026, 1, 1),)
    hourly = build_axis(
        Cadence("1h", "Europe/Oslo"), layout("1h", timezone="Europe/Oslo", closed_days=closed),
        int(ns("2025-12-31T22:00")[0]) // HOUR, int(ns("2026-01-01T23:00")[0]) // HOUR + 1,
    )  # fmt: skip
    assert hourly.closed.tolist() == [False, *[True] * 24, False]
    assert hourly.expected.all()
    first = int(Cadence("D").index_of(ns("2025-12-31"))[0][0])
    daily = build_axis(Cadence("D"), layout("D", closed_days=closed), first, first + 3)
    assert daily.closed.tolist() == [False, True, False]
    assert daily.expected.tolist() == [True, False, True]


def test_groups_are_local_calendar_days() -> None:
    """The day on which clocks go forward is a group of 23 hours."""
    lay = layout("1h", timezone="Europe/Oslo", group_lengths=("1D", 2, "6h"))
    first = int(ns("2026-03-27T23:00")[0]) // HOUR
    groups = build_axis(Cadence("1h", "Europe/Oslo"), lay, first, first + 71).groups
    assert np.unique(groups["1D"], return_counts=True)[1].tolist() == [24, 23, 24]
    assert np.unique(groups["2"], return_counts=True)[1].max() == 2
    assert np.unique(groups["6h"], return_counts=True)[1].tolist() == [6, 6, 6, 6, 5, 6, 6, 6, 6, 6, 6, 6]


def test_irregular_axis_expects_nothing() -> None:
    """An irregular feed has an order and seasons in steps, no due rows."""
    axis = irregular_axis(layout("irregular", seasons={"s": 3}, group_lengths=(2,)), np.arange(5))
    assert axis.phases["s"].tolist() == [0, 1, 2, 0, 1]
    assert axis.groups["2"].tolist() == [0, 0, 1, 1, 2]
    assert not axis.expected.any()


def test_a_local_day_has_its_own_number_of_hours() -> None:
    """A batch of one day has 23 steps in spring and 25 in autumn."""
    cadence = Cadence("1h", "America/New_York")
    spring = cadence.period("1D", int(ns("2012-03-11T12:00")[0]), floor=True)
    autumn = cadence.period("1D", int(ns("2012-11-04T12:00")[0]), floor=True)
    assert (spring[1] - spring[0], autumn[1] - autumn[0]) == (23, 25)
