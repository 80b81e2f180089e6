"""How often faults in real feeds are found, as one table: all feeds and weather apart, beside the figures aimed at."""

from __future__ import annotations

from dataclasses import dataclass, field

from scipy import stats

AIM = {
    "shuffled": ("0.81", "0.66"),
    "filled forward 30 %": ("0.72/0.81", "0.29/0.45"),
    "stuck 6 h": ("0.81", "0.47"),
    "yesterday again": ("0.97", "0.91/0.99"),
    "last week again": ("0.97", "0.91/0.99"),
    "noise instead": ("0.63/0.90", "0.70/0.86"),
    "flattened": ("0.61", "0.13"),
    "smoothed over 3": ("0.10/0.48", "0.06-0.2"),
    "season halved": ("0.57/0.68", "0.11/0.26"),
    "slipped by one hour": ("0.34/0.68", "0.10/0.25"),
    "times 1.2": ("0.22/0.29", "0.55/0.60"),
}
"""Found on the first day / within seven when the method was chosen, on other real feeds than these: all, weather."""


@dataclass
class Found:
    """What was found of the faults put into the columns of one feed: by fault tried, first day, within seven."""

    feed: str
    weather: bool
    counts: dict[str, list[int]] = field(default_factory=dict)

    def add(self, fault: str, tried: int, first: int, week: int) -> None:
        """Count further trials."""
        old = self.counts.get(fault, [0, 0, 0])
        self.counts[fault] = [old[0] + tried, old[1] + first, old[2] + week]


def share(hits: int, tried: int) -> str:
    """A share with its exact 95 % interval (Clopper and Pearson 1934)."""
    if not tried:
        return "-"
    low = stats.beta.ppf(0.025, hits, tried - hits + 1) if hits else 0.0
    high = stats.beta.ppf(0.975, hits + 1, tried - hits) if hits < tried else 1.0
    return f"{hits / tried:.2f} ({low:.2f}-{high:.2f})"


def vote(found: list[Found], fault: str, place: int) -> float:
    """Mean over the feeds of the share found: each feed has one vote, however many columns or days it has."""
    shares = [one.counts[fault][place] / one.counts[fault][0] for one in found if one.counts.get(fault, [0])[0]]
    return sum(shares) / len(shares) if shares else float("nan")


def table(found: list[Found]) -> list[str]:
    """Lines: every trial with its exact interval, each feed with one vote, and the figures aimed at."""
    lines = []
    found = [one for one in found if one.counts]
    for title, part, column in (("all", found, 0), ("weather", [one for one in found if one.weather], 1)):
        if not part:
            continue
        lines.append(f"{title:20s} {'first day':17s} {'within seven':17s} {'a vote each':11s}  aimed at")
        for fault in part[0].counts:
            tried, first, week = (sum(one.counts.get(fault, [0, 0, 0])[k] for one in part) for k in range(3))
            votes = f"{vote(part, fault, 1):.2f}/{vote(part, fault, 2):.2f}"
            lines.append(f"{fault:20s} {share(first, tried):17s} {share(week, tried):17s} {votes:11s}  "
                         f"{AIM.get(fault, ('', ''))[column]}  of {tried}")  # fmt: skip
    return lines
