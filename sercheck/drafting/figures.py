"""What history's rows count up to: ranges, whole numbers, and how complete its batches are.

Depends on ``intake``, the shape, and the history as a rehearsal cuts it.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from sercheck.intake.rows import Rows
from sercheck.intake.zone import DAY, NOT_A_STAMP
from sercheck.rehearsal.feed import Feed
from sercheck.serial.arrays import Floats, Ints


@dataclass(frozen=True)
class Figures:
    """Counted over the whole history.

    Attributes:
        rows: rows delivered.
        steps: steps of the cadence from the first to the last.
        fingerprint: of the rows' content.
        lowest, highest: of each value column; NaN where it has none.
        whole: the column holds whole numbers only.
        empty: rows of the column without a number.
        again: rows whose series and stamp came before, whatever the cadence.
        batches: how history falls into batches; None where it cannot be cut.
    """

    rows: int
    steps: int
    fingerprint: str
    lowest: Mapping[str, float]
    highest: Mapping[str, float]
    whole: Mapping[str, bool]
    empty: Mapping[str, int]
    again: int
    batches: Batches | None = None

    def vary(self, column: str) -> bool:
        """The column has two different values at least."""
        return bool(self.lowest[column] < self.highest[column])


@dataclass(frozen=True)
class Batches:
    """Counted by batch; the first and the last, which may be parts, are left out where there are more.

    Attributes:
        count: batches of history.
        complete: lowest share of due rows that came, of any series, in a batch, and in a week of batches.
        empty: for each column the highest share of a series' rows without a number in a week of batches.
        counted: most doubles, rows in disorder and rows off the grid of a series in a batch.
        gaps: most gaps of a series in a stretch of twelve batches.
        silent: local dates on which no series had a row, though one was due.
    """

    count: int
    complete: tuple[float, float]
    empty: Mapping[str, float]
    counted: Mapping[str, int]
    gaps: int
    silent: tuple[str, ...]


TOGETHER = 7
"""Batches of a week of days."""
LONG = 12
"""Batches of a year of months."""


def figures_of(rows: Rows, steps: int, fingerprint: str, feed: Feed | None) -> Figures:
    """Count.

    Args:
        rows: all rows of history.
        steps: steps of its cadence.
        fingerprint: of its content.
        feed: history cut into batches, or None.
    """
    lowest, highest, whole, empty = {}, {}, {}, {}
    for name, column in rows.values.items():
        seen = column[np.isfinite(column)]
        lowest[name] = float(seen.min()) if len(seen) else float("nan")
        highest[name] = float(seen.max()) if len(seen) else float("nan")
        whole[name] = bool(len(seen)) and bool((seen == np.floor(seen)).all())
        empty[name] = len(column) - len(seen)
    return Figures(
        len(rows), steps, fingerprint, lowest, highest, whole, empty, _again(rows),
        None if feed is None else batches_of(feed),
    )  # fmt: skip


def batches_of(feed: Feed) -> Batches:
    """Count by batch."""
    edges = feed.edges[1:-1] if len(feed.edges) > 3 else feed.edges
    T = feed.delivered.shape[1]
    first = np.where(feed.delivered.any(axis=1), feed.delivered.argmax(axis=1), T)
    due = feed.axis.expected & ~feed.axis.closed & (np.arange(T) >= first[:, None])
    here = feed.delivered & due
    came, wanted = _summed(here, edges), _summed(due, edges)
    whole_weeks = tuple(_windows(part, TOGETHER) for part in (came, wanted))
    empty = {}
    for name, column in feed.values.items():
        lost = _summed(np.isnan(column) & feed.delivered, edges)
        empty[name] = 1 - _lowest(_windows(came - lost, TOGETHER), whole_weeks[0])
    counts = feed.counts.plain
    misplaced = {
        "doubles": counts["doubles"] + counts["differing"],
        "disorder": counts["disorder"],
        "off_grid": counts["off_grid"],
    }
    starts = due & ~here & ~np.pad(due & ~here, ((0, 0), (1, 0)))[:, :-1]
    return Batches(
        count=len(feed.edges),
        complete=(_lowest(came, wanted), _lowest(*whole_weeks)),
        empty=empty,
        counted={name: int(count.max(initial=0)) for name, count in misplaced.items()},
        gaps=int(_windows(_summed(starts, edges), LONG).max(initial=0)),
        silent=_silent(feed, here, due),
    )


def _again(rows: Rows) -> int:
    told = rows.stamps != NOT_A_STAMP
    order = np.lexsort((rows.stamps[told], rows.codes[told]))
    stamps, codes = rows.stamps[told][order], rows.codes[told][order]
    return int(((np.diff(stamps) == 0) & (np.diff(codes) == 0)).sum())


def _summed(marks: np.ndarray, edges: Ints) -> Ints:
    """How many marks each series has in each batch, shape (S, B)."""
    total = np.pad(np.cumsum(marks, axis=1, dtype=np.int64), ((0, 0), (1, 0)))
    return np.asarray(total[:, edges[:, 1]] - total[:, edges[:, 0]])


def _windows(counts: Ints, length: int) -> Ints:
    """Sums over so many batches in a row, or over all of them."""
    length = min(length, counts.shape[1])
    total = np.pad(np.cumsum(counts, axis=1), ((0, 0), (1, 0)))
    return np.asarray(total[:, length:] - total[:, : total.shape[1] - length])


def _lowest(part: Ints, whole: Ints) -> float:
    share: Floats = np.where(whole > 0, part / np.maximum(whole, 1), 1.0)
    return float(share.min(initial=1.0))


def _silent(feed: Feed, here: np.ndarray, due: np.ndarray) -> tuple[str, ...]:
    """Days on which a row of some series was due and none came."""
    days = (feed.axis.stamps // DAY).astype("datetime64[D]")
    each, place = np.unique(days, return_inverse=True)
    came = np.bincount(place.reshape(-1), weights=here.any(axis=0), minlength=len(each))
    wanted = np.bincount(place.reshape(-1), weights=due.any(axis=0), minlength=len(each))
    return tuple(str(day) for day in each[(came == 0) & (wanted > 0)])
