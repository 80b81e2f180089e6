"""Every real feed through the public gate, day by day: how often is a healthy day held?

Run it with ``python -m tests.gated_feeds`` (about ten minutes; name columns to pick some, ``--dates`` lists the held
days). Every column of every series is a feed of its own: a rule file with nine rules and ``false_holds: 1 per 90D``,
ninety days of history before the day, ``sercheck.gate`` on each day in turn. A hold that lasts counts once. Beside each
count stands what the budget allows: the exact 95 % Poisson interval of the budget's own expectation. Days whose rows
are broken (``NAMED`` in ``real_feeds``) are listed, not counted.

Measured: .89 episodes per 90 days over all 18 columns (exact 95 % interval .69-1.12). Seventeen columns lie inside the
interval of their budget; bicycle counts lie below it (8 episodes, 10 to 27 expected): spread, innovations and the
counts of repeats keep less than their share on them.
"""

from __future__ import annotations

import argparse
from dataclasses import dataclass

import numpy as np
import pandas as pd
from scipy import stats

import sercheck
from sercheck.rulebook import load_rules
from tests.real_feeds import FOLDER, NAMED

HISTORY = 91
"""Days before the judged one: ninety stretches to compare with, and one more for the cycle of the first."""

RULES = """
feed: {name}
columns: {{time: t, values: [v]}}
every: 1h
timezone: {zone}
season_clock: {clock}
seasons: {seasons}
batch_every: 1D
false_holds: 1 per 90D
rules:
  - {{name: level, measure: level, stays: {{like: history}}}}
  - {{name: spread, measure: spread, stays: {{like: history}}}}
  - {{name: innovations, measure: innovations, look: variance, stays: {{like: history}}}}
  - {{name: amplitude, measure: seasonal_lag, season: day, stays: {{like: history}}}}
  - {{name: phase, measure: season_phase, season: day, stays: {{like: history}}}}
  - {{name: steps, measure: autocorrelation, lag: 1, after: difference, stays: {{like: history}}}}
  - {{name: run, measure: repeats, look: run, stays: {{like: history}}}}
  - {{name: share, measure: repeats, look: share, stays: {{like: history}}}}
  - {{name: replay, measure: replay, stays: {{like: history}}}}
"""


@dataclass(frozen=True)
class Source:
    """One file: its stamp column, the clock of its stamps, the clock of its cycles, and whether people make them."""

    file: str
    stamp: str
    zone: str
    clock: str
    people: bool
    series: str = ""


SOURCES = (
    Source("bike_rentals", "ts", "America/New_York", "America/New_York", people=True),
    Source("road_occupancy", "ts", "Etc/GMT+8", "America/Los_Angeles", people=True),
    Source("electricity", "ts", "Europe/Lisbon", "Europe/Lisbon", people=True),
    Source("seattle_temperature", "date", "Etc/GMT+8", "Etc/GMT+8", people=False),
    Source("wind_solar_power", "ts", "Australia/Brisbane", "Australia/Brisbane", people=False),
    Source("airport_weather", "time_hour", "America/New_York", "America/New_York", people=False, series="origin"),
)


def columns(source: Source) -> dict[str, pd.DataFrame]:
    """Every column of every series as rows of stamp and value, by name."""
    rows = pd.read_csv(FOLDER / f"{source.file}_hourly.csv.gz")
    values = [name for name in rows.columns if name not in (source.stamp, source.series)]
    groups = rows.groupby(source.series) if source.series else [("", rows)]
    return {
        " ".join(part for part in (source.file, key, value) if part): pd.DataFrame(
            {
                "t": group[source.stamp],
                "v": group[value],
            }
        )
        for key, group in groups
        for value in values
    }


def held_days(source: Source, name: str, rows: pd.DataFrame) -> tuple[int, list[tuple[str, str, str]]]:
    """Days judged, and the held ones with the rules that held and the likely cause."""
    seasons = "{day: 1D, week: 7D}" if source.people else "{day: 1D}"
    book = load_rules(RULES.format(name=name.replace(" ", "_"), zone=source.zone, clock=source.clock, seasons=seasons))
    stamps = pd.to_datetime(rows["t"], utc=True)
    local = stamps.dt.tz_convert(source.zone) if str(rows["t"].iloc[0]).endswith("Z") else stamps
    day = local.dt.strftime("%Y-%m-%d").to_numpy()
    edges = np.flatnonzero(np.concatenate(([True], day[1:] != day[:-1], [True])))
    held = []
    for k in range(HISTORY, len(edges) - 1):
        first, start, end = edges[k - HISTORY], edges[k], edges[k + 1]
        verdict = sercheck.gate(book, rows.iloc[start:end], history=rows.iloc[first:start])
        if not verdict.released:
            rules = sorted({row["rule"] for row in verdict.table.rows_where("action", "hold")})
            held.append((str(day[start]), "+".join(rules), verdict.likely_causes[0]["cause"]))
    return len(edges) - 1 - HISTORY, held


def episodes(days: list[str]) -> int:
    """Runs of days in a row."""
    stamps = pd.to_datetime(pd.Series(days, dtype=object))
    return int((stamps.diff() != pd.Timedelta(days=1)).sum())


def main() -> None:
    """Print one line a feed, and the sum."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("names", nargs="*", help="parts of the columns' names; default all")
    parser.add_argument("--dates", action="store_true", help="list the held days")
    asked = parser.parse_args()
    total_days = total = 0
    for source in SOURCES:
        for name, rows in columns(source).items():
            if asked.names and not any(part in name for part in asked.names):
                continue
            judged, held = held_days(source, name, rows)
            healthy = [day for day, _, _ in held if day not in NAMED.get(source.file, {})]
            count = episodes(healthy)
            low, high = stats.poisson.interval(0.95, judged / 90)
            mark = "" if low <= count <= high else "  outside"
            print(f"{name:32s} {judged:5d} days {count:3d} episodes, {count / judged * 90:.2f} per 90 days; "
                  f"budget {judged / 90:.1f} ({low:.0f} to {high:.0f}){mark}", flush=True)  # fmt: skip
            total_days, total = total_days + judged, total + count
            for day, rules, cause in held if asked.dates else ():
                print(f"    {day} {rules}: {cause} {NAMED.get(source.file, {}).get(day, '')}")
    if total_days:
        low, high = (stats.chi2.ppf(q, 2 * total + extra) / 2 for q, extra in ((0.025, 0), (0.975, 2)))
        print(f"all: {total / total_days * 90:.2f} per 90 days, exact 95 % interval "
              f"{low / total_days * 90:.2f} to {high / total_days * 90:.2f}")  # fmt: skip


if __name__ == "__main__":
    main()
