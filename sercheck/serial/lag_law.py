"""The laws of a sample autocorrelation under a bound, or under the history it came from; depends on ``serial`` only."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import special

from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.autocovariances import autocorrelation_of
from sercheck.serial.autoregression import (
    Autoregression,
    burg,
    impose_autocorrelation,
    innovations,
    largest_order,
    model_autocorrelation,
    root_beyond,
)
from sercheck.serial.centre import centred
from sercheck.serial.far_lag import ROOT
from sercheck.serial.gap_variance import gapped_variance, row_counts
from sercheck.serial.own_models import OwnModels
from sercheck.serial.sampling_error import Residuals, autocorrelation_bias, bartlett_weights, mean_bias, model_lags
from sercheck.serial.window_t import WindowT, count_windows, window_t, windows

SLOW_ROOT = 0.85
"""Largest root from which a feed counts as persistent ('φ about .9') and a batch needs ``FEWEST_SLOW`` rows."""
FEWEST, FEWEST_SLOW = 48, 96
"""Rows of a batch below which the model's law is not used (found by simulation)."""
KAPPA = 2.0
"""Ratio of the robust to the linear variance beyond which only history's windows are trusted (found by simulation)."""
SCATTER = (0.02, 0.90)
"""Quantiles between which the windows' variance must lie for the model to be trusted (found by simulation)."""
EDGE = 1 - 1e-12
"""Autocorrelations are held inside ±this before atanh; only pairs left by gaps can give more."""


@dataclass(frozen=True)
class Lagged:
    """What is known of the autocorrelations of S series at L lags.

    Attributes:
        r: sample autocorrelations, shape (S, L).
        rows: rows that count at each lag: complete pairs plus lag, the number of rows for a complete series, (S, L).
        seen: which rows are observed, shape (S, T).
        model: autoregression of each series.
        residuals: its innovations, prepared.
        lags: the lags, shape (L,).
        wanders: there is no level that the series returns to, shape (S,).
        cycle: steps of the cycle whose means, of these very rows, were taken out; 1 for the mean alone.
    """

    r: Floats
    rows: Ints
    seen: Bools
    model: Autoregression
    residuals: Residuals
    lags: Ints
    wanders: Bools
    cycle: int = 1


@dataclass(frozen=True)
class Law:
    """The law of r_k: (atanh r_k - centre)/scale follows Student's t with ``df`` (inf: normal), shape (S, L).

    Where gaps make the denominator of r_k scatter by itself, atanh overstates the far side towards ±1 and the plain
    scale the near one; there ``doubtful`` asks for both laws, and the more careful one counts.

    Attributes:
        centre, scale, df: on the scale of atanh.
        plain_centre: expectation of r_k itself.
        error: standard error of r_k itself.
        doubtful: the series has gaps and the law is not its windows' own.
    """

    centre: Floats
    scale: Floats
    df: Floats
    plain_centre: Floats
    error: Floats
    doubtful: Bools


def forward(r: Floats) -> Floats:
    """The variable z = atanh r, whose law is nearly normal (Fisher 1921)."""
    return np.arctanh(np.clip(r, -EDGE, EDGE))


def lagged(x: Floats, lags: Ints) -> Lagged:
    """Autocorrelations and model of each series of ``x``, shape (S, T), NaN is missing."""
    data = centred(x)
    longest = int(lags.max(initial=1))
    model = burg(x, max_order=None if longest == 1 else largest_order(x.shape[1], longest))
    residuals = Residuals(innovations(x, model), model.order)
    r, rows = autocorrelation_of(data, lags), row_counts(data.seen, lags)
    return Lagged(r, rows, data.seen, model, residuals, lags, root_beyond(model, ROOT))


def lagged_alone(x: Floats, lags: Ints, cycle: int = 1, models: OwnModels | None = None) -> Lagged:
    """The same of a window that is judged without a history: its model may hold an echo beyond its order.

    Args:
        x: shape (S, T), NaN is missing.
        lags: from 1.
        cycle: steps of the cycle whose means, of these very rows, were taken out; 1 for the mean alone.
        models: those of ``x``, where other statistics need them too.
    """
    models = OwnModels(x) if models is None else models
    own, data = models.alone(int(lags.max(initial=1))), models.data
    r, rows = autocorrelation_of(data, lags), row_counts(data.seen, lags)
    return Lagged(r, rows, data.seen, own.model, own.residuals, lags, own.wanders, cycle)


@dataclass(frozen=True)
class _Moments:
    """At one lag, of models whose autocorrelations are ``rho``: n times the variance, n times the bias, κ; all (S,)."""

    at: Floats
    variance: Floats
    bias: Floats
    kappa: Floats


def _moments(seen: Lagged, rho: Floats, column: int) -> _Moments:
    lag = int(seen.lags[column])
    rows = np.maximum(seen.rows[:, column], 1)
    weights = bartlett_weights(rho, lag)
    variance = np.einsum("ij,ij->i", weights, weights)
    kappa = np.fmax(1.0, seen.residuals.robust_variance(weights, rows, lag) * rows / variance)
    return _Moments(rho[:, lag], _with_gaps(variance, rho, seen.seen, lag), autocorrelation_bias(rho, lag), kappa)


def _with_gaps(variance: Floats, rho: Floats, seen: Bools, lag: int) -> Floats:
    gaps = np.flatnonzero(~seen.all(axis=1))
    if not len(gaps) or lag >= seen.shape[1]:
        return variance
    variance = variance.copy()
    # the sum over gaps is an estimate and may fall short of what a complete series would have
    variance[gaps] = np.fmax(variance[gaps], gapped_variance(rho[gaps], seen[gaps], lag))
    return variance


def bound_law(seen: Lagged, b: float) -> Law:
    """The law of each r_k when the true autocorrelation is exactly ``b``.

    The model of each series is changed in its reflection coefficient of order k alone so that its ρ_k is b; V, bias β
    and Bartlett weights come from that model, the robust variance V_h from them and the innovations of the fitted
    model (those of the changed one are correlated where the bound is not met, and cost power). With s² = max(V, V_h)
    and g = 1 - b² the statistic [atanh r_k - atanh b - β/g - b s²/g²] g/s is standard normal (Bartlett 1946; Kendall
    1954; Taylor 1984). Where the rows' own means at the s places of a cycle were taken out, n - s of the n rows are
    left to tell, and the means' part of β is that of a cycle (``mean_bias``).

    Args:
        seen: what ``lagged_alone`` gave.
        b: inside (-1, 1).
    """
    g = 1 - b * b
    s2, bias = np.empty(seen.r.shape), np.empty(seen.r.shape)
    for column, lag in enumerate(seen.lags.tolist()):
        rows = np.maximum(seen.rows[:, column], 1)
        rho = model_autocorrelation(impose_autocorrelation(seen.model, lag, b), model_lags(lag))
        told = _moments(seen, rho, column)
        free = np.maximum(rows - seen.cycle, 1) if seen.cycle > 1 else rows
        s2[:, column] = told.kappa * told.variance / free
        bias[:, column] = (told.bias - mean_bias(rho, lag)) / free + mean_bias(rho, lag, seen.cycle) / rows
    s = np.sqrt(s2)
    centre = np.arctanh(b) + bias / g + b * s2 / g**2
    gaps = ~seen.seen.all(axis=1, keepdims=True)
    return Law(centre, s / g, np.full(s.shape, np.inf), b + bias, s, np.broadcast_to(gaps, s.shape))


@dataclass(frozen=True)
class Past:
    """The law of a batch's autocorrelations that history gives; arrays of shape (S, L).

    Attributes:
        law: the law of r_k of the batch.
        batch: the batch's own autocorrelations.
        rows: rows of the batch that count at each lag.
        r: history's autocorrelations.
        past_rows: rows of history that count at each lag.
        by_windows: the law comes from history's windows alone.
        windows: windows of history that have the statistic.
        thin: the batch has under 3/4 of the rows that its windows have on average, so that they scatter less.
    """

    law: Law
    batch: Floats
    rows: Ints
    r: Floats
    past_rows: Ints
    by_windows: Bools
    windows: Ints
    thin: Bools


def history_law(history: Floats, batch: Floats, lags: Ints) -> Past:
    """The law of a batch's autocorrelations when nothing has changed since history.

    All model quantities come from history's autoregression. With ρ its autocorrelation at lag k, g = 1 - ρ², v = n V
    and κ = max(1, V_h/V), atanh r_b - atanh r_h less the difference of their biases, β/g + ρ v/(n g²), has the variance
    κ v (1/n + 1/N)/g². Where that model cannot be trusted, history's windows of the batch's length alone give the law,
    Student's t on m - 1 degrees of freedom: κ > 2; a root beyond .98; the variance of the statistic in the windows
    outside the .02 to .90 quantiles of what the model foretells; a batch under 48 rows (96 where the largest root
    exceeds .85); a history under three batches.

    Args:
        history: shape (S, N), seasonal profile taken out; NaN is missing.
        batch: shape (S, n), the same.
        lags: from 1.
    """
    past = lagged(history, lags)
    data = centred(batch)
    r, rows = autocorrelation_of(data, lags), row_counts(data.seen, lags)
    model_law, kappa = _model_law(past, rows, data.seen)
    old, usual_rows = _in_windows(history, batch.shape[1], lags, rows)
    told, count = window_t(old, forward(r)), count_windows(old)
    fewest_rows = np.where(root_beyond(past.model, SLOW_ROOT), FEWEST_SLOW, FEWEST)[:, None]
    short = (rows < fewest_rows) | (past.rows < 3 * rows)
    foretold = _as_foretold(told, count, model_law, past.rows, rows)
    by_windows = short | past.wanders[:, None] | ~(kappa <= KAPPA) | ~foretold
    own = np.tanh(told.centre)
    law = Law(
        np.where(by_windows, told.centre, model_law.centre),
        np.where(by_windows, told.scale, model_law.scale),
        np.where(by_windows, told.df, np.inf),
        np.where(by_windows, own, model_law.plain_centre),
        np.where(by_windows, told.scale * (1 - own**2), model_law.error),
        model_law.doubtful & ~by_windows,
    )
    return Past(law, r, rows, past.r, past.rows, by_windows, count, 4 * rows < 3 * usual_rows)


def _model_law(past: Lagged, rows: Ints, seen: Bools) -> tuple[Law, Floats]:
    """The law of r_b from history's model, and κ."""
    shape = rows.shape
    at, kappa, bias, once, ever = (np.empty(shape) for _ in range(5))
    for column, lag in enumerate(past.lags.tolist()):
        rho = model_autocorrelation(past.model, model_lags(lag))
        told = _moments(past, rho, column)
        weights = bartlett_weights(rho, lag)
        linear = np.einsum("ij,ij->i", weights, weights)
        at[:, column], bias[:, column], kappa[:, column] = told.at, told.bias, told.kappa
        once[:, column] = _with_gaps(linear, rho, seen, lag)
        ever[:, column] = told.variance
    g = 1 - at**2
    n, N = np.maximum(rows, 1), np.maximum(past.rows, 1)
    error = np.sqrt(kappa * (once / n + ever / N))
    shift = bias * (1 / n - 1 / N)
    with np.errstate(divide="ignore", invalid="ignore"):  # a series that is foretold without error has no law
        centre = forward(past.r) + shift / g + at / g**2 * (once / n - ever / N)
        error_forward = error / g
    gaps = np.logical_not(seen.all(axis=1) & past.seen.all(axis=1))[:, np.newaxis]
    plain = past.r + shift
    return Law(centre, error_forward, np.full(shape, np.inf), plain, error, np.broadcast_to(gaps, shape)), kappa


def _in_windows(history: Floats, length: int, lags: Ints, rows: Ints) -> tuple[Floats, Floats]:
    """The statistic atanh r_k in history's windows, (S, m, L), and mean rows; NaN under half of the batch's rows."""
    stretches = windows(history, length)
    series, m, _ = stretches.shape
    data = centred(stretches.reshape(series * m, length))
    r = autocorrelation_of(data, lags).reshape(series, m, len(lags))
    counts = row_counts(data.seen, lags).reshape(series, m, len(lags))
    kept = (2 * counts >= rows[:, None, :]) & ~np.isnan(r)
    mean = np.where(kept, counts, 0).sum(axis=1) / np.maximum(kept.sum(axis=1), 1)
    return forward(np.where(kept, r, np.nan)), mean


def _as_foretold(told: WindowT, count: Ints, law: Law, past_rows: Ints, rows: Ints) -> Bools:
    """Whether the windows scatter as the model says; no contradiction while there are fewer than two."""
    with np.errstate(divide="ignore", invalid="ignore"):
        observed = told.scale**2 / (1 + 1 / count)
        ratio = (count - 1) * observed / (law.scale**2 / (1 + rows / past_rows))
    freedom = np.maximum(count - 1, 1)
    low, high = (special.chdtri(freedom, 1 - q) for q in SCATTER)
    with np.errstate(invalid="ignore"):
        return np.asarray((count < 2) | ((ratio >= low) & (ratio <= high)))
