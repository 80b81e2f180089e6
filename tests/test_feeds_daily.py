"""Real feeds gated day by day: their own faults show on their own days, and nothing breaks."""

from __future__ import annotations

from collections import defaultdict
from dataclasses import dataclass
from pathlib import Path

import pandas as pd
import pytest

import sercheck

FEEDS = Path(__file__).parent / "reference" / "feeds"
HISTORY = pd.Timedelta(days=90)
CLOCK = ("no gap", "all on the clock", "no hour twice", "all hours there")

RULES = """
feed: {name}
columns: {{time: {time}, {series}values: [{value}]}}
every: 1h
timezone: {zone}
seasons: {{day: 1D}}
batch_every: 1D
false_holds: 1 per 90D
otherwise: note
rules:
  - {{name: no gap, measure: spacing, look: gaps, stays: {{below: 1}}, otherwise: hold}}
  - {{name: all on the clock, measure: spacing, look: off_grid, stays: {{below: 1}}, otherwise: hold}}
  - {{name: no hour twice, measure: spacing, look: doubles, stays: {{below: 1}}, otherwise: hold}}
  - {{name: all hours there, measure: completeness, stays: {{above: 0.99}}, otherwise: hold}}
  - {{name: level as usual, measure: level, stays: {{like: history}}}}
  - {{name: steps as ever, measure: autocorrelation, lag: 1, after: difference, stays: {{like: history}}}}
  - {{name: never stuck, measure: repeats, stays: {{like: history}}}}
"""


@dataclass(frozen=True)
class Feed:
    """A file, its columns, the zone its stamps are read in, and the first days of the months that are gated."""

    file: str
    time: str
    value: str
    zone: str
    months: tuple[str, ...]
    series: str = ""

    def rows(self) -> pd.DataFrame:
        """All rows in order of stamps; stamps without an offset stay so."""
        columns = [self.time, *([self.series] if self.series else []), self.value]
        rows = pd.read_csv(FEEDS / f"{self.file}_hourly.csv.gz", usecols=columns)[columns]
        rows[self.time] = pd.to_datetime(rows[self.time])
        return rows.sort_values(self.time, kind="stable", ignore_index=True)

    def book(self) -> object:
        """The rule file."""
        series = f"series: {self.series}, " if self.series else ""
        text = RULES.format(name=self.file, time=self.time, series=series, value=self.value, zone=self.zone)
        return sercheck.load_rules(text)


FEEDS_THERE = {
    feed.file: feed
    for feed in (
        Feed("airport_weather", "time_hour", "temp", "UTC", ("2013-02-11", "2013-10-15"), series="origin"),
        Feed("seattle_temperature", "date", "temp", "America/Los_Angeles", ("2010-03-01", "2010-11-01")),
        Feed("electricity", "ts", "y", "Europe/Lisbon", ("2013-03-04", "2013-10-01")),
        Feed("bike_rentals", "ts", "count", "America/New_York", ("2018-03-01", "2018-11-01")),
        Feed("road_occupancy", "ts", "y", "UTC", ("2015-10-20", "2016-03-01")),
        Feed("wind_solar_power", "ts", "wind_mw", "UTC", ("2019-11-01", "2020-03-01")),
    )
}

FAULTS: dict[str, dict[str, dict[str, set[str]]]] = {
    # The skipped hour is there and the one after it is not; the hour that autumn doubles came once.
    "seattle_temperature": {
        "2010-03-14": {"": {"all on the clock", "no gap", "all hours there"}},
        "2010-11-07": {"": {"no gap", "all hours there"}},
    },
    # The skipped hour is delivered beside the right ones; the doubled one is summed into one row.
    "electricity": {
        "2013-03-31": {"": {"all on the clock"}},
        "2013-10-27": {"": {"no gap", "all hours there"}},
    },
    "bike_rentals": {
        "2018-03-11": {"": {"all on the clock"}},
        "2018-11-04": {"": {"no gap", "all hours there"}},
    },
    "road_occupancy": {},
    "wind_solar_power": {},
}
"""Rules that break by day and series, known from what the files hold on the days of clock changes."""


def missing_hours(feed: Feed, rows: pd.DataFrame, days: list[pd.Timestamp]) -> dict[str, dict[str, set[str]]]:
    """Days on which a series lacks hours, by counting its rows."""
    found: dict[str, dict[str, set[str]]] = {}
    for day in days:
        today = rows[rows[feed.time].dt.floor("D") == day]
        for key, count in today.groupby(feed.series).size().items():
            if count < 24:
                found.setdefault(f"{day:%Y-%m-%d}", {})[str(key)] = {"no gap", "all hours there"}
    return found


@pytest.mark.parametrize("name", FEEDS_THERE)
def test_two_months_day_by_day(name: str) -> None:
    """Every day gets a verdict; gaps, misplaced and doubled hours are held on exactly the days that have them."""
    feed = FEEDS_THERE[name]
    rows, book = feed.rows(), feed.book()
    stamps = rows[feed.time]
    zone = stamps.dt.tz
    keys = rows[feed.series].nunique() if feed.series else 1
    days = [day for first in feed.months for day in pd.date_range(first, periods=30, tz=zone)]
    broken: dict[str, dict[str, set[str]]] = {}
    undecided: defaultdict[str, int] = defaultdict(int)
    for day in days:
        before, begin, end = stamps.searchsorted([day - HISTORY, day, day + pd.Timedelta(days=1)])
        now = (day + pd.Timedelta(days=1, hours=6)).isoformat()
        verdict = sercheck.gate(book, rows.iloc[begin:end], history=rows.iloc[before:begin], as_of=now)
        records = verdict.records
        assert len(records) == 7 * keys
        failed = records[(records["outcome"] == "fail") & records["rule"].isin(CLOCK)]
        assert (verdict.decision == "held") == (len(failed) > 0)
        for series, rule in zip(failed["series"], failed["rule"], strict=True):
            broken.setdefault(f"{day:%Y-%m-%d}", {}).setdefault(str(series), set()).add(str(rule))
        for rule in records.loc[records["outcome"] == "undecided", "rule"]:
            undecided[rule] += 1
    assert broken == (missing_hours(feed, rows, days) if feed.series else FAULTS[name])
    assert not set(CLOCK) & set(undecided)
    assert undecided["level as usual"] < len(days) * keys
