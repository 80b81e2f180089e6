"""Stamps of every kind to UTC."""

from __future__ import annotations

import numpy as np
import pyarrow as pa
import pytest

from sercheck.errors import BatchError
from sercheck.intake.calendar import Cadence
from sercheck.intake.stamps import read_stamps, resolve
from sercheck.intake.zone import NOT_A_STAMP, Zone


def read(cells: object, every: str = "1h", zone: str = "UTC", codes: list[int] | None = None) -> list[str]:
    """UTC stamps as text, ``NaT`` where unreadable."""
    column = cells if isinstance(cells, pa.Array) else pa.array(cells)
    found = read_stamps(column, Cadence(every, zone), "feed.csv, column t")
    series = np.zeros(len(column), dtype=np.int32) if codes is None else np.array(codes, dtype=np.int32)
    return [str(np.datetime64(int(ns), "ns")).removesuffix(".000000000") for ns in resolve(found, series, Zone(zone))]


@pytest.mark.parametrize(
    ("text", "utc"),
    [
        ("2013-01-01T05:00:00Z", "2013-01-01T05:00:00"),
        ("2013-01-01 05:00:00+02:00", "2013-01-01T03:00:00"),
        ("2013-01-01T05:00-0330", "2013-01-01T08:30:00"),
        ("2013-01-01 05:00 UTC", "2013-01-01T05:00:00"),
        ("2013-01-01T05:00:00.25+01", "2013-01-01T04:00:00.250000000"),
        ("2013-01-01 05:00", "2013-01-01T04:00:00"),
        ("2013/01/01 05:00", "2013-01-01T04:00:00"),
        ("2013-1-1 5:00", "2013-01-01T04:00:00"),
        ("2013-07-01", "2013-06-30T22:00:00"),
        ("2013-07-01 24:00", "2013-07-01T22:00:00"),
        ("20130701", "2013-06-30T22:00:00"),
        ("20130701T0500Z", "2013-07-01T05:00:00"),
        ("1960Q4", "1960-09-30T23:00:00"),
        ("1960-Q4", "1960-09-30T23:00:00"),
        ("1961-01", "1960-12-31T23:00:00"),
        ("2013-02-29", "NaT"),
        ("2013-01-01 25:00", "NaT"),
        ("2013-13-01", "NaT"),
        ("2999-01-01", "NaT"),
        ("soon", "NaT"),
        ("", "NaT"),
    ],
)
def test_text(text: str, utc: str) -> None:
    """Text with an offset is an instant, without one it is what the feed's clock showed; alone or among others."""
    assert read([text], zone="Europe/Oslo") == [utc]
    mixed = read([text, "2013-01-01T00:00Z", "2013/01/01 01:00", None], zone="Europe/Oslo")
    assert mixed == [utc, "2013-01-01T00:00:00", "2013-01-01T00:00:00", "NaT"]


@pytest.mark.parametrize("unit", [1, 10**3, 10**6, 10**9])
def test_epochs_by_magnitude(unit: int) -> None:
    """Seconds, milliseconds, microseconds and nanoseconds since 1970 are told by their size, as numbers or text."""
    number = 1_356_998_400 * unit
    assert read([number, number + unit]) == ["2013-01-01T00:00:00", "2013-01-01T00:00:01"]
    assert read([str(number)]) == ["2013-01-01T00:00:00"]
    assert read([number, None]) == ["2013-01-01T00:00:00", "NaT"]


def test_small_numbers_order_an_irregular_feed_only() -> None:
    """Row numbers are refused for a feed with a cadence and order one without."""
    assert read([3, 1, 2], "irregular") == ["1970-01-01T00:00:03", "1970-01-01T00:00:01", "1970-01-01T00:00:02"]
    assert read(["0.5"], "irregular") == ["1970-01-01T00:00:00.500000000"]
    with pytest.raises(BatchError, match="every: irregular"):
        read([3, 1, 2])
    with pytest.raises(BatchError, match="every: irregular"):
        read(["3", "1"])


def test_years() -> None:
    """A bare year is a stamp where the cadence is a year."""
    assert read(["1821", "1822"], "YS") == ["1821-01-01T00:00:00", "1822-01-01T00:00:00"]
    assert read([1821], "YS") == ["1821-01-01T00:00:00"]


@pytest.mark.parametrize(
    ("column", "utc"),
    [
        (pa.array([1_356_998_400], pa.timestamp("s")), "2012-12-31T23:00:00"),
        (pa.array([1_356_998_400_000], pa.timestamp("ms", "America/New_York")), "2013-01-01T00:00:00"),
        (pa.array([15_706], pa.date32()), "2012-12-31T23:00:00"),
        (pa.array(["2013-01-01"]).dictionary_encode(), "2012-12-31T23:00:00"),
        (pa.array([None], pa.timestamp("us")), "NaT"),
        (pa.array([253_402_300_799], pa.timestamp("s")), "NaT"),
        (pa.nulls(1), "NaT"),
        (pa.array([1_356_998_400.5]), "2013-01-01T00:00:00.500000000"),
    ],
)
def test_types(column: pa.Array, utc: str) -> None:
    """Timestamps of any unit, with or without a zone, dates, codes and numbers are read."""
    assert read(column, zone="Europe/Oslo") == [utc]


def test_a_column_that_cannot_hold_stamps() -> None:
    """A list is no stamp, and the sentence says what the column is."""
    with pytest.raises(BatchError, match="list"):
        read(pa.array([[1]]))


AUTUMN = ["2012-11-04 00:00", "2012-11-04 01:00", "2012-11-04 01:00", "2012-11-04 02:00"]


def test_autumn_hour_by_order_of_delivery() -> None:
    """The first of two equal readings is summer time, the second winter time; backwards in a backwards series."""
    hours = ["2012-11-04T04:00:00", "2012-11-04T05:00:00", "2012-11-04T06:00:00", "2012-11-04T07:00:00"]
    assert read(AUTUMN, zone="America/New_York") == hours
    assert read(AUTUMN[::-1], zone="America/New_York") == hours[::-1]
    both = [cell for cell in AUTUMN for _ in range(2)]
    assert read(both, zone="America/New_York", codes=[0, 1] * 4) == [hour for hour in hours for _ in range(2)]
    assert read([*AUTUMN, *AUTUMN], zone="America/New_York") == hours * 2
    assert read(AUTUMN[:2], zone="America/New_York") == hours[:2]


def test_spring_hour_never_was() -> None:
    """A reading that the clock skipped is no stamp."""
    assert read(["2012-03-11 02:30", "2012-03-11 03:30"], zone="America/New_York") == ["NaT", "2012-03-11T07:30:00"]


def test_a_day_without_midnight_is_a_day() -> None:
    """Where clocks go forward at midnight the date still stands for its day in a daily feed."""
    feed = read_stamps(pa.array(["2017-10-14", "2017-10-15", "2017-10-16"]), Cadence("D"), "t")
    zone = Zone("America/Sao_Paulo")
    codes = np.zeros(3, dtype=np.int32)
    assert (resolve(feed, codes, zone) == NOT_A_STAMP).tolist() == [False, True, False]
    index, on_grid = Cadence("D", zone.name).index_of(resolve(feed, codes, zone, whole_days=True))
    assert np.diff(index).tolist() == [1, 1]
    assert on_grid.all()


def test_offsets_are_left_alone_beside_doubtful_readings() -> None:
    """A stamp with an offset is an instant even when it falls where the clock was doubtful."""
    cells = ["2012-11-04 01:00", "2012-11-04T01:00:00Z", "2012-03-11T02:30Z"]
    assert read(cells, zone="America/New_York") == ["2012-11-04T05:00:00", "2012-11-04T01:00:00", "2012-03-11T02:30:00"]


def test_a_cut_column_is_read_from_its_own_start() -> None:
    """Columns that are views into longer ones, with nulls, keep their cells."""
    for kind in (pa.string(), pa.large_string(), pa.string_view()):
        column = pa.array(["2026-01-01", None, "2026-01-02 01:00", "2026/01/03"], kind)
        assert read(column.slice(1)) == ["NaT", "2026-01-02T01:00:00", "2026-01-03T00:00:00"]
        assert read(column.slice(1, 2)) == ["NaT", "2026-01-02T01:00:00"]
    numbers = pa.array([None, 1_767_225_600, None, 1_767_225_660], pa.timestamp("s", "UTC"))
    assert read(numbers.slice(1)) == ["2026-01-01T00:00:00", "NaT", "2026-01-01T00:01:00"]
