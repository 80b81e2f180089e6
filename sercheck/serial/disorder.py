"""Are these the foretold values in another order: likelihood over all orders; depends on numpy and ``serial``."""

from __future__ import annotations

import numpy as np

from sercheck.serial.arrays import Floats
from sercheck.serial.foreseen import Foreseen
from sercheck.serial.window_t import windows

GROUPS = 48
"""Groups of like foretold values: enough to follow any daily shape, few enough for windows of many cycles."""

ROUNDS = 40
"""Rounds of scaling; the row sums are then within a per cent of 1 (simulated)."""

SMALLEST = 1e-30
"""Least likelihood of a value in a place: keeps one outlier from ending the scaling."""

BLOCK = 1 << 20
"""Values worked on at a time."""


def any_order(law: Foreseen) -> Floats:
    """Log-likelihood of the window as history's values in an order of which nothing is known, shape (S,).

    The density is the permanent of K over n!, K_ij the normal density of value i around the foretold value j (the
    profile, moved to the window's own mean, with the scatter of a window of history around its own mean). The
    permanent is that of the doubly stochastic matrix D which Sinkhorn's (1964) scaling makes of K, divided by the
    scales; ln per D is taken as Σ_i [ln(2πk_i)/(2k_i) − 1], k_i = 1/Σ_j D_ij² being the places that row i is spread
    over: Stirling's formula for blocks of size k, within .8 of the exact value for twelve rows.
    """
    y = law.on_scale(law.window)
    shape = law.here
    told = ~np.isnan(y) & ~np.isnan(shape)
    n = told.sum(axis=1)
    cut = windows(law.rest, law.n) if law.rest.shape[1] >= law.n else law.rest[:, None, :]
    seen = ~np.isnan(cut)
    middle = np.where(seen, cut, 0.0).sum(axis=2, keepdims=True) / np.maximum(seen.sum(axis=2, keepdims=True), 1)
    square = np.where(seen, cut - middle, 0.0) ** 2
    variance = square.sum(axis=(1, 2)) / np.maximum(seen.sum(axis=(1, 2)) - cut.shape[1], 1)
    y, shape = (np.where(told, part, np.nan) for part in (y, shape))
    centred = y - _mean(y) + _mean(shape)
    result = np.empty(len(y))
    block = max(1, BLOCK // (law.n * min(law.n, GROUPS)))
    for first in range(0, len(y), block):
        rows = slice(first, first + block)
        result[rows] = _permanent(centred[rows], shape[rows], variance[rows])
    return np.where(n > 1, result - np.log(np.maximum(n, 1)) / 2, np.nan) + law.stretching(law.window)


def _mean(x: Floats) -> Floats:
    seen = ~np.isnan(x)
    return np.asarray(
        np.where(seen, x, 0.0).sum(axis=1, keepdims=True) / np.maximum(seen.sum(axis=1, keepdims=True), 1)
    )


def _permanent(y: Floats, shape: Floats, variance: Floats) -> Floats:
    """ln(per K / n!) for a block of series."""
    length = y.shape[1]
    ordered = np.sort(shape, axis=1)  # missing ones last
    edges = np.arange(min(length, GROUPS)) * length // min(length, GROUPS)
    seen = ~np.isnan(ordered)
    weight = np.add.reduceat(seen, edges, axis=1, dtype=np.float64)
    place = np.add.reduceat(np.where(seen, ordered, 0.0), edges, axis=1) / np.maximum(weight, 1)
    present = ~np.isnan(y)
    apart = np.where(present, y, 0.0)[:, :, None] - place[:, None, :]
    with np.errstate(divide="ignore", invalid="ignore"):
        log = -(apart**2) / (2 * variance[:, None, None])
    log = np.where(weight[:, None, :] > 0, log, -np.inf)
    top = np.nan_to_num(log.max(axis=2), nan=0.0, neginf=0.0)
    k = np.maximum(np.exp(log - top[:, :, None]), SMALLEST) * present[:, :, None] * (weight > 0)[:, None, :]
    v = np.ones(place.shape)
    u = present.astype(np.float64)
    for _ in range(ROUNDS):
        u = _over(present.astype(np.float64), np.einsum("sib,sb->si", k, v))
        v = _over(weight, np.einsum("sib,si->sb", k, u))
    d = u[:, :, None] * k * v[:, None, :]
    n = present.sum(axis=1)
    with np.errstate(divide="ignore", invalid="ignore"):
        spread = _over(d**2, weight[:, None, :]).sum(axis=2)  # each group stands for ``weight`` equal columns
        wide = np.where(present, np.maximum(_over(np.ones(spread.shape), spread), 1.0), 1.0)
        inner = np.where(present, np.log(2 * np.pi * wide) / (2 * wide) - 1, 0.0).sum(axis=1)
        outer = np.where(present, top - np.log(u), 0.0).sum(axis=1)
        outer -= np.where(weight > 0, weight * np.log(v / weight), 0.0).sum(axis=1)
        stirling = n * np.log(n) - n + np.log(2 * np.pi * n) / 2
        return np.asarray(inner + outer - stirling - n / 2 * np.log(2 * np.pi * variance))


def _over(top: Floats, bottom: Floats) -> Floats:
    return np.divide(top, bottom, out=np.zeros(np.broadcast_shapes(top.shape, bottom.shape)), where=bottom > 0)
