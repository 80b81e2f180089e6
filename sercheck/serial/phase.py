"""Has the clock slipped: a batch against history's profile moved by a few steps; depends on numpy and ``serial``."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.matched_filter import SMALLEST_ERROR, SeasonModel, fit_amplitude
from sercheck.serial.risk import t_quantile, t_tail

FEWEST_POINTS = 12
"""Whitened points below which a slip cannot be told from the noise of four fitted coefficients (simulated)."""
SURE = 0.84
"""Normal quantile of power .8, with which what is looked for must be seen, or nothing is said."""


@dataclass(frozen=True)
class Slip:
    """Slip of a batch against history's profile; every array has shape (S,).

    Attributes:
        value: steps by which the batch is late (positive) or early (negative); 0 where no moved profile fits better.
        scale: its standard error, the profile's errors included.
        df: degrees of freedom.
        looks: stretches times distances among which the risk is shared; 0 where none could have shown a slip.
        naive: the standard error had the rows been independent.
        points: whitened points of the whole batch.
        needed: how many times its noise the best look would have to be stronger, 1 or less where a slip can be seen.
    """

    value: Floats
    scale: Floats
    df: Floats
    looks: Ints
    naive: Floats
    points: Ints
    needed: Floats


@dataclass(frozen=True)
class _Look:
    value: Floats
    scale: Floats
    df: Floats
    foreseen: Floats
    naive: Floats


def phase_slip(batch: Floats, model: SeasonModel, first: int, reach: int, risk: float) -> Slip:
    """Slip of the seasonal profile in a batch, searched up to ``reach`` steps either way.

    With p the profile and p_{±d} the profile moved by d steps, the whitened batch is regressed on the whitened
    [1, p, (p_{+d} + p_{-d})/2 - p, (p_{-d} - p_{+d})/2]; the last coefficient γ is 1 when the batch is late by d, so
    γ d is the slip in steps, its error widened by √(1 + n/N). The symmetric term takes up the noise of the profile,
    which would otherwise make one of the moved profiles fit better by chance. A slip is told only where the profile
    moved that way also has the smaller residual sum, with an amplitude of at least 0; elsewhere it is 0.

    The stretches looked at are the whole batch and its later half in whole cycles, where a slip in mid-batch is not
    diluted. A look takes part where a slip of d could be seen with power .8 at history's innovation variance and the
    share of the risk that it gets; the risk is shared among those that do (Bonferroni), and the one with the smallest
    p-value is told.

    Args:
        batch: shape (S, n), NaN is missing.
        model: what history teaches.
        first: the batch's first step on the axis of the model's cycles.
        reach: largest slip searched, in steps, at least 1.
        risk: two-sided risk.
    """
    n = batch.shape[1]
    shapes = [model.profile(first, first + n, shift) for shift in range(-reach, reach + 1)]
    shapes = [np.where(np.isnan(batch), np.nan, shape) for shape in shapes]
    white = [model.whitened(shape) for shape in shapes]
    y = model.whitened(batch)
    looks = []
    for length in _stretches(n, model.cycles[0].length):
        tail = slice(n - length, n)
        for d in range(1, reach + 1):
            moved = [white[reach + k][:, tail] for k in (0, d, -d)]
            raw = [shapes[reach + k][:, tail] for k in (0, d, -d)]
            looks.append(_look(y[:, tail], moved, raw, d, model))
    return _best(looks, np.sum(~(np.isnan(y) | np.isnan(white[reach])), axis=1), risk)


def _stretches(n: int, length: int) -> tuple[int, ...]:
    half = (n // length + 1) // 2 * length
    return (n, half) if 0 < half < n else (n,)


def _look(y: Floats, moved: Sequence[Floats], raw: Sequence[Floats], d: int, model: SeasonModel) -> _Look:
    """One stretch and distance; ``moved`` and ``raw`` hold the profile at 0, +d and -d, whitened and not."""
    still, ahead, behind = moved
    gamma, weight, rss, df = _last_coefficient(y, _columns(moved))
    _, raw_weight, _, _ = _last_coefficient(raw[0], _columns(raw))
    widening = model.widening(y.shape[1])
    with np.errstate(divide="ignore", invalid="ignore"):
        scale = d * np.sqrt(rss / df * weight * widening)
        foreseen = np.sqrt(model.variance * weight * widening)
        naive = d * np.sqrt(model.spread * raw_weight)
        better = np.where(gamma > 0, _fits_better(y, still, behind), _fits_better(y, still, ahead))
    value = np.where(np.isnan(gamma), np.nan, np.where(better, d * gamma, 0.0))
    return _Look(value, np.maximum(scale, d * SMALLEST_ERROR), df, np.maximum(foreseen, SMALLEST_ERROR), naive)


def _columns(moved: Sequence[Floats]) -> tuple[Floats, Floats, Floats]:
    still, ahead, behind = moved
    return still, (ahead + behind) / 2 - still, (behind - ahead) / 2


def _fits_better(y: Floats, still: Floats, moved: Floats) -> Bools:
    _, rss, _, _ = fit_amplitude(y, still)
    amplitude, other, _, _ = fit_amplitude(y, moved)
    with np.errstate(invalid="ignore"):
        return np.asarray((other < rss) & (amplitude >= 0))


def _last_coefficient(y: Floats, columns: Sequence[Floats]) -> tuple[Floats, Floats, Floats, Floats]:
    """Least squares of y on [1, columns]: the last coefficient, its variance over σ², residual sum, freedom.

    Columns that repeat each other (a pure sinusoid's symmetric term is the profile again) share their coefficient:
    the pseudo-inverse of the scaled normal equations leaves the last one as it is, if it does not take part.
    """
    stack = np.stack([y, *columns])
    seen = ~np.isnan(stack).any(axis=0)
    m = seen.sum(axis=1)
    stack = np.where(seen, stack, 0.0)
    stack -= (stack.sum(axis=2) / np.maximum(m, 1))[:, :, None]
    stack = np.where(seen, stack, 0.0)
    y, x = stack[0], stack[1:]
    norm = np.sqrt(np.einsum("kst,kst->sk", x, x))
    scale = np.where(norm > 0, norm, 1.0)
    gram = np.einsum("jst,kst->sjk", x, x) / (scale[:, :, None] * scale[:, None, :])
    side = np.einsum("kst,st->sk", x, y) / scale
    inverse = np.linalg.pinv(gram, rcond=1e-10, hermitian=True)
    beta = np.einsum("sjk,sk->sj", inverse, side)
    rss = np.maximum(np.einsum("st,st->s", y, y) - np.einsum("sk,sk->s", beta, side), 0.0)
    df = m - len(columns) - 1.0
    able = (df > 0) & (norm[:, -1] > 1e-12 * norm[:, 0])
    gamma = np.where(able, beta[:, -1] / scale[:, -1], np.nan)
    return gamma, np.where(able, inverse[:, -1, -1] / scale[:, -1] ** 2, np.nan), rss, np.where(able, df, np.nan)


def _best(looks: Sequence[_Look], points: Ints, risk: float) -> Slip:
    """The look with the smallest p-value among those that could have shown a slip."""
    value, scale, df, foreseen, naive = (
        np.stack([getattr(look, name) for look in looks]) for name in ("value", "scale", "df", "foreseen", "naive")
    )
    rank = np.argsort(np.argsort(foreseen, axis=0), axis=0)
    looked = np.zeros(value.shape[1], dtype=np.int64)
    for count in range(1, len(looks) + 1):
        # with the risk shared among the best `count` looks, can the worst of them still see a slip?
        enough = _needed(foreseen, df, risk / count) <= 1
        looked = np.where(np.where(rank < count, enough, True).all(axis=0), count, looked)
    takes = rank < looked
    with np.errstate(invalid="ignore", divide="ignore"):
        p = np.where(takes, t_tail(np.abs(value) / scale, df), np.inf)
    # where none takes part the first one, the whole batch, is told for the record
    pick = (np.where(looked > 0, np.argmin(p, axis=0), 0), np.arange(value.shape[1]))
    needed = _needed(foreseen, df, risk).min(axis=0)
    return Slip(value[pick], scale[pick], df[pick], looked, naive[pick], points, needed)


def _needed(foreseen: Floats, df: Floats, risk: float) -> Floats:
    """How many times its noise a slip of the distance looked for would have to be stronger to be seen."""
    needed = (t_quantile(1 - risk / 2, df) + SURE) * foreseen
    return np.where(np.isnan(needed), np.inf, needed)
