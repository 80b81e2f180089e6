"""Burg's reflection coefficients of many series, of every order at once; depends on numpy and ``serial`` only."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.burg_products import reflections_from_products
from sercheck.serial.centre import Centred

BLOCK = 1 << 15
"""Values worked on at a time: two arrays of 256 kB stay in a second-level cache through all orders."""


@dataclass(frozen=True)
class Reflected:
    """Burg's reflection coefficients (Burg 1975) of S series, from which models of any lower order can be taken.

    Attributes:
        data: the series, centred.
        k: coefficients of the orders 1 .. P, shape (S, P).
        weight: complete stretches of each order plus the order, shape (S, P).
        easy: complete series of which every order leaves an error worth mentioning, shape (S,).
    """

    data: Centred
    k: Floats
    weight: Floats
    easy: Bools


def reflected(data: Centred, width: int) -> Reflected:
    """Reflection coefficients up to the order ``width``, of which at most a third of the steps is tried."""
    series, steps = data.values.shape
    width = max(min(width, steps // 3), 0)
    k, weight = np.zeros((series, width)), np.zeros((series, width))
    block = max(1, BLOCK // max(steps, 1))
    gaps = data.n < steps
    easy = np.zeros(series, dtype=bool)
    whole = np.flatnonzero(~gaps)
    weight[whole] = steps
    if width and len(whole):
        rows_of = data.values if len(whole) == series else data.values[whole]
        k[whole], exact = reflections_from_products(rows_of, width)
        easy[whole] = exact
        whole = whole[~exact]
    for rows in blocks(whole, block):
        k[rows] = _lattice(data.values[rows], width)
    for rows in blocks(np.flatnonzero(gaps), block):
        k[rows], weight[rows] = _lattice_with_gaps(data.values[rows], data.seen[rows], width)
    return Reflected(data, k, weight, easy)


def blocks(rows: Ints, size: int) -> list[Ints]:
    """The rows, ``size`` at a time."""
    return [rows[first : first + size] for first in range(0, len(rows), size)]


def _reflected(ahead: Floats, behind: Floats, spare: Floats) -> Floats:
    """One order of the lattice in place: the coefficients; ``ahead`` goes on, ``spare`` becomes what is behind."""
    power = np.einsum("ij,ij->i", ahead, ahead) + np.einsum("ij,ij->i", behind, behind)
    k = _ratio(2 * np.einsum("ij,ij->i", ahead, behind), power)
    step = k[:, None]
    np.multiply(ahead, step, out=spare)
    np.subtract(behind, spare, out=spare)
    behind *= step
    ahead -= behind
    return k


def _lattice(x: Floats, width: int) -> Floats:
    """Reflection coefficients of complete series."""
    k = np.zeros((len(x), width))
    f, b = x.copy(), x.copy()
    held = np.empty_like(x)
    for m in range(1, width + 1):
        ahead, behind, spare = f[:, m:], b[:, m - 1 : -1], held[:, m:]
        k[:, m - 1] = _reflected(ahead, behind, spare)
        # b of this order becomes the spare array, shifted by one step as the recursion wants it
        b, held = held, b
    return k


def _lattice_with_gaps(x: Floats, seen: Bools, width: int) -> tuple[Floats, Floats]:
    """Reflection coefficients and stretch counts plus order; f and b are 0 where a value of theirs is missing."""
    steps = x.shape[1]
    k = np.zeros((len(x), width))
    weight = _stretches(seen, width) + np.arange(1, width + 1)
    there = seen.astype(np.float64)
    f, b = x.copy(), x.copy()
    held = np.empty_like(x)
    for m in range(1, width + 1):
        ahead, behind, spare = f[:, m:], b[:, m - 1 : -1], held[:, m:]
        # both are 0 outside their own stretches of m values: the two of m + 1 lack one end each
        ahead *= there[:, : steps - m]
        behind *= there[:, m:]
        k[:, m - 1] = _reflected(ahead, behind, spare)
        b, held = held, b
    return k, weight


def _stretches(seen: Bools, width: int) -> Floats:
    """How many complete stretches of 2 .. width + 1 values each series has, shape (S, width)."""
    series, steps = seen.shape
    wide = np.zeros((series, steps + 2), dtype=np.int8)
    wide[:, 1:-1] = seen
    change = np.diff(wide, axis=1).ravel()
    begin, end = np.flatnonzero(change == 1), np.flatnonzero(change == -1)
    length = end - begin
    # a run of L values holds L - m stretches of m + 1
    most = np.minimum(length, width + 1)
    place = (begin // (steps + 1)) * (width + 2) + most
    runs = np.bincount(place, minlength=series * (width + 2)).reshape(series, width + 2)
    beyond = np.bincount(place, weights=length - most, minlength=series * (width + 2)).reshape(series, width + 2)
    longer = runs[:, ::-1].cumsum(axis=1)[:, ::-1]  # runs of at least so many values
    count = longer[:, ::-1].cumsum(axis=1)[:, ::-1] + beyond[:, -1:]
    return count[:, 2:].astype(np.float64)


def _ratio(top: Floats, bottom: Floats) -> Floats:
    return np.divide(top, bottom, out=np.zeros_like(top), where=bottom > 0)
