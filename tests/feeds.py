"""A folder of feeds to replay: one CSV or Parquet file a feed, and ``feeds.yaml``, which says what is not usual in it.

Every file with stamps in its first column and numbers in others is a feed; each number column of each series is judged
by itself. ``feeds.yaml`` names, file by file, what differs from the defaults below::

    bike_rentals_hourly.csv.gz:
      stamp: ts                      # column of the stamps; default the first one
      series: station                # column of the series' names; default none
      zone: America/New_York         # clock of stamps without an offset, and of the days; default UTC
      clock: America/New_York        # clock of the cycle; default the zone
      people: true                   # made by people: a cycle by day and week, not by day alone; default true
      broken: {2016-01-23: closed}   # days whose rows are broken: listed, not counted as false holds;
                                     # {COLUMN: {DAY: WHY}} for days of one column
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import pandas as pd
import yaml

FOLDER = Path(__file__).parent / "reference" / "feeds"
ENDINGS = (".csv", ".csv.gz", ".parquet")
DAY_NS = 86_400_000_000_000


@dataclass(frozen=True)
class Source:
    """One file; the attributes are those of ``feeds.yaml``."""

    path: Path
    stamp: str = ""
    series: str = ""
    zone: str = "UTC"
    clock: str = ""
    people: bool = True
    broken: dict[str, str | dict[str, str]] = field(default_factory=dict)

    @property
    def name(self) -> str:
        """The file's name without its ending."""
        return self.path.name.split(".")[0].removesuffix("_hourly")

    @property
    def seasons(self) -> str:
        """The seasons in the words of a rule file."""
        return "{day: 1D, week: 7D}" if self.people else "{day: 1D}"


@dataclass(frozen=True)
class Column:
    """One column of one series: its rows as delivered, with the day of each row on the feed's clock.

    Attributes:
        rows: columns t (stamp as delivered) and v (value).
        edges: first row of each day, and the number of rows, shape (D + 1,).
        days: the days, shape (D,).
        step: place of each row on a regular axis that starts at midnight of the first day, shape (T,).
        phase: place in the day (week where people make the feed) of each step of the axis, on the cycle's clock.
        per_day: steps of a day.
    """

    source: Source
    name: str
    rows: pd.DataFrame
    edges: np.ndarray
    days: list[str]
    step: np.ndarray
    phase: np.ndarray
    per_day: int

    @property
    def broken(self) -> dict[str, str]:
        """Days whose rows are broken, and what is the matter with them."""
        said = self.source.broken
        everywhere = {day: why for day, why in said.items() if isinstance(why, str)}
        own = [days for part, days in said.items() if isinstance(days, dict) and self.name.endswith(" " + part)]
        return everywhere | {str(day): why for days in own for day, why in days.items()}

    def axis_values(self) -> np.ndarray:
        """The values on the regular axis, shape (1, steps); NaN where no row is."""
        x = np.full((1, len(self.phase)), np.nan)
        x[0, self.step] = self.rows["v"].to_numpy(dtype=float)
        return x


def sources(folder: Path = FOLDER) -> list[Source]:
    """The feeds of a folder in the order of ``feeds.yaml``, then of their names."""
    said_in = folder / "feeds.yaml"
    said = yaml.safe_load(said_in.read_text()) if said_in.exists() else {}
    files = {path.name: path for path in sorted(folder.iterdir()) if path.name.endswith(ENDINGS)}
    unknown = sorted(set(said) - set(files))
    if unknown:
        raise SystemExit(f"{said_in}: no file {', '.join(unknown)} beside it")
    if not files:
        raise SystemExit(f"{folder}: no file that ends with {', '.join(ENDINGS)}")
    order = [*said, *(name for name in files if name not in said)]
    return [Source(files[name], **_texts(said.get(name) or {})) for name in order]


def _texts(said: dict[str, object]) -> dict[str, object]:
    broken = said.get("broken")
    return said if not isinstance(broken, dict) else said | {"broken": {str(day): why for day, why in broken.items()}}


def columns(source: Source, names: list[str] | tuple[str, ...] = ()) -> Iterator[Column]:
    """Every column of every series, those whose name contains one of ``names``; columns without numbers are none."""
    parquet = source.path.name.endswith(".parquet")
    frame = pd.read_parquet(source.path) if parquet else pd.read_csv(source.path)
    stamp = source.stamp or str(frame.columns[0])
    numbers = frame.drop(columns=[stamp, *([source.series] if source.series else [])]).select_dtypes("number")
    for key, group in frame.groupby(source.series) if source.series else [("", frame)]:
        for value in numbers.columns:
            name = " ".join(part for part in (source.name, str(key), str(value)) if part)
            if not names or any(part in name for part in names):
                yield _column(source, name, pd.DataFrame({"t": group[stamp], "v": group[value]}))


def _column(source: Source, name: str, rows: pd.DataFrame) -> Column:
    rows = rows.reset_index(drop=True)
    given = pd.to_datetime(rows["t"])
    offset = given.dt.tz is not None
    local = given.dt.tz_convert(source.zone) if offset else given
    day = local.dt.strftime("%Y-%m-%d").to_numpy()
    edges = np.flatnonzero(np.concatenate(([True], day[1:] != day[:-1], [True])))
    # an axis of equal steps: in UTC where stamps have an offset, else on the clock that they were written on
    moment = (given.dt.tz_convert("UTC").dt.tz_localize(None) if offset else given).astype("datetime64[ns]")
    nanos = moment.to_numpy().astype(np.int64)
    width = int(np.median(np.diff(nanos)[np.diff(nanos) > 0]))
    per_day = max(round(DAY_NS / width), 1)
    start = local.iloc[0].normalize()
    origin = (start.tz_convert("UTC").tz_localize(None) if offset else start).value
    step = (nanos - origin) // width
    steps = -(-(int(step.max()) + 1) // per_day) * per_day
    axis = pd.to_datetime(origin + width * np.arange(steps))
    if offset or source.clock not in ("", source.zone):
        summer, zone = np.ones(steps, dtype=bool), "UTC" if offset else source.zone
        told = axis.tz_localize(zone, ambiguous=summer, nonexistent="shift_forward")
        axis = told.tz_convert(source.clock or source.zone)
    of_day = (axis.hour * 3600 + axis.minute * 60 + axis.second).to_numpy() // max(width // 1_000_000_000, 1)
    phase = (axis.day_of_week.to_numpy() * per_day if source.people else 0) + of_day
    return Column(source, name, rows, edges, [str(day[k]) for k in edges[:-1]], step, phase.astype(np.int64), per_day)
