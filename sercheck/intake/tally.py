"""Doubled rows and newest stamps of grouped rows; depends on ``rows``."""

from __future__ import annotations

import numpy as np

from sercheck.intake.rows import Rows
from sercheck.intake.zone import NOT_A_STAMP
from sercheck.serial.arrays import Bools, Ints


def sorted_cells(rows: Rows, places: Ints, cells: Ints, n: int) -> tuple[Ints, Ints, Ints, Ints]:
    """Keep the last delivered row of every cell and count the others.

    Args:
        rows: grouped rows of S series.
        places: the rows that have a cell, in order of delivery.
        cells: flat place of each in a (S, n) array.
        n: cells of a series.

    Returns:
        The rows kept and their cells, in order of cell; then for each series the rows whose cell came before with
        the same values, and with other values, shape (S,): m rows of a cell with d different contents are m - d and
        d - 1 of them, in whatever order they came.
    """
    order = np.argsort(cells, kind="stable")
    ordered = cells[order]
    again = np.concatenate([[False], ordered[1:] == ordered[:-1]])
    last = np.concatenate([again[1:], [False]])
    kept = places[order[~last]]
    S = len(rows.keys)
    if not again.any():
        none = np.zeros(S, dtype=np.int64)
        return kept, ordered, none, none
    many = again | last
    cell = ordered[many]
    contents = [column.view(np.int64)[places[order[many]]] for column in rows.values.values()]
    by_content = np.lexsort((*contents, cell))
    cell = cell[by_content]
    same_cell = cell[1:] == cell[:-1]
    same_content = same_cell.copy()
    for content in contents:
        same_content &= np.diff(content[by_content]) == 0
    series = cell[1:] // max(1, n)
    doubles = np.bincount(series[same_content], minlength=S).astype(np.int64)
    differing = np.bincount(series[same_cell & ~same_content], minlength=S).astype(np.int64)
    return kept, ordered[~last], doubles, differing


def newest(rows: Rows, near: Bools | None, counts: Ints) -> Ints:
    """Newest stamp of each series among the rows ``near`` (None for all), the smallest int64 where there is none."""
    found = np.full(len(rows.keys), NOT_A_STAMP, dtype=np.int64)
    if len(rows) == 0:
        return found
    stamps = rows.stamps if near is None else np.where(near, rows.stamps, NOT_A_STAMP)
    some = counts > 0
    starts = (np.cumsum(counts) - counts)[some]
    found[some] = np.maximum.reduceat(stamps, starts)
    return found
