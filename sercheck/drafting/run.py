"""``sercheck.draft``: a complete, commented rule file for a feed, from its history alone."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from sercheck.drafting.candidates import candidates
from sercheck.drafting.entry import Entry
from sercheck.drafting.exact_rules import exact_rules
from sercheck.drafting.figures import figures_of
from sercheck.drafting.maker import Maker
from sercheck.drafting.preface import Story, head, hints, notes
from sercheck.drafting.shape import Shape, budget_of, shape_of
from sercheck.drafting.text import written
from sercheck.errors import UsageError
from sercheck.intake.stream import open_feed
from sercheck.intake.zone import Zone
from sercheck.portrait.whole import named_index, study
from sercheck.recent import BATCHES
from sercheck.rehearsal.feed import LEAST_LEFT, Feed, read_feed
from sercheck.rulebook import load_rules
from sercheck.rulebook.lengths import allowed_alarms, cadence, mean_seconds
from sercheck.serial.arrays import Ints

if TYPE_CHECKING:
    import pandas as pd

    Given = str | Path | Sequence[str | Path] | pd.DataFrame

MOST_BATCHES, LEAST_BATCHES = 365, 28
"""Batches that are rehearsed, the newest ones: a year of days shows every season of the weather and every holiday; four
weeks where the feed is so wide that more would take long (ours)."""
MOST_CELLS = 1 << 19
"""Values of the batches that are rehearsed, about (ours: a few minutes of one processor)."""
PROBED = 7
"""Batches judged where nothing is rehearsed, to see which rules can decide (ours)."""
LAST_PART = 1 / 3
"""Share of a short history whose batches are judged against the rest, to see what can be decided (ours)."""


ANY = Entry("any", (("measure", "spacing"), ("look", "gaps"), ("stays", "{below: 1}")), "-")
"""A rule, so that there is a rule file by which history can be cut."""


@dataclass(frozen=True)
class Draft:
    """A drafted rule file.

    Attributes:
        text: the YAML.
        left_out: names of rules that are not in it, and why.
        notes: what a person should know, a sentence each.
        rules: number of its rules.
        within: its rehearsal kept its budget; None where it was not rehearsed.
    """

    text: str
    left_out: tuple[tuple[str, str], ...]
    notes: tuple[str, ...]
    rules: int
    within: bool | None


def draft(
    history: Given,
    *,
    time: str | None = None,
    series: Sequence[str] | None = None,
    values: Sequence[str] | None = None,
    every: str | None = None,
    timezone: str | None = None,
    batch_every: str | None = None,
    false_holds: str | None = None,
    rehearsal: bool = True,
    batches: int | None = None,
    workers: int = 1,
    command: str = "",
    tell: Callable[[float, str], None] | None = None,
) -> Draft:
    """Write a first rule file for a feed: columns, cadence, seasons, and the rules that suit it.

    The rules that suit the kind of feed are rehearsed on its own healthy batches; those that cannot decide are left
    out, those that hold more often than their share only note, until the file keeps its alarm budget.

    Args:
        history: rows that were let in: files, a glob, or a DataFrame.
        time: the time column; found where it is not given, as are the next four.
        series: the key columns; an empty list for a feed of one series.
        values: the value columns.
        every: the cadence.
        timezone: the zone of stamps without an offset.
        batch_every: how often a batch comes; by default a day of rows, a week of days, or one longer step.
        false_holds: the alarm budget; default ``1 per 90D`` (three years for monthly batches).
        rehearsal: rehearse all of ``batches``; without it one batch shows which rules can decide, and no false hold is
            counted.
        batches: how many of the newest batches are rehearsed at most; by default 365, fewer where the feed is wide.
        workers: processes; more than 1 want the caller's program guarded by ``if __name__ == "__main__"``.
        command: how it was called, for the file's head.
        tell: is told the share that is done of each step, and what is being done.

    Raises:
        SercheckError: the history cannot be read, has no time or value column, or an argument is wrong.
    """
    if (batches is not None and batches < 1) or workers < 1:
        raise UsageError("draft", f"{batches} batches in {workers} processes", "positive numbers")
    _must_read("--false-holds", allowed_alarms, false_holds)
    _must_read("--batch-every", cadence, batch_every)
    history = named_index(history)
    seen = study(
        history, time=time, series=series, values=values, every=every, timezone=timezone, progress=tell
    )  # fmt: skip
    step = mean_seconds(seen.layout.every)
    if batch_every is not None and (step is None or (mean_seconds(batch_every) or 0) < 0.9 * step):
        wanted = f"one step of {seen.layout.every} at least" if step else "none: the feed has no cadence"
        raise UsageError("--batch-every", f"'{batch_every}'", wanted)
    shape = shape_of(seen, batch_every)
    budget = None if shape.batch_every is None else false_holds or budget_of(shape)
    source = open_feed(history, shape.layout)
    feed = _cut(shape, budget, history, seen.stamps)
    figures = figures_of(source.rows(), seen.steps, source.fingerprint, feed)
    maker = Maker(shape, budget, history, workers, tell)
    for entries, left in (candidates(shape, figures), exact_rules(shape, figures)):
        maker.entries += entries
        maker.left += left
    count = 0 if feed is None else len(feed.edges)
    rehearsed = rehearsal and count > shape.fewest
    if count <= shape.fewest:
        maker.only_note(count)
    if feed is not None:
        maker.rehearse(_begins(feed, shape, (batches or _most(shape)) if rehearsal else PROBED), many=rehearsed)
    story = Story(seen, shape, figures, budget, maker.trial, rehearsed, maker.within, command)
    text = written(shape, budget, head(story), maker.commented(), maker.left, hints(story))
    load_rules(text)
    told = tuple((one.name, one.reason) for one in maker.left)
    return Draft(text, told, notes(story), len(maker.entries), maker.within if rehearsed else None)


def _cut(shape: Shape, budget: str | None, history: Given, stamps: Ints) -> Feed | None:
    """The history in batches; None where it cannot be cut, or is one batch."""
    if shape.batch_every is None or len(stamps) < 2:
        return None
    book = load_rules(written(shape, budget, ["-"], [ANY], [], []))
    begins = _date(int(stamps[int(len(stamps) * (1 - LAST_PART))]), shape.layout.timezone)
    try:
        return read_feed(book, history, begins)
    except UsageError:  # one batch leaves none before it
        return None


def _begins(feed: Feed, shape: Shape, most: int) -> str:
    """The local date from which the newest batches are judged: as a rehearsal would begin, or later."""
    count = len(feed.edges)
    if count > shape.fewest:
        first = BATCHES if count >= BATCHES + LEAST_LEFT else shape.fewest
    else:
        first = max(int(count * (1 - LAST_PART)), 1)
    first = max(first, count - most)
    return _date(int(feed.axis.stamps[feed.edges[first, 0]]), shape.layout.timezone)


def _must_read(place: str, parse: Callable[[str], object], given: str | None) -> None:
    try:
        if given is not None:
            parse(given)
    except ValueError as trouble:
        raise UsageError(place, f"'{given}'", *trouble.args) from trouble


def _most(shape: Shape) -> int:
    """How many batches are rehearsed where nobody says."""
    cells = shape.series * shape.batch_rows * len(shape.layout.values)
    return int(np.clip(MOST_CELLS // max(cells, 1), LEAST_BATCHES, MOST_BATCHES))


def _date(stamp: int, zone: str) -> str:
    local = Zone(zone).local(np.array([stamp], dtype=np.int64))
    return str(local.astype("datetime64[ns]").astype("datetime64[D]")[0])
