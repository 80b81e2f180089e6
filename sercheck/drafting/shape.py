"""What a history asks of its rule file: batches, seasons, clock, whether people make it; depends on ``portrait``."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

from sercheck.guess_clock import ZONES, calendar_seasons
from sercheck.intake.layout import Layout
from sercheck.portrait.series import Portrait
from sercheck.portrait.whole import Study
from sercheck.recent import FEWEST, FEWEST_WEEKS
from sercheck.rulebook.lengths import mean_seconds

FEW = 13
"""Rows of a batch from which it is judged like a day of hours (ours: half a day of them, and one more)."""
MINUTES = 24
"""Rows of an hour from which a history of few days is judged by the hour: as many as a day of hours has."""
MOST_OF = 0.5
"""Share of the series in which a season must be found to be a season of the column (ours)."""
LONG_BATCHES = 36
"""Batches in which one false hold is allowed where batches come more seldom than once a week: ninety days hold three
monthly ones, and a gate that held one in three would be none (ours: three years of months)."""

Kind = Literal["days", "weeks", "single", "irregular"]


@dataclass(frozen=True)
class Shape:
    """What the rules are chosen by.

    Attributes:
        layout: the feed's columns, cadence and zone.
        feed: its name, a word.
        kind: batches of many rows, of a few (a week of days), of one, or rows without a cadence.
        batch_every: how often a batch comes; None for an irregular feed.
        batch_rows: rows of a series in a batch, about.
        seasons: the seasons that the file declares, shortest first, as it writes them.
        season: the longest of them within a batch, or None.
        seasonal: the value columns that have it.
        people: there is a cycle by week, so people make the feed rather than the weather.
        year: steps of a year where its season was found.
        clock: the zone that the daily cycle follows where that is not the stamps' own, or None.
        fewest: batches of history that the rules of the recent past need.
        series: number of series.
    """

    layout: Layout
    feed: str
    kind: Kind
    batch_every: str | None
    batch_rows: int
    seasons: Mapping[str, str | int]
    season: str | None
    seasonal: tuple[str, ...]
    people: bool
    year: int | None
    clock: str | None
    fewest: int
    series: int


def shape_of(study: Study, batch_every: str | None = None) -> Shape:
    """Choose batches and seasons for a feed that was studied.

    Args:
        study: the history.
        batch_every: how often a batch comes, where that is known.
    """
    every = study.layout.every
    batch = batch_every or _batch(study)
    rows = 0 if batch is None else max(round((mean_seconds(batch) or 0) / (mean_seconds(every) or 1)), 1)
    kind: Kind = "irregular" if batch is None else "single" if rows < 2 else "weeks" if rows < FEW else "days"
    calendar = calendar_seasons(every)
    found = {name: columns for name in calendar if (columns := _columns(study, calendar[name][0]))}
    year = calendar["year"][0] if "year" in found else None
    if kind == "single":
        kept = {name: calendar[name] for name in found}
    else:
        kept = {name: calendar[name] for name in found if name != "year"}
        if not any(steps <= rows for steps, _ in kept.values()):
            kept = {}  # a window shorter than the shortest season is compared with nothing
    if not kept and kind in ("days", "weeks"):
        steps = _unnamed(study, rows)
        if steps:
            kept, found = {"cycle": (steps, steps)}, {"cycle": _columns(study, steps)}
    ordered = sorted(kept, key=lambda name: kept[name][0])
    within = [name for name in ordered if kept[name][0] <= rows]
    season = within[-1] if within else ordered[-1] if ordered and kind == "single" else None
    if "week" in kept and kind == "days" and len(found["week"]) < MOST_OF * len(found[season or "week"]):
        ordered.remove("week")  # it would put the profile of most columns on too few days
    return Shape(
        layout=study.layout,
        feed=_word(study.feed),
        kind=kind,
        batch_every=batch,
        batch_rows=rows,
        seasons={name: kept[name][1] for name in ordered},
        season=season,
        seasonal=tuple(found[season]) if season else (),
        people="week" in ordered,
        year=year,
        clock=_moved_clock(study),
        fewest=FEWEST_WEEKS if rows <= 7 else FEWEST,
        series=study.series,
    )


def budget_of(shape: Shape) -> str | None:
    """The alarm budget where none is asked for: one false hold in ninety days, or in as many long batches."""
    if shape.batch_every is None:
        return None
    days = (mean_seconds(shape.batch_every) or 0) / 86400
    return "1 per 90D" if days <= 8 else f"1 per {round(LONG_BATCHES * days)}D"


def _batch(study: Study) -> str | None:
    """A day of rows, a week of days, else one row; an hour where the history is no months but the rows are many."""
    every = study.layout.every
    seconds = mean_seconds(every)
    if seconds is None:
        return None
    if seconds > 3.5 * 86400:
        return every
    if seconds > 86400 / FEW:
        return "7D"
    days = study.steps * seconds / 86400
    return "1h" if days < FEWEST and 3600 / seconds >= MINUTES else "1D"


def _columns(study: Study, steps: int) -> list[str]:
    """The columns in most of whose series a season was found."""
    return [
        column
        for column in study.layout.values
        if _share([one for one in study.portraits if one.column == column], steps) >= MOST_OF
    ]


def _share(portraits: list[Portrait], steps: int) -> float:
    having = sum(any(season.steps == steps for season in one.seasons) for one in portraits)
    return having / len(portraits) if portraits else 0.0


def _unnamed(study: Study, most: int) -> int:
    """The strongest season within a batch that no calendar names, 0 for none."""
    for one in study.portraits:
        for season in one.seasons:
            if 2 <= season.steps <= most and _columns(study, season.steps):
                return season.steps
    return 0


def _moved_clock(study: Study) -> str | None:
    """The zone at whose clock changes most daily cycles move."""
    told = [found for one in study.portraits for found in one.findings if found.what == "cycle moves at clock changes"]
    if len(told) < MOST_OF * max(len(study.portraits), 1):
        return None
    places = {zone: zone.split("/")[-1].replace("_", " ") for zone in ZONES}
    texts = [found.about for found in told]
    counts = {zone: sum(f"clock changes of {place} " in text for text in texts) for zone, place in places.items()}
    best = max(counts, key=lambda zone: counts[zone])
    return best if counts[best] else None


def _word(name: str) -> str:
    """A file's name as the name of a feed."""
    stem = re.sub(r"(\.(csv|tsv|txt|tab|parquet|pq|jsonl|ndjson|json|gz))+$", "", name)
    word = re.sub(r"[^A-Za-z0-9_-]+", "_", stem.split("?table=")[-1]).strip("_-")
    return word[:60] or "feed"


