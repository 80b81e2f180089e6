"""Is the right cause named: every fault of the catalogue in simulated feeds, and the table of what was named for it.

Run it with ``python -m tests.causes`` (``--replications 200 --n 168 336 24``). Hourly feeds have a strong daily cycle
with weekly modulation and AR(1) noise, daily feeds a weekly cycle; the daily windows that stand beside 24, 168 and 336
hours are one, four and eight weeks. A fault counts where the battery detects it: level, spread, innovations variance,
amplitude, phase, autocorrelation of the difference, roughness and repeats (run and share) against the recent past, each
at a risk of 1/720, or stretches that came before.

With ``--together`` the series come in batches of twelve, of which all are broken alike, and each is judged with the
others of its batch, as ``gate`` does it; without it each is judged by itself.
"""

from __future__ import annotations

import argparse
import sys
from collections import Counter
from collections.abc import Collection
from dataclasses import dataclass

import numpy as np

from sercheck import causes
from sercheck.cause import likely_causes
from sercheck.grid import Axis, Panel
from sercheck.measure import Question, Stays
from sercheck.measures import get
from sercheck.recent import recent_past
from sercheck.rehearsal.faults import Fault, catalogue
from sercheck.serial.replay import seen_before

HOUR = 3_600_000_000_000
RISK = 1 / 720
"""Risk of each measure of the battery: eight of them, one false hold in 90 days."""

REPEATS = get("repeats")


@dataclass(frozen=True)
class Kind:
    """A kind of feed: its cadence and its two seasons in steps."""

    name: str
    step: int
    season: str
    lengths: dict[str, int]


HOURLY = Kind("hourly", HOUR, "day", {"day": 24, "week": 168})
DAILY = Kind("daily", 24 * HOUR, "week", {"week": 7})
DAILY_WINDOWS = {24: 7, 168: 28, 336: 56}
BATCH = 12
"""Series of a batch that are judged together, as many as the demo has."""


def axis(kind: Kind, steps: int) -> Axis:
    """An axis that begins with all seasons."""
    index = np.arange(steps, dtype=np.int64)
    return Axis(
        stamps=np.datetime64("2026-01-05T00", "ns").astype(np.int64) + index * kind.step,
        index=index,
        lengths=dict(kind.lengths),
        phases={name: index % length for name, length in kind.lengths.items()},
        closed=np.zeros(steps, dtype=bool),
        expected=np.ones(steps, dtype=bool),
    )


def simulate(kind: Kind, series: int, steps: int, rng: np.random.Generator) -> np.ndarray:
    """Level 40 to 80, a cycle of 6 to 12 of each series' own shape, AR(1) noise of standard deviation 2."""
    from scipy.signal import lfilter

    t = np.arange(steps)
    size = rng.uniform(6, 12, size=(series, 1))
    if kind is HOURLY:
        late, second = rng.uniform(0, 24, size=(series, 1)), rng.uniform(0, 24, size=(series, 1))
        day = np.sin(2 * np.pi * (t - late) / 24) + 0.4 * np.sin(4 * np.pi * (t - second) / 24)
        weekend = (t // 24 % 7) >= 5
        cycle = size * day * (1 - 0.3 * weekend) - 3 * weekend
    else:
        cycle = size * rng.normal(size=(series, 7))[:, t % 7]
    noise = np.empty((series, steps))
    for row, phi in enumerate(rng.uniform(0.3, 0.8, size=series)):
        e = rng.normal(size=steps + 200) * 2 * np.sqrt(1 - phi**2)
        noise[row] = lfilter([1.0], [1.0, -phi], e)[200:]
    return rng.uniform(40, 80, size=(series, 1)) + cycle + noise


def history_steps(kind: Kind, n: int) -> int:
    """Ninety windows and two weeks for a day, else twenty windows and eight weeks."""
    return 104 * n if n <= 24 else 20 * n + 8 * kind.lengths["week"]


def detected(panel: Panel) -> np.ndarray:
    """Series in which any measure of the battery fails, shape (S,)."""
    past = recent_past(panel)
    found = np.zeros(len(panel.values), dtype=bool)
    looks = [past.level, past.spread, past.innovations_variance, past.amplitude, past.phase,
             past.difference_autocorrelation, past.roughness]  # fmt: skip
    with np.errstate(invalid="ignore"):
        for look in looks:
            reference = look().reference
            up, down = reference.p_value("upper")[:, 0], reference.p_value("lower")[:, 0]
            found |= 2 * np.minimum(up, down) <= RISK
        for look in ("run", "share"):
            told = REPEATS.run(panel, Question(REPEATS.Fields(look=look), Stays("like_history"), RISK))
            assert told.upper is not None
            found |= told.upper.p_value("upper")[:, 0] <= RISK
    seen = seen_before(panel.values, panel.start)
    missing = np.isnan(panel.window).mean(axis=1) > 0.05
    return found | (np.nansum(seen.batch, axis=1) >= 3) | missing


def panel_of(values: np.ndarray, start: int, kind: Kind) -> Panel:
    """History and window as the finder gets them."""
    return Panel(values, start, axis(kind, values.shape[1]), ~np.isnan(values), "value")


@dataclass
class Row:
    """What was named for one fault of one size."""

    fault: Fault
    size: float
    tried: int
    caught: int
    named: Counter[str]
    summary: str

    @property
    def right(self) -> float:
        """Share of the detected cases whose first cause is the right one."""
        return self.named[self.fault.cause] / max(self.caught, 1)


def run(
    kind: Kind, n: int, series: int, seed: int, names: Collection[str] = (), *, together: bool = False
) -> tuple[list[Row], float, list[str]]:
    """Every fault (of some names) in windows of n steps; the rows, the share of healthy windows with a cause, which."""
    rng = np.random.default_rng([seed, n, len(kind.name)])
    start = history_steps(kind, n)
    values = simulate(kind, series, start + n, rng)
    healthy = likely_causes(panel_of(values, start, kind), kind.season, shared=together)
    falsely = float(np.mean(healthy.kind != causes.UNKNOWN))
    false_names = healthy.kind[healthy.kind != causes.UNKNOWN]
    rows = []
    for fault in catalogue():
        if names and fault.name not in names:
            continue
        steps = fault.steps(kind.lengths, start)
        if not fault.fits(series, n, start, steps):
            continue
        for size in fault.sizes:
            asked = series // 2 if fault.fewest_series > 1 else size
            broken = values.copy()
            broken[:, start:] = fault.apply(values[:, start:], values[:, :start], asked, rng, steps)
            panel = panel_of(broken, start, kind)
            caught = detected(panel)
            named = likely_causes(panel, kind.season, shared=together)
            picked = Counter(named.kind[caught].tolist())
            rows.append(Row(fault, size, series, int(caught.sum()), picked, named.of_the_batch()[0]))
    return rows, falsely, false_names


def run_together(kind: Kind, n: int, batches: int, seed: int, names: Collection[str] = ()) -> list[Row]:
    """Every fault in batches of twelve series that are judged together; the summary counts the batches named right."""
    parts = [run(kind, n, BATCH, seed + 1000 * batch, names, together=True)[0] for batch in range(batches)]
    rows = []
    for same in zip(*parts, strict=True):
        right = sum(row.summary.startswith(row.fault.cause) for row in same)
        rows.append(
            Row(same[0].fault, same[0].size, sum(row.tried for row in same), sum(row.caught for row in same),
                sum((row.named for row in same), Counter()), f"{right} of {batches} batches")
        )  # fmt: skip
    return rows


def table(rows: list[Row]) -> str:
    """The confusion table as text: tried, detected, right, and what else was named."""
    lines = [f"{'fault':32s} {'caught':>9s} {'right':>6s}  named (batch)"]
    for row in rows:
        others = ", ".join(f"{cause} {count}" for cause, count in row.named.most_common(4))
        name = f"{row.fault.name} {row.size:g}"
        mark = " " if row.right >= 0.75 or not row.caught else "*"
        lines.append(f"{name:32s} {row.caught:4d}/{row.tried:4d} {row.right:6.2f}{mark} {others} ({row.summary})")
    return "\n".join(lines)


def overall(rows: list[Row]) -> float:
    """Share of right names over all detected cases."""
    return sum(row.named[row.fault.cause] for row in rows) / max(sum(row.caught for row in rows), 1)


def main(argv: list[str]) -> int:
    """Print the tables."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--replications", type=int, default=100)
    parser.add_argument("--n", type=int, nargs="*", default=[168, 336, 24], choices=sorted(DAILY_WINDOWS))
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--together", action="store_true", help="batches of twelve series, each judged as one")
    asked = parser.parse_args(argv)
    for hours in asked.n:
        for kind, n in ((HOURLY, hours), (DAILY, DAILY_WINDOWS[hours])):
            if asked.together:
                rows = run_together(kind, n, max(asked.replications // BATCH, 1), asked.seed)
                print(f"\n{kind.name}, windows of {n}, batches of {BATCH}: right {overall(rows):.3f}")
                print(table(rows))
                sys.stdout.flush()
                continue
            rows, falsely, names = run(kind, n, asked.replications, asked.seed)
            print(
                f"\n{kind.name}, windows of {n}: right {overall(rows):.3f}; healthy windows with a cause {falsely:.3f}"
                f" {dict(Counter(names))}"
            )
            print(table(rows))
            sys.stdout.flush()
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
