"""How often ``study`` names the right seasons of simulated feeds, or none rightly, and what it says of real ones.

Run it with ``python -m tests.study_seasons`` (eighty seconds of one processor; ``--feeds N`` simulated feeds of each
kind, 400 without it). Shares stand with their exact 95 % intervals (Clopper and Pearson 1934). Each feed is looked at
twice: knowing nothing of a calendar, and knowing the names that the calendar has for its season, as ``study`` does
when the cadence is found.

A seasonal feed has ten cycles or 120 steps, half of its variance in the season, the rest AR(1) noise with φ of 0 or
.6; the season's shape is a sine, a sine with two harmonics (amplitudes 1, .6, .3 and random phases), or an independent
draw for each place of the cycle. Two seasons have .45 and .25 of the variance. A trend adds three standard deviations
over the history, missing values are one in ten at random.

Measured with the seed as it stands: the right season first (of two, both named) in .987 of the feeds when the calendar
names it (.983-.990) and in .972 when it does not (.967-.977); no season claimed for .9993 of feeds without one
(.9988-.9996). Weak cells: 12 steps in 120 without a calendar .92 (.89-.95), 7 and 12 together in 120 steps .90
(.86-.92) and .83 (.79-.87). All seasonal series of the reference are right, none of the others gets one, but for wind
power, whose day holds 1.2 % of the variance (p 8e-5); a year of bicycle counts is named as 8736 hours, 52 weeks.
"""

from __future__ import annotations

import argparse
from collections import Counter

import numpy as np
from scipy import signal, stats

from sercheck.serial.periods import find_seasons
from tests.reference_values import FOLDER

SEASONS = (4, 7, 12, 24, 48, 96, 168)
PAIRS = ((24, 168), (48, 336), (96, 672), (7, 24), (7, 12))
SHAPES = ("sine", "harmonics", "draws")
CYCLES, LEAST = 10, 120
SEASONAL = {"AirPassengers": 12, "UKgas": 4, "co2": 12, "nottem": 12}
"""Series of the reference that have a season; all others have none."""


def noise(rng, series, steps, phi):
    """AR(1) noise of variance 1 after a run-in; phi of 1 is a random walk."""
    shocks = rng.normal(size=(series, steps + 500))
    if phi == 1:
        return np.cumsum(shocks[:, 500:], axis=1)
    return signal.lfilter([1], [1, -phi], shocks, axis=1)[:, 500:] * np.sqrt(1 - phi**2)


def profile(rng, series, length, shape):
    """One cycle of mean 0 and variance 1 for each series."""
    place = np.arange(length) / length
    if shape == "draws":
        cycle = rng.normal(size=(series, length))
    else:
        sizes = [1.0] if shape == "sine" else [1.0, 0.6, 0.3][: max(1, (length - 1) // 2)]
        cycle = sum(
            size * np.sin(2 * np.pi * (h * place + rng.random((series, 1)))) for h, size in enumerate(sizes, start=1)
        )
    cycle = cycle - cycle.mean(axis=1, keepdims=True)
    return cycle / cycle.std(axis=1, keepdims=True)


def feed(rng, series, seasons, shape, phi, *, trend=False, missing=False):
    """Feeds with one or two seasons; returns (series, steps)."""
    steps = max(CYCLES * max(seasons), LEAST)
    shares = [0.5] if len(seasons) == 1 else [0.45, 0.25]
    x = np.sqrt(1 - sum(shares)) * noise(rng, series, steps, phi)
    for share, length in zip(shares, seasons, strict=True):
        x = x + np.sqrt(share) * profile(rng, series, length, shape)[:, np.arange(steps) % length]
    if trend:
        x = x + 3 * np.arange(steps) / steps
    return np.where(rng.random(x.shape) < 0.1, np.nan, x) if missing else x


def right(x, seasons, *, known):
    """Whether the first season is right and, of two, the other is named too; one flag a series."""
    found = find_seasons(x, seasons if known else ()).steps
    first = found[:, 0] == seasons[0] if found.shape[1] else np.zeros(len(x), dtype=bool)
    return first & np.all([(found == s).any(axis=1) for s in seasons], axis=0)


def told(name, hits, count):
    """One line: the share with its exact interval."""
    low, high = stats.binomtest(hits, count).proportion_ci(0.95, "exact")
    print(f"{name:44s} {hits / count:.4f}  ({low:.4f} to {high:.4f}, {hits} of {count})", flush=True)


def seasonal(feeds, rng):
    """Shares of feeds whose seasons are named."""
    sums: Counter = Counter()
    counts: Counter = Counter()
    for seasons in (*((s,) for s in SEASONS), *PAIRS):
        each = max(feeds // (len(SHAPES) * 2 * 4), 2)
        for shape in SHAPES:
            for phi in (0.0, 0.6):
                for trend in (False, True):
                    for missing in (False, True):
                        x = feed(rng, each, seasons, shape, phi, trend=trend, missing=missing)
                        for known in (True, False):
                            hits = int(right(x, seasons, known=known).sum())
                            way = "calendar" if known else "unknown"
                            for key in ((seasons, way), (shape, way), ("all", way)):
                                sums[key] += hits
                                counts[key] += each
                            extra = "trend and missing" if trend and missing else "trend" if trend else "missing"
                            if trend or missing:
                                sums[extra, way] += hits
                                counts[extra, way] += each
    for key, count in sorted(counts.items(), key=str):
        told(f"right, {key[1]}: {key[0]}", sums[key], count)


def healthy(feeds, rng):
    """Shares of feeds without a season for which none is named."""
    natural = {100: (12,), 730: (7, 365), 2016: (24, 168)}
    total = clean = 0
    for name, phi in (("white noise", 0.0), ("AR(1) .9", 0.9), ("random walk", 1.0)):
        for steps, names in natural.items():
            none = 0
            for _ in range(5):
                none += int((find_seasons(noise(rng, feeds, steps, phi), names).steps == 0).all(axis=1).sum())
            told(f"none claimed: {name}, {steps} steps", none, 5 * feeds)
            total, clean = total + 5 * feeds, clean + none
    told("none claimed: all", clean, total)


def references():
    """What is said of the real series and feeds."""
    from sercheck import study

    for path in sorted([*(FOLDER / "data").glob("*.csv"), *(FOLDER / "feeds").glob("*.csv.gz")]):
        seen = study(path)
        for one in sorted(seen.portraits, key=lambda each: (each.series, each.column)):
            seasons = ", ".join(f"{s.steps} ({100 * s.share:.1f} %, p {s.p_value:.1e})" for s in one.seasons) or "none"
            print(f"{path.name.split('.')[0]:28s} {one.series:5s} {one.column:12s} {seasons}", flush=True)


def main() -> None:
    """Print all three."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--feeds", type=int, default=400, help="simulated feeds of each kind")
    parser.add_argument("--seed", type=int, default=11)
    asked = parser.parse_args()
    rng = np.random.default_rng(asked.seed)
    healthy(asked.feeds, rng)
    seasonal(asked.feeds, rng)
    references()


if __name__ == "__main__":
    main()
