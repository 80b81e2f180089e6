"""Grids of a feed without a cadence: every series right-aligned by order of observation; depends on ``grid``."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from sercheck.grid import Grid, Tally
from sercheck.intake.axis import irregular_axis
from sercheck.intake.layout import Layout
from sercheck.intake.pairs import aligned, union
from sercheck.intake.rows import INFINITE, UNREADABLE, Rows, count_marked
from sercheck.intake.tally import newest
from sercheck.intake.zone import NOT_A_STAMP
from sercheck.serial.arrays import Bools, Floats, Ints


def irregular_grids(
    batch: Rows, history: Rows | None, layout: Layout, need_rows: int | None, block_cells: int
) -> Iterator[Grid]:
    """As ``assemble.grids`` for a feed without a cadence.

    The batch part is as wide as its longest series, the history part too; a shorter series leaves its first cells
    empty. History's rows at or after a series' first row of the batch are left out.
    """
    keys = batch.keys if history is None else union(batch.keys, history.keys)
    batch = aligned(batch, keys)
    new = _Ordered(batch)
    past = None
    if history is not None:
        first = np.full(len(keys), np.iinfo(np.int64).max)
        codes = batch.codes[new.rows]
        first[codes[::-1]] = batch.stamps[new.rows][::-1]  # the earliest is written last
        history = aligned(history, keys)
        history = history.take(history.stamps < first[history.codes])
        past = _Ordered(history)
    start = past.width if past is not None else 0
    start = start if need_rows is None else min(start, need_rows)
    end = start + new.width
    stamps = np.full(end, NOT_A_STAMP, dtype=np.int64)
    if past is not None and history is not None:
        _label(stamps[:start], history, past)
    _label(stamps[start:], batch, new)
    axis = irregular_axis(layout, stamps)
    height = max(1, block_cells // max(1, end))
    for low in range(0, len(keys), height):
        high = min(low + height, len(keys))
        values = {name: np.full((high - low, end), np.nan) for name in batch.values}
        delivered = np.zeros((high - low, end), dtype=bool)
        if past is not None and history is not None:
            past.fill(values, delivered, history, slice(low, high), start, start)
        new.fill(values, delivered, batch, slice(low, high), end, new.width)
        yield Grid(keys[low:high], axis, start, values, delivered, new.tally(batch, low, high), irregular=True)


class _Ordered:
    """Readable rows in order of series and stamp, the last delivered of equal stamps, numbered from the end."""

    def __init__(self, grouped: Rows) -> None:
        codes, stamps = grouped.codes, grouped.stamps
        readable = np.flatnonzero(stamps != NOT_A_STAMP)
        c, s = codes[readable], stamps[readable]
        if not ((c[1:] > c[:-1]) | (s[1:] >= s[:-1])).all():
            readable = readable[np.lexsort((s, c))]
            c, s = codes[readable], stamps[readable]
        again = np.zeros(len(c), dtype=bool)
        again[1:] = (c[1:] == c[:-1]) & (s[1:] == s[:-1])
        last = np.append(again[1:], False)[: len(c)]
        self.all_rows, self.again = readable, again
        self.rows = readable[~last]
        kept = codes[self.rows]
        counts = np.bincount(kept, minlength=len(grouped.keys))
        ends = np.cumsum(counts)
        self.from_end: Ints = ends[kept] - np.arange(len(kept))
        self.width = int(counts.max()) if len(counts) else 0

    def fill(
        self, values: dict[str, Floats], delivered: Bools, rows: Rows, series: slice, end: int, most: int
    ) -> None:
        """Write the last ``most`` rows of each of some series so that they end at column ``end``."""
        codes = rows.codes[self.rows]
        chosen = (codes >= series.start) & (codes < series.stop) & (self.from_end <= most)
        at = (codes[chosen] - series.start, end - self.from_end[chosen])
        for name, column in rows.values.items():
            values[name][at] = column[self.rows[chosen]]
        delivered[at] = True

    def tally(self, rows: Rows, low: int, high: int) -> Tally:
        """What was counted about some series."""
        part = rows.of_series(low, high)
        S, codes, stamps = high - low, part.codes, part.stamps
        readable = stamps != NOT_A_STAMP
        c, s = codes[readable], stamps[readable]
        back = (c[1:] == c[:-1]) & (s[1:] < s[:-1])
        counts = np.bincount(codes, minlength=S).astype(np.int64)
        doubles, differing = self._doubles(rows, low, high)
        return Tally(
            rows=counts,
            doubles=doubles,
            differing=differing,
            disorder=np.bincount(c[1:][back], minlength=S).astype(np.int64),
            off_grid=np.bincount(codes[~readable], minlength=S).astype(np.int64),
            unreadable={name: count_marked(v, UNREADABLE, codes, S) for name, v in part.values.items()},
            infinite={name: count_marked(v, INFINITE, codes, S) for name, v in part.values.items()},
            newest=newest(part, None, counts),
        )

    def _doubles(self, rows: Rows, low: int, high: int) -> tuple[Ints, Ints]:
        """Rows of a stamp that came before, with the same values and with others, whatever their order."""
        codes = rows.codes[self.all_rows]
        chosen = (codes >= low) & (codes < high)
        group = np.cumsum(~self.again)[chosen]
        series = codes[chosen] - low
        contents = [column.view(np.int64)[self.all_rows[chosen]] for column in rows.values.values()]
        order = np.lexsort((*contents, group))
        same_stamp = np.diff(group[order]) == 0
        same = same_stamp.copy()
        for content in contents:
            same &= np.diff(content[order]) == 0
        after = series[order][1:]
        S = high - low
        doubles = np.bincount(after[same], minlength=S).astype(np.int64)
        return doubles, np.bincount(after[same_stamp & ~same], minlength=S).astype(np.int64)


def _label(stamps: Ints, rows: Rows, ordered: _Ordered) -> None:
    """Give the steps the stamps of the longest series, right-aligned."""
    codes = rows.codes[ordered.rows]
    if len(codes) == 0 or len(stamps) == 0:
        return
    own = rows.stamps[ordered.rows[codes == int(np.argmax(np.bincount(codes)))]]
    own = own[-len(stamps) :]
    stamps[len(stamps) - len(own) :] = own
