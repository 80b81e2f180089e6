"""Burg's reflection coefficients from lagged products of complete series; depends on numpy and ``serial``."""

from __future__ import annotations

import numpy as np

from sercheck.serial.arrays import Bools, Floats
from sercheck.serial.autocovariances import products

LEAST_LEFT = 1e-3
"""Share of a series' power that its errors must keep: below it, sums of products lose more than 1e-12 (measured)."""


def reflections_from_products(x: Floats, width: int) -> tuple[Floats, Bools]:
    """Reflection coefficients of orders 1 .. ``width`` of complete series (Burg 1975; after Vos 2013, from memory).

    With u = (1, a_1 .. a_m, 0) the error filter of order m, J the reversal and Q_ij the sum over t > m of
    x_{t-i} x_{t-j} plus the same read backwards, Burg's coefficient is k = (Ju)'Qu / u'Qu. One order further Q loses
    the products of both ends and gains a row, so that g = Qu follows from the last g in O(m) steps: the lagged products
    of the series are the only passes over it.

    Args:
        x: deviations from the mean, shape (S, T), complete, T > 2 width.
        width: highest order.

    Returns:
        Coefficients, shape (S, width), and where they are good to about 1e-12, shape (S,): not where errors fall below
        ``LEAST_LEFT`` of the power, whose coefficients need passes over the series.
    """
    steps = x.shape[1]
    twice = 2 * products(x, width)
    k = np.zeros((len(x), width))
    filter_ = np.ones((len(x), 1))
    # the products that end before, and begin after, the stretch at either end that an order cannot use
    lagged = twice[:, 1:].copy()
    g = np.stack([twice[:, 0] - x[:, 0] ** 2 - x[:, -1] ** 2, lagged[:, 0]], axis=1)
    least = LEAST_LEFT * twice[:, 0]
    exact = twice[:, 0] > 0
    for m in range(width):
        power = _dot(filter_, g[:, :-1])
        exact &= power > least
        k[:, m] = np.divide(_dot(filter_, g[:, :0:-1]), power, out=np.zeros(len(x)), where=exact)
        step = k[:, m : m + 1]
        longer = np.zeros((len(x), m + 2))
        longer[:, :-1] = filter_
        longer[:, 1:] -= step * filter_[:, ::-1]
        if m + 1 == width:
            break
        start, end = x[:, m + 1 :: -1], x[:, steps - 2 - m :]
        lagged[:, : m + 1] -= start[:, :1] * start[:, 1:] + end[:, :1] * end[:, 1:]
        kept = g - step * g[:, ::-1]
        kept -= start * _dot(start, longer)[:, None] + end * _dot(end, longer)[:, None]
        g = np.concatenate([kept, _dot(lagged[:, m + 1 :: -1], longer)[:, None]], axis=1)
        filter_ = longer
    return k, exact & (np.abs(k) < 1).all(axis=1)


def _dot(a: Floats, b: Floats) -> Floats:
    dot: Floats = np.einsum("ij,ij->i", a, b)
    return dot
