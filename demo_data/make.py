"""Makes the demo: hourly heat of twelve substations of an invented district-heating company, and day batches of it.

Run ``python demo_data/make.py`` to make the files anew; the seed is fixed, so they come out the same. The readings are
invented and serve the demo only. Every broken batch keeps the row count, the range and the number of empty cells of a
healthy one: what is wrong with it is the order and the memory of the values.
"""

from __future__ import annotations

from pathlib import Path
from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd

HERE = Path(__file__).parent
SEED = 20260119
ZONE = ZoneInfo("Europe/Oslo")
STATIONS = [
    "Askebakken", "Bjerkeli", "Dalsvingen", "Eikhaugen", "Furumo", "Granlia",
    "Heggveien", "Kirsebakk", "Lindetunet", "Orefaret", "Rognestien", "Seljehagen",
]  # fmt: skip
WEEKS = 16
BATCH_DAY = "2026-01-19"
SWAPPED = ("Kirsebakk", "Lindetunet")


def heat(rng: np.random.Generator, hours: pd.DatetimeIndex) -> pd.DataFrame:
    """Hourly heat in kWh, one column a substation: daily and weekly cycle on the local clock, correlated noise."""
    local = hours.tz_convert(ZONE)
    hour, weekend = local.hour.to_numpy(), local.day_of_week.to_numpy() >= 5
    weather = ar1(rng, len(hours), memory=0.95, spread=0.045)
    table = {}
    for station in STATIONS:
        base, early, late = rng.uniform(60, 240), rng.uniform(5.5, 9.0), rng.uniform(16.5, 21.0)
        morning = np.exp(-0.5 * ((hour - early - 2.5 * weekend) / 2.2) ** 2) * np.where(weekend, 0.75, 1.0)
        evening = np.exp(-0.5 * ((hour - late) / 2.8) ** 2)
        peaks = rng.uniform(0.35, 0.55) * morning + rng.uniform(0.25, 0.4) * evening
        noise = ar1(rng, len(hours), memory=0.6, spread=0.05)
        table[station] = np.round(base * (0.8 + peaks + weather + noise), 1)
    return pd.DataFrame(table, index=hours)


def ar1(rng: np.random.Generator, n: int, *, memory: float, spread: float) -> np.ndarray:
    """A first-order autoregression with the given standard deviation."""
    shocks = rng.normal(0, spread * np.sqrt(1 - memory**2), n)
    shocks[0] = rng.normal(0, spread)
    values = np.empty(n)
    last = 0.0
    for step, shock in enumerate(shocks):
        last = memory * last + shock
        values[step] = last
    return values


def shuffled(rng: np.random.Generator, day: np.ndarray) -> np.ndarray:
    """The day's hours in random order."""
    return rng.permutation(day)


def filled_forward(rng: np.random.Generator, day: np.ndarray) -> np.ndarray:
    """A third of the hours lost and filled with the value before."""
    lost = np.zeros(len(day), dtype=bool)
    lost[1 + rng.choice(len(day) - 1, len(day) // 3, replace=False)] = True
    kept = np.maximum.accumulate(np.where(lost, 0, np.arange(len(day))))
    return day[kept]


def stuck(rng: np.random.Generator, day: np.ndarray) -> np.ndarray:
    """The meter shows the same value for nine hours."""
    first = int(rng.integers(4, len(day) - 10))
    result = day.copy()
    result[first : first + 9] = day[first]
    return result


def noise_instead(rng: np.random.Generator, day: np.ndarray) -> np.ndarray:
    """Independent noise with the day's own mean, spread and range."""
    return np.round(np.clip(rng.normal(day.mean(), day.std(), len(day)), day.min(), day.max()), 1)


def rows_twice(_: np.random.Generator, day: np.ndarray) -> np.ndarray:
    """Every second hour carries the row before it again."""
    return np.repeat(day[::2], 2)[: len(day)]


def smoothed(_: np.random.Generator, day: np.ndarray) -> np.ndarray:
    """A running mean over three hours, as a gateway makes that averages before it sends."""
    padded = np.concatenate((day[:1], day, day[-1:]))
    return np.round(np.convolve(padded, np.ones(3) / 3, mode="valid"), 1)


def flattened(_: np.random.Generator, day: np.ndarray) -> np.ndarray:
    """The daily cycle all but gone: what is metered is the return pipe."""
    return np.round(day.mean() + 0.15 * (day - day.mean()), 1)


FAULTS = {
    "shuffled": shuffled,
    "filled_forward": filled_forward,
    "stuck": stuck,
    "noise_instead": noise_instead,
    "rows_twice": rows_twice,
    "smoothed": smoothed,
    "flattened": flattened,
}


def slipped(table: pd.DataFrame, day: pd.Timestamp) -> pd.DataFrame:
    """All clocks an hour late: each stamp carries the reading of the hour before."""
    return table.shift(1)[table.index >= day]


def yesterday_again(table: pd.DataFrame, day: pd.Timestamp) -> pd.DataFrame:
    """The delivery of the day before under today's stamps."""
    return table.shift(24)[table.index >= day]


def keys_swapped(table: pd.DataFrame, day: pd.Timestamp) -> pd.DataFrame:
    """Two meters of like size were exchanged in the register."""
    swapped = table[table.index >= day].copy()
    one, other = SWAPPED
    swapped[[one, other]] = swapped[[other, one]].to_numpy()
    return swapped


WHOLE = {"slipped": slipped, "yesterday_again": yesterday_again, "keys_swapped": keys_swapped}
"""Faults that move readings between days or meters."""


def long_form(table: pd.DataFrame) -> pd.DataFrame:
    """One row a reading: stamp in UTC, substation, kWh; time-major as meters deliver."""
    rows = table.rename_axis("read_at").reset_index().melt("read_at", var_name="substation", value_name="kwh")
    rows = rows.sort_values(["read_at", "substation"], kind="stable")
    rows["read_at"] = rows["read_at"].dt.strftime("%Y-%m-%dT%H:%M:%SZ")
    return rows


def main() -> None:
    """Write history and batches."""
    rng = np.random.default_rng(SEED)
    day = pd.Timestamp(BATCH_DAY, tz=ZONE)
    hours = pd.date_range(day - pd.Timedelta(weeks=WEEKS), day + pd.Timedelta(days=1), freq="h", inclusive="left")
    table = heat(rng, hours.tz_convert("UTC"))
    past = table[table.index < day].copy()
    past.iloc[900:942, 4] = np.nan  # a lost connection: 42 hours of one substation were never delivered
    past = long_form(past).dropna()
    past.to_csv(HERE / "history.csv.gz", index=False, compression={"method": "gzip", "mtime": 0})
    batch = table[table.index >= day]
    (HERE / "batches").mkdir(exist_ok=True)
    long_form(batch).to_csv(HERE / "batches" / "healthy.csv", index=False)
    for name, move in WHOLE.items():
        long_form(move(table, day)).to_csv(HERE / "batches" / f"{name}.csv", index=False)
    for name, fault in FAULTS.items():
        broken = batch.apply(lambda column, fault=fault: fault(rng, column.to_numpy()), raw=False)
        long_form(pd.DataFrame(broken, index=batch.index)).to_csv(HERE / "batches" / f"{name}.csv", index=False)


if __name__ == "__main__":
    main()
