"""Rows to grids: block by block of series on one axis, with what was counted on the way; depends on ``grid``."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from sercheck.grid import Grid, Tally
from sercheck.intake.calendar import Cadence
from sercheck.intake.irregular import irregular_grids
from sercheck.intake.layout import Layout
from sercheck.intake.pairs import aligned, union
from sercheck.intake.rows import INFINITE, UNREADABLE, Rows, count_marked
from sercheck.intake.stretch import Plan, extent, plan, within
from sercheck.intake.tally import newest, sorted_cells
from sercheck.serial.arrays import Bools, Floats, Ints

BLOCK_CELLS = 4_000_000
"""Cells of a block of series (ours: 32 MB a value column)."""


def grids(
    batch: Rows,
    history: Rows | None,
    cadence: Cadence,
    layout: Layout,
    need_steps: int | None = None,
    block_cells: int | None = None,
) -> Iterator[Grid]:
    """Grids of blocks of series, history before the batch, all on the same axis.

    History's rows at or after the batch's first step are left out: the batch's rows stand there. A series that only
    history knows has a row with nothing delivered in the batch. Of rows with the same stamp the last delivered wins.

    Args:
        batch: rows of the batch.
        history: rows let in before, or None.
        cadence: the cadence; one that is not anchored yet is anchored at history's stamps, else at the batch's.
        layout: the feed.
        need_steps: steps (rows of a series, for an irregular feed) of history before the batch, at most; None for
            all there are.
        block_cells: series times steps in a block, at most (default ``BLOCK_CELLS``; a single series may have more).

    Raises:
        BatchError: the rows are spread too thinly for the cadence.
        UsageError: a season's length does not fit the cadence.
    """
    if cadence.irregular:
        yield from irregular_grids(batch, history, layout, need_steps, block_cells or BLOCK_CELLS)
        return
    if cadence.anchor is None:
        cadence = cadence.anchored((batch if history is None else history).stamps)
    past = None if history is None else extent(history, cadence)
    laid = plan(extent(batch, cadence, past), past, cadence, layout, need_steps)
    yield from planned_grids(batch, history, laid, block_cells)


def planned_grids(batch: Rows, history: Rows | None, laid: Plan, block_cells: int | None = None) -> Iterator[Grid]:
    """As ``grids``, on an axis that is laid out already (so that blocks of a stream share it)."""
    keys = batch.keys if history is None else union(batch.keys, history.keys)
    batch = aligned(batch, keys)
    history = None if history is None or laid.start == 0 else aligned(history, keys)
    height = height_of(laid, block_cells)
    for low in range(0, len(keys), height):
        high = min(low + height, len(keys))
        yield _grid(batch.of_series(low, high), None if history is None else history.of_series(low, high), laid)


def height_of(laid: Plan, block_cells: int | None = None) -> int:
    """Series of a block."""
    return max(1, (block_cells or BLOCK_CELLS) // max(1, len(laid.axis)))


def _grid(batch: Rows, history: Rows | None, laid: Plan) -> Grid:
    shape = (len(batch.keys), len(laid.axis))
    first, last = int(laid.axis.index[0]), int(laid.axis.index[-1]) + 1
    begin = first + laid.start
    new = _place(batch, laid.cadence, begin, last)
    if history is None and laid.start == 0 and new.whole(batch, shape[1]):
        values = {name: column.reshape(shape) for name, column in batch.values.items()}
        return Grid(batch.keys, laid.axis, 0, values, np.ones(shape, dtype=bool), _tally(batch, new, laid))
    values = {name: np.full(shape, np.nan) for name in batch.values}
    delivered = np.zeros(shape, dtype=bool)
    if history is not None:
        _fill(values, delivered, history, _place(history, laid.cadence, first, begin), slice(0, laid.start))
    _fill(values, delivered, batch, new, slice(laid.start, shape[1]))
    return Grid(batch.keys, laid.axis, laid.start, values, delivered, _tally(batch, new, laid))


@dataclass(frozen=True)
class _Placed:
    """Where rows of a block go in a (series, n) array.

    Either ``steps``: every series has the same stamps, which go to these columns in this order; or ``rows`` (None for
    all) go to the flat places ``cells``, each once. ``doubles`` and ``differing`` count a series' rows left out.
    """

    steps: Ints | None
    rows: Ints | None
    cells: Ints
    inside: Bools | None
    doubles: Ints
    differing: Ints

    def whole(self, rows: Rows, n: int) -> bool:
        """All cells are filled, in order."""
        return self.steps is not None and len(self.steps) == n and len(rows) > 0


def _place(rows: Rows, cadence: Cadence, first: int, last: int) -> _Placed:
    S, n = len(rows.keys), last - first
    none = np.zeros(S, dtype=np.int64)
    steps = _same_steps(rows, cadence, first, last)
    if steps is not None:
        return _Placed(steps, None, none, None, none, none)
    index, on_grid = cadence.index_of(rows.stamps)
    inside = on_grid & (index >= first) & (index < last)
    everything = bool(inside.all())
    cells = rows.codes.astype(np.int64) * n + (index - first)
    if not everything:
        cells = cells[inside]
    if (cells[1:] > cells[:-1]).all():
        return _Placed(None, None if everything else np.flatnonzero(inside), cells, inside, none, none)
    kept, cells, doubles, differing = sorted_cells(rows, np.flatnonzero(inside), cells, n)
    return _Placed(None, kept, cells, inside, doubles, differing)


def _same_steps(rows: Rows, cadence: Cadence, first: int, last: int) -> Ints | None:
    """The columns of the stamps when every series has the same stamps, all in order and on the axis; else None."""
    S = len(rows.keys)
    if S == 0 or len(rows) == 0 or len(rows) % S:
        return None
    n = len(rows) // S
    every = np.arange(S)
    if (rows.codes[::n] != every).any() or (rows.codes[n - 1 :: n] != every).any():
        return None
    stamps = rows.stamps.reshape(S, n)
    if not (stamps == stamps[0]).all():
        return None
    index, on_grid = cadence.index_of(stamps[0])
    fits = on_grid.all() and index[0] >= first and index[-1] < last and (np.diff(index) > 0).all()
    return index - first if fits else None


def _fill(values: dict[str, Floats], delivered: Bools, rows: Rows, placed: _Placed, part: slice) -> None:
    if placed.steps is not None:
        shape = (len(rows.keys), len(placed.steps))
        columns = placed.steps + part.start
        for name, column in rows.values.items():
            values[name][:, columns] = column.reshape(shape)
        delivered[:, columns] = True
        return
    n = part.stop - part.start
    if n == 0:
        return
    series, steps = np.divmod(placed.cells, n)
    flat = series * delivered.shape[1] + steps + part.start
    for name, column in rows.values.items():
        values[name].reshape(-1)[flat] = column if placed.rows is None else column[placed.rows]
    delivered.reshape(-1)[flat] = True


def _tally(rows: Rows, placed: _Placed, laid: Plan) -> Tally:
    S = len(rows.keys)
    counts = np.bincount(rows.codes, minlength=S).astype(np.int64)
    none = np.zeros(S, dtype=np.int64)
    near = None if placed.steps is not None else within(rows.stamps, laid.low, laid.high)
    disorder, off_grid = none, none
    if near is not None and placed.inside is not None:
        off_grid = np.bincount(rows.codes[~placed.inside], minlength=S).astype(np.int64)
        codes, stamps = rows.codes[near], rows.stamps[near]
        back = (codes[1:] == codes[:-1]) & (stamps[1:] < stamps[:-1])
        disorder = np.bincount(codes[1:][back], minlength=S).astype(np.int64)
    return Tally(
        rows=counts,
        doubles=placed.doubles,
        differing=placed.differing,
        disorder=disorder,
        off_grid=off_grid,
        unreadable={name: count_marked(v, UNREADABLE, rows.codes, S) for name, v in rows.values.items()},
        infinite={name: count_marked(v, INFINITE, rows.codes, S) for name, v in rows.values.items()},
        newest=newest(rows, near, counts),
    )
