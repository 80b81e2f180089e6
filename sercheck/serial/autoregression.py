"""Autoregressive models of many series at once; depends on numpy and ``serial`` only."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np

from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.centre import centred
from sercheck.serial.reflections import BLOCK, Reflected, blocks, reflected

STEEPEST = 0.98
"""Largest modulus of a reflection coefficient that a null hypothesis may put into a model (keeps it stationary)."""
MOVING, ROUNDS = 8, 8
"""Lower orders that move when an autocorrelation is imposed, and rounds of it (then it stands to 1e-6; measured)."""
STEP, LONGEST = 1e-6, 0.3
"""Step of the numerical gradient (and change at which a series is done), and longest step of a round, in radians."""
WIDTHS = (1, 2, 4, 8, 16)
"""Orders up to which models share a recursion (each wider one costs about twice the last)."""
FEW = 2000
"""Coefficients fewer than which are no recursion of their own (measured: a step costs a few microseconds anyway)."""


@dataclass(frozen=True)
class Autoregression:
    """Models x_t - mean = Σ_j a_j (x_{t-j} - mean) + e_t of S series, padded with 0 to a common order P.

    Attributes:
        order: order of each model, shape (S,).
        coefficients: a_1 .. a_P, shape (S, P).
        reflection: reflection coefficients (partial autocorrelations of the model), shape (S, P).
        variance: innovation variance, in the squared unit of the series, shape (S,); NaN for a series that is constant
            or has fewer than two values, whose model is white noise only for want of a better one.
        mean: mean of the observed values, shape (S,).
        n: observed values, shape (S,).
        reached: the highest order that the length and the gaps of each series let be tried, shape (S,).
    """

    order: Ints
    coefficients: Floats
    reflection: Floats
    variance: Floats
    mean: Floats
    n: Ints
    reached: Ints

    def rows(self, pick: Ints | Bools | slice) -> Autoregression:
        """The models of some of the series."""
        return Autoregression(
            self.order[pick], self.coefficients[pick], self.reflection[pick], self.variance[pick], self.mean[pick],
            self.n[pick], self.reached[pick],
        )  # fmt: skip


def largest_order(n: int, lag: int = 1) -> int:
    """Highest order tried: min(10 log10 n, n/3), and for a test at a lag above 1 at least lag + 2."""
    if n < 3:
        return 0
    usual = min(int(10 * np.log10(n)), n // 3)
    return max(usual, lag + 2) if lag > 1 else usual


def burg(x: object, max_order: int | None = None, min_order: int = 0) -> Autoregression:
    """Fit each series by Burg's method (Burg 1975), its order chosen by AICc (Hurvich and Tsai 1989).

    The reflection coefficient of order m is k = 2 Σ f_t b_{t-1} / Σ (f_t² + b_{t-1}²) over all t for which x_{t-m} ..
    x_t are observed (Burg's method for segments: nothing is closed up over a gap). The criterion is
    Σ_{j≤m} w_j ln(1 - k_j²) + n (n + m)/(n - m - 2), where w_j is the number of such stretches plus j: n for a complete
    series, whose criterion is then AICc itself, and less where gaps leave less to learn from.

    Args:
        x: one series or (S, T); NaN is missing.
        max_order: highest order tried; default min(10 log10 n, n/3), n the observed values of each series. In either
            case an order above w/3 is not tried.
        min_order: lowest order chosen, where it can be tried at all.

    Returns:
        The models. Scale and shift of a series change neither order nor coefficients.
    """
    data = centred(x)
    steps = data.values.shape[1]
    width = max(largest_order(steps) if max_order is None else max_order, min_order)
    return chosen(reflected(data, width), max_order, min_order)


def chosen(told: Reflected, max_order: int | None = None, min_order: int = 0) -> Autoregression:
    """``burg`` of series whose reflection coefficients are known, at least up to the highest order tried."""
    data = told.data
    steps = data.values.shape[1]
    width = max(largest_order(steps) if max_order is None else max_order, min_order)
    width = max(min(width, steps // 3), 0)
    reflection, weight = told.k[:, :width], told.weight[:, :width]
    orders = np.arange(1, width + 1)
    n = data.n[:, None].astype(np.float64)
    usual = 10 * np.log10(np.maximum(n, 1)) if max_order is None else np.full_like(n, max_order)
    able = (orders <= np.minimum(np.maximum(usual, min_order), weight / 3)) & data.varies[:, None] & (n - orders > 2)
    able = np.logical_and.accumulate(able, axis=1)
    reached = able.sum(axis=1)
    with np.errstate(divide="ignore", invalid="ignore"):
        gain = weight * np.log1p(-(reflection**2))
        penalty = n * (n + orders) / (n - orders - 2)
        start = np.where(n > 2, n * n / (n - 2), np.inf)
        above = np.where(able, np.cumsum(np.where(able, gain, 0.0), axis=1) + penalty, np.inf)
    criterion = np.concatenate([start, above], axis=1)
    early = np.arange(width + 1) < np.minimum(min_order, reached)[:, None]
    order = np.argmin(np.where(early, np.inf, criterion), axis=1)
    reflection = np.where(orders <= order[:, None], reflection, 0.0)
    count = np.maximum(data.n, 1)
    power = np.einsum("ij,ij->i", data.values, data.values) / count * np.prod(1 - reflection**2, axis=1)
    with np.errstate(over="ignore", under="ignore"):
        variance = np.where(data.varies & (data.n > 1), power * data.scale * data.scale, np.nan)
    return Autoregression(order, step_up(reflection), reflection, variance, data.mean, data.n, reached)


def step_up(reflection: Floats) -> Floats:
    """Coefficients a_1 .. a_P from reflection coefficients, both of shape (S, P) (Levinson 1947, Durbin 1960)."""
    a = np.zeros_like(reflection)
    for rows, most in _alike(reflection):
        a[rows, :most] = _stepped_up(reflection[rows, :most])
    return a


def _stepped_up(reflection: Floats) -> Floats:
    """The recursion with the orders in rows: each step works on whole rows of memory."""
    k = np.ascontiguousarray(reflection.T)
    a = np.zeros_like(k)
    for m in range(len(k)):
        a[:m] -= k[m] * a[:m][::-1]
        a[m] = k[m]
    return a.T


def _alike(reflection: Floats) -> Iterator[tuple[Ints, int]]:
    """Models that share a recursion, and its width: most are short, and padding them to the longest would cost most."""
    width = reflection.shape[1]
    order = np.where(reflection != 0, np.arange(1, width + 1), 0).max(axis=1, initial=0)
    least = -1
    for most in (*(one for one in WIDTHS if one < width), width):
        rows = np.flatnonzero((order > least) & (order <= most))
        if most < width and len(rows) * most < FEW:
            continue
        if len(rows):
            yield rows, most
        least = most


def model_autocorrelation(model: Autoregression, lags: int) -> Floats:
    """Theoretical autocorrelations ρ_0 .. ρ_lags of the models, shape (S, lags + 1) (Durbin-Levinson recursion)."""
    return _autocorrelation(model.reflection[:, : int(model.order.max(initial=0))], lags)


def _autocorrelation(reflection: Floats, lags: int) -> Floats:
    """The same from reflection coefficients, padded with zeros beyond each model's order."""
    rho = np.empty((len(reflection), lags + 1))
    for rows, most in _alike(reflection):
        rho[rows] = _durbin_levinson(reflection[rows, :most], lags)
    return rho


def _durbin_levinson(reflection: Floats, lags: int) -> Floats:
    """ρ_0 .. ρ_lags, the lags in rows while they are computed: each step then works on whole rows of memory.

    Sums run from the farthest lag to the nearest, row after row, so that neither the zeros that pad a short model nor
    the models beside it change the last digit.
    """
    if len(reflection) == 1:  # one column would be summed in another order
        return _durbin_levinson(np.repeat(reflection, 2, axis=0), lags)[:1]
    series, width = reflection.shape
    rho = np.zeros((lags + 1, series))
    rho[0] = 1.0
    if width == 1:
        rho[1:] = reflection.T
        return np.ascontiguousarray(np.multiply.accumulate(rho, axis=0).T)
    a = np.zeros((width, series))
    left = np.ones(series)
    for m in range(min(width, lags)):
        k = reflection[:, m]
        rho[m + 1] = np.add.reduce(a[:m][::-1] * rho[1 : m + 1], axis=0) + k * left
        a[:m] -= k * a[:m][::-1]
        a[m] = k
        left *= 1 - k**2
    backward = np.ascontiguousarray(a[::-1])
    for j in range(width + 1, lags + 1 if width else 0):
        np.add.reduce(backward * rho[j - width : j], axis=0, out=rho[j])
    return np.ascontiguousarray(rho.T)


def impose_autocorrelation(model: Autoregression, lag: int, b: Floats | float) -> Autoregression:
    """The nearest models whose autocorrelation at ``lag`` is ``b``.

    At lag 1 the first reflection coefficient becomes b and the others stay. At a lag k beyond, the angles asin k_j
    (whose estimates scatter by about 1/√n each) of the model's own orders below k, and of order k, move by the least
    sum of squares that brings ρ_k to b; what is left over is settled by k_k alone. Moving only k_k from the start would
    contradict strong earlier autocorrelations: a fitted ρ_1 of .95 and an imposed ρ_3 of .73 leave no variance.
    Coefficients are held within ± ``STEEPEST``.

    Args:
        model: fitted models.
        lag: at least 1.
        b: the autocorrelation to impose, a number or shape (S,).
    """
    series, width = model.reflection.shape
    reflection = np.zeros((series, max(width, lag)))
    below_one = np.nextafter(1.0, 0.0)  # a series that is foretold without error leaves no variance to divide by
    reflection[:, :width] = np.clip(model.reflection, -below_one, below_one)
    before_change = np.prod(1 - reflection**2, axis=1)
    moving = np.minimum(model.order, min(lag - 1, MOVING))
    rows = np.flatnonzero(moving)
    if len(rows):
        reflection[rows, :lag] = _nearest(reflection[rows, :lag], moving[rows], np.broadcast_to(b, series)[rows])
    below, left = _lag_below(reflection[:, :lag])
    reflection[:, lag - 1] = np.clip((b - below) / left, -STEEPEST, STEEPEST)
    return replace(
        model,
        order=np.maximum(model.order, lag),
        coefficients=step_up(reflection),
        reflection=reflection,
        variance=model.variance * (np.prod(1 - reflection**2, axis=1) / before_change),
    )


def _lag_below(reflection: Floats) -> tuple[Floats, Floats]:
    """ρ_k of the model of order k - 1 and the share of variance that it leaves, k the number of columns."""
    before = reflection[:, :-1]
    rho = _autocorrelation(before, reflection.shape[1])
    return rho[:, -1], np.prod(1 - before**2, axis=1)


def _nearest(reflection: Floats, moving: Ints, b: Floats) -> Floats:
    """Reflection coefficients with ρ_k = b, k their number, and the least change of angle of those that move.

    Gauss-Newton: with g the gradient of ρ_k, θ = θ_0 + g (b - ρ_k + g·(θ - θ_0))/(g·g).

    Args:
        reflection: shape (S, k).
        moving: how many of the first ones move beside the last, shape (S,).
        b: shape (S,).
    """
    last = reflection.shape[1] - 1
    places = np.append(np.arange(moving.max()), last)
    moves = (places < moving[:, None]) | (places == last)
    start = np.arcsin(np.clip(reflection[:, places], -STEEPEST, STEEPEST))
    result = start.copy()
    steepest = np.arcsin(STEEPEST)
    left_over = np.arange(len(reflection))
    for _ in range(ROUNDS):
        angle, first = result[left_over], start[left_over]
        rho, slope = _gradient(reflection[left_over], places, moves[left_over], angle)
        gap = b[left_over] - rho + np.einsum("ij,ij->i", slope, angle - first)
        norm = np.maximum(np.einsum("ij,ij->i", slope, slope), np.finfo(np.float64).tiny)
        # a long step leaves the region where the gradient holds
        step = np.clip(first + slope * (gap / norm)[:, None] - angle, -LONGEST, LONGEST)
        result[left_over] = np.clip(angle + step, -steepest, steepest)
        left_over = left_over[np.abs(result[left_over] - angle).max(axis=1) > STEP]
        if not len(left_over):
            break
    nearest = reflection.copy()
    nearest[:, places] = np.where(moves, np.sin(result), reflection[:, places])
    return nearest


def _gradient(reflection: Floats, places: Ints, moves: Bools, angle: Floats) -> tuple[Floats, Floats]:
    """ρ_k and its derivatives by the angles of ``places``; 0 for those that do not move."""
    trial = reflection.copy()
    trial[:, places] = np.where(moves, np.sin(angle), reflection[:, places])
    rows, columns = np.nonzero(moves[:, :-1])
    # the model itself and one for every angle that moves a little, in one recursion
    moved = trial[rows]
    moved[np.arange(len(rows)), places[columns]] = np.sin(angle[rows, columns] + STEP)
    below, left = _lag_below(np.concatenate([trial, moved]))
    rho = below + np.concatenate([trial[:, -1], moved[:, -1]]) * left
    series = len(trial)
    slope = np.zeros_like(angle)
    slope[:, -1] = np.cos(angle[:, -1]) * left[:series]
    slope[rows, columns] = (rho[series:] - rho[rows]) / STEP
    return rho[:series], slope


def innovations(x: object, model: Autoregression) -> Floats:
    """What the models do not foresee: e_t = x_t - mean - Σ_j a_j (x_{t-j} - mean).

    Args:
        x: one series or (S, T), of the models' series; NaN is missing.
        model: as fitted; its own mean is used, so that ``x`` may be other rows than it was fitted to.

    Returns:
        Shape (S, T); NaN at the first ``order`` steps, wherever one of the values needed is missing, and for a series
        whose model has no variance.
    """
    values = np.atleast_2d(np.asarray(x, dtype=np.float64)) - model.mean[:, None]
    steps = values.shape[1]
    e = values.copy()
    # highest orders first: the series that still have a coefficient at lag j are then one leading slice
    by_order = np.argsort(-model.order, kind="stable")
    order = model.order[by_order]
    width = int(order[0]) if len(order) else 0
    if width:
        busy = by_order[: np.searchsorted(-order, 0, side="left")]
        block = max(1, BLOCK // max(steps, 1))
        for rows in blocks(busy, block):
            e[rows] = _filtered(values[rows], model.coefficients[rows], model.order[rows])
    e[~np.isfinite(e) | np.isnan(model.variance)[:, None]] = np.nan
    return e


def _filtered(values: Floats, coefficients: Floats, order: Ints) -> Floats:
    """The filter for a block of series sorted by falling order; NaN spreads by itself."""
    steps = values.shape[1]
    e = values.copy()
    for j in range(1, min(int(order[0]), steps) + 1):
        live = int(np.searchsorted(-order, -j, side="right"))
        e[:live, j:] -= coefficients[:live, j - 1 : j] * values[:live, : steps - j]
    e[np.arange(steps) < order[:, None]] = np.nan
    return e


def largest_root(model: Autoregression) -> Floats:
    """Largest modulus of the roots of z^p - a_1 z^{p-1} - ... - a_p, shape (S,): below 1 for a stationary model."""
    root = np.zeros(len(model.order))
    for p in np.unique(model.order[model.order > 0]):
        rows = np.flatnonzero(model.order == p)
        companion = np.zeros((len(rows), p, p))
        companion[:, 0, :] = model.coefficients[rows, :p]
        companion[:, np.arange(1, p), np.arange(p - 1)] = 1.0
        root[rows] = np.abs(np.linalg.eigvals(companion)).max(axis=1)
    return root


def root_beyond(model: Autoregression, radius: float) -> Bools:
    """Whether the largest root exceeds ``radius``, without computing roots, shape (S,).

    The polynomial with roots divided by ``radius`` is stable exactly if all its reflection coefficients, found by the
    step-down recursion, are below 1 in modulus (Schur 1917, Cohn 1922).
    """
    width = int(model.order.max(initial=0))
    a = model.coefficients[:, :width] / radius ** np.arange(1, width + 1)
    beyond = np.zeros(len(a), dtype=bool)
    for m in range(width, 0, -1):
        k = a[:, m - 1].copy()
        beyond |= np.abs(k) >= 1
        k[beyond] = 0.0
        a[:, : m - 1] = (a[:, : m - 1] + k[:, None] * a[:, : m - 1][:, ::-1]) / (1 - k**2)[:, None]
    return beyond
