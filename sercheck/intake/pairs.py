"""Rows of two feeds on one numbering of series; depends on ``rows``."""

from __future__ import annotations

import numpy as np

from sercheck.intake import arrow
from sercheck.intake.rows import Rows
from sercheck.serial.arrays import Ints


def union(one: np.ndarray, other: np.ndarray) -> np.ndarray:
    """All names of both, sorted."""
    if len(one) == len(other) and (one == other).all():
        return one
    return np.array(sorted({*one.tolist(), *other.tolist()}), dtype=object)


def places_of(names: np.ndarray, among: np.ndarray) -> Ints:
    """Place of each name among other names, -1 where it is not."""
    import pyarrow.compute as pc

    found = pc.index_in(arrow.texts(names), value_set=arrow.texts(among))
    empty = arrow.nulls(found)
    places = arrow.numbers(found).astype(np.int64)
    return places if empty is None else np.where(empty, -1, places)


def aligned(rows: Rows, keys: np.ndarray) -> Rows:
    """Grouped rows of the series ``keys`` (sorted) on their numbering; rows of other series are left out."""
    rows = rows.by_series()
    if len(rows.keys) == len(keys) and (rows.keys == keys).all():
        return rows
    place = places_of(rows.keys, keys)
    wanted = np.flatnonzero(place >= 0)
    if len(wanted) < len(rows.keys):
        if len(wanted) and wanted[-1] - wanted[0] + 1 == len(wanted):  # neighbours: a slice, no copy
            rows = rows.of_series(int(wanted[0]), int(wanted[-1]) + 1)
            place = place[wanted]
        else:
            rows = rows.take((place >= 0)[rows.codes])
    return Rows(keys, place.astype(np.int32)[rows.codes], rows.stamps, rows.values)
