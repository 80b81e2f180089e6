"""One number a batch for each thing that may go wrong, over many batches and series; numpy, scipy.special, ``serial``.

Every function gives shape (S, B): the statistic of each batch, NaN where too few of its values are there. Batches lie
one after another along time.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy import special

from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.autoregression import Autoregression, step_up

FLOOR = 0.01
"""Added to a variance of scores (which is about 1) before its log is taken: a dead batch has a log too."""

FARTHEST = 8.0
"""Scores of amplitude and phase are clipped here: beyond, the tail of t has no digits left."""

OBSERVED = 0.5
"""Share of a batch's values that must be there for it to have a statistic (a plain half)."""

INDEPENDENT = 35.0
"""Mean square of fourth differences over that of first ones, of independent values."""

ROUGH_VARIANCE = 1.0530612244897959
"""n times the variance of that ratio's logarithm for independent normal values: 2 mean (g⁴/70 - g/2)², g = |1 - e^iw|²
over all frequencies w (Bartlett 1946)."""

EXISTING = 0.75
"""Share of innovations that must exist; else the model's order is halved, since each gap costs order + 1 of them."""


def batches(x: Floats, n: int) -> Floats:
    """View (S, B·n) as (S, B, n)."""
    return x.reshape(len(x), x.shape[1] // n, n)


def _mean(x: Floats) -> tuple[Floats, Ints]:
    """Mean over the last axis of what is there (NaN where less than half is), and how much there is."""
    seen = ~np.isnan(x)
    count = seen.sum(axis=-1)
    enough = count >= max(2.0, OBSERVED * x.shape[-1])
    mean = np.where(seen, x, 0.0).sum(axis=-1) / np.maximum(count, 1)
    return np.where(enough, mean, np.nan), count


def level(z: Floats, n: int) -> Floats:
    """Mean of the scores z(r), r the residuals of the profile."""
    return _mean(batches(z, n))[0]


def spread(z: Floats, n: int) -> Floats:
    """Variance of the scores z(r), plus ``FLOOR``."""
    cut = batches(z, n)
    mean, count = _mean(cut)
    square = np.where(np.isnan(cut), 0.0, (cut - mean[..., None]) ** 2).sum(axis=-1)
    return np.where(np.isnan(mean), np.nan, square / np.maximum(count - 1, 1) + FLOOR)


def power(z: Floats, n: int) -> Floats:
    """Mean square of the scores z(e), e the innovations, plus ``FLOOR``."""
    return _mean(batches(z, n) ** 2)[0] + FLOOR


def difference_autocorrelation(y: Floats, n: int) -> Floats:
    """Inverse hyperbolic tangent of the correlation of neighbouring first differences, Σ ab / Σ ½(a² + b²).

    The season stays in: what smooths the noise smooths the season's corners too.
    """
    d = np.diff(batches(y, n), axis=-1)
    a, b = d[..., :-1], d[..., 1:]
    told = ~np.isnan(a) & ~np.isnan(b)
    product = np.where(told, a * b, 0.0).sum(axis=-1)
    size = np.where(told, a * a + b * b, 0.0).sum(axis=-1) / 2
    enough = (told.sum(axis=-1) >= max(2.0, OBSERVED * (n - 2))) & (size > 0)
    r = np.where(enough, product / np.where(size > 0, size, 1.0), np.nan)
    return np.asarray(np.arctanh(np.clip(r, -1 + 1e-12, 1 - 1e-12)))


def roughness(y: Floats, n: int) -> Floats:
    """Ln of the mean square of the fourth differences over that of the first, the season left in.

    Independent values give ln 35 (Σ binom(4, j)² / Σ binom(1, j)² = 70/2), smooth ones much less: a cycle of a day of
    hours alone gives ln .0003. The mean square successive difference (von Neumann 1941) carried on: what is smooth
    is gone from the fourth differences, so that they hold the noise, and smoothing takes most of it.
    """
    cut = batches(y, n)

    def mean_square(order: int) -> Floats:
        d = np.diff(cut, n=order, axis=-1)
        told = ~np.isnan(d)
        enough = told.sum(axis=-1) >= max(2.0, OBSERVED * (n - order))
        total = np.where(told, d, 0.0) ** 2
        return np.where(enough, total.sum(axis=-1) / np.maximum(told.sum(axis=-1), 1), 0.0)

    if n < 6:
        return np.full(cut.shape[:2], np.nan)
    first, fourth = mean_square(1), mean_square(4)
    able = (first > 0) & (fourth > 0)
    return np.where(able, np.log(np.where(able, fourth, 1.0)) - np.log(np.where(able, first, 1.0)), np.nan)


def rough_unit(log_ratio: Floats) -> Floats:
    """From ln(fourth over first differences) to the roughness, 1 for independent values."""
    with np.errstate(over="ignore"):
        return np.asarray(np.exp(log_ratio) / INDEPENDENT)


def portmanteau(e: Floats, n: int, stride: int, lags: int) -> Floats:
    """Ln Q of the innovations of windows that end ``stride`` apart, the last with the last step.

    Q = Σ_{k ≤ lags} t_k², t_k = Σ e_t e_{t-k} / √(Σ e_t² e_{t-k}²) (Taylor 1984), which allows for changing variance.

    Args:
        e: shape (S, T), NaN is missing.
        n: steps of a window.
        stride: steps between the ends of two windows.
        lags: autocorrelations in the sum.
    """
    ends = np.arange(e.shape[1], n - 1, -stride)[::-1]

    def window_sums(v: Floats) -> Floats:
        total = np.pad(np.cumsum(v, axis=1), ((0, 0), (1, 0)))
        return np.asarray(total[:, ends] - total[:, ends - n])

    enough = window_sums((~np.isnan(e)).astype(np.float64)) >= max(2.0, OBSERVED * n)
    q = np.zeros(enough.shape)
    for k in range(1, lags + 1):
        product = np.zeros_like(e)
        product[:, k:] = np.nan_to_num(e[:, k:] * e[:, :-k])
        size = window_sums(product**2)
        q += np.where(size > 0, window_sums(product) ** 2 / np.where(size > 0, size, 1.0), 0.0)
    return np.where(enough & (q > 0), np.log(np.where(q > 0, q, 1.0)), np.nan)


def mean_earlier(table: Floats, nearest: int = 7, farthest: int = 34) -> Floats:
    """Mean of the statistics 7 to 34 places earlier, those that are there (at least half); same shape.

    They share no rows with a window of seven batches, and go back over the four weeks before it.
    """
    width = farthest - nearest + 1
    seen = ~np.isnan(table)
    total = np.cumsum(np.pad(np.where(seen, table, 0.0), ((0, 0), (farthest + 1, 0))), axis=1)
    count = np.cumsum(np.pad(seen, ((0, 0), (farthest + 1, 0))).astype(np.int64), axis=1)
    size = table.shape[1]
    sums = total[:, width : width + size] - total[:, :size]
    counts = count[:, width : width + size] - count[:, :size]
    return np.where(counts >= width // 2, sums / np.maximum(counts, 1), np.nan)


@dataclass(frozen=True)
class Fitted:
    """A coefficient of a least-squares fit within each batch; every array has shape (S, B).

    Attributes:
        estimate: the coefficient.
        error: its standard error by the batch's own residual variance.
        df: degrees of freedom of that variance.
        score: Φ⁻¹(F_t((estimate - usual)/error)), clipped: normal whatever the degrees of freedom.
    """

    estimate: Floats
    error: Floats
    df: Floats
    score: Floats

    def of_score(self, score: Floats, usual: float) -> Floats:
        """The newest batch's estimate that would have this score, shape (S,): the way back to the unit."""
        tail = special.ndtr(-np.minimum(np.abs(score), FARTHEST))  # the smaller tail keeps its digits
        t = -np.sign(score) * special.stdtrit(np.maximum(self.df[:, -1], 1.0), tail)
        return np.asarray(usual + t * self.error[:, -1])


def amplitude(y: Floats, here: Floats, n: int) -> Fitted:
    """Strength of the season in each batch, 1 being the profile's: filtered y on filtered [1, profile].

    Args:
        y: the series through the autoregressive filter, shape (S, B·n).
        here: the profile through the same filter.
        n: steps in one batch.
    """
    return _fit(batches(y, n), [batches(here, n)], 1.0)


def slip(y: Floats, here: Floats, ahead: Floats, behind: Floats, n: int) -> Fitted:
    """Steps by which each batch runs late: filtered y on [1, p, (p₊ + p₋)/2 - p, (p₋ - p₊)/2], the last coefficient.

    The symmetric term takes up the noise of the profile; p₊ and p₋ are the profile one place ahead and behind.
    """
    p, plus, minus = batches(here, n), batches(ahead, n), batches(behind, n)
    return _fit(batches(y, n), [p, (plus + minus) / 2 - p, (minus - plus) / 2], 0.0)


def _fit(y: Floats, regressors: list[Floats], usual: float) -> Fitted:
    """Least squares of each batch on [1, regressors]; the last coefficient against ``usual``."""
    told = ~np.isnan(y)
    for x in regressors:
        told &= ~np.isnan(x)
    count = told.sum(axis=-1)
    df = count - 1 - len(regressors)

    def about(x: Floats) -> Floats:
        mean = np.where(told, x, 0.0).sum(axis=-1) / np.maximum(count, 1)
        return np.where(told, x - mean[..., None], 0.0)

    left = about(y)
    basis = [about(x) for x in regressors]
    # Gram-Schmidt, the wanted regressor last: its coefficient needs only what the others leave of it
    scale = (basis[-1] ** 2).sum(axis=-1)
    for k in range(len(basis) - 1):
        x = basis[k]
        square = (x**2).sum(axis=-1)
        inverse = np.where(square > 0, 1 / np.where(square > 0, square, 1.0), 0.0)
        left = left - (np.einsum("...t,...t->...", left, x) * inverse)[..., None] * x
        for j in range(k + 1, len(basis)):
            basis[j] = basis[j] - (np.einsum("...t,...t->...", basis[j], x) * inverse)[..., None] * x
    wanted = basis[-1]
    square = (wanted**2).sum(axis=-1)
    able = (count >= OBSERVED * y.shape[-1]) & (df >= 3) & (square > 1e-10 * scale) & (scale > 0)
    square = np.where(able, square, 1.0)
    estimate = np.einsum("...t,...t->...", left, wanted) / square
    rest = ((left - estimate[..., None] * wanted) ** 2).sum(axis=-1)
    error = np.sqrt(rest / np.maximum(df, 1) / square)
    able &= error > 0
    t = (estimate - usual) / np.where(able, error, 1.0)
    # by the smaller tail, so that the upper one keeps its digits
    tail = special.stdtr(np.maximum(df, 1).astype(np.float64), -np.abs(t))
    score = np.clip(-np.sign(t) * special.ndtri(np.maximum(tail, 1e-300)), -FARTHEST, FARTHEST)
    blank = np.where(able, 0.0, np.nan)
    return Fitted(estimate + blank, error + blank, df.astype(np.float64), score + blank)


def through_filter(x: Floats, model: Autoregression) -> Floats:
    """x_t - Σ a_j x_{t-j}, shape (S, T); NaN where a value that is needed is missing or before the start."""
    out = x.copy()
    for j in range(1, int(model.order.max(initial=0)) + 1):
        uses = j <= model.order
        shifted = np.full_like(x, np.nan)
        shifted[:, j:] = x[:, :-j]
        out = np.where(uses[:, None], out - model.coefficients[:, j - 1 : j] * shifted, out)
    return out


def existing(model: Autoregression, x: Floats, wanted: Bools) -> Autoregression:
    """Halve each model's order until ``EXISTING`` of the innovations at ``wanted`` steps of ``x`` exist.

    The shorter model of Burg's recursion has the same first reflection coefficients.

    Args:
        model: fitted models.
        x: what the model filters, shape (S, T).
        wanted: steps that count (not closed, not held), shape (S, T).
    """
    order = model.order.copy()
    missing = np.cumsum(np.isnan(x), axis=1)
    due = np.maximum((wanted & ~np.isnan(x)).sum(axis=1), 1)
    steps = np.arange(x.shape[1])
    while True:
        start = steps - order[:, None] - 1
        before = np.where(start >= 0, np.take_along_axis(missing, np.maximum(start, 0), axis=1), 0)
        whole = (missing == before) & (steps >= order[:, None]) & wanted
        poor = (whole.sum(axis=1) < EXISTING * due) & (order > 0)
        if not poor.any():
            break
        order = np.where(poor, order // 2, order)
    kept = np.arange(1, model.reflection.shape[1] + 1) <= order[:, None]
    reflection = np.where(kept, model.reflection, 0.0)
    return replace(model, order=order, reflection=reflection, coefficients=step_up(reflection))
