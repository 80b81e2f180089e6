"""A batch against history's seasonal profile: what history teaches, and the amplitude of the profile in the batch.

Depends on numpy, ``scipy.special`` and ``serial`` only.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields, replace
from typing import Any, NamedTuple

import numpy as np
from scipy import special

from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.autoregression import Autoregression, burg, innovations
from sercheck.serial.season import Profile, cycle_numbers, robust_phase_means
from sercheck.serial.window_t import FEWEST_WINDOWS, windows

HIGHEST_ORDER = 6
"""Highest order of the whitening model: more would cost points of a one-cycle batch (chosen by simulation)."""
BLOCK = 1 << 18
"""Values of history learned from at a time: temporaries of 2 MB stay in a cache, whatever the number of series."""
STILL_CORRELATED = 3.0
"""Standard errors by which history's innovations may correlate at the season before it is said to evolve."""
SCATTERS = 0.001
"""P-value of the scatter of history's window amplitudes under which the season is said to evolve."""


class Cycle(NamedTuple):
    """A season by its length and the place of every step in it.

    Attributes:
        length: steps in one cycle.
        phase: place in the cycle of every step, 0 .. length - 1, shape (T,).
    """

    length: int
    phase: Ints


@dataclass(frozen=True)
class SeasonModel:
    """What history teaches about a season, for S series.

    Attributes:
        cycles: the seasons whose profile could be meant: the one asked for first, then longer ones that contain it.
        means: profile of each of them, shape (S, length).
        choice: index into them, per series: the one that foretells history best, shape (S,).
        length: length of the chosen one, shape (S,).
        count: cycles of the chosen one that taught, on average over its places, shape (S,).
        noise: autoregression of order at most 6 of the deseasonalised history.
        variance: variance of history's innovations, corrected for what was fitted, shape (S,).
        spread: variance of the deseasonalised history, corrected likewise, shape (S,).
        taught: values of history that taught, shape (S,).
        evolving: the profile is not the same all through history, shape (S,).
        scatter: variance of the amplitudes of history's windows over that of their errors, at least 1, shape (S,).
        windows: degrees of freedom behind ``scatter``, shape (S,).
    """

    cycles: tuple[Cycle, ...]
    means: tuple[Floats, ...]
    choice: Ints
    length: Ints
    count: Floats
    noise: Autoregression
    variance: Floats
    spread: Floats
    taught: Ints
    evolving: Bools
    scatter: Floats
    windows: Floats

    def profile(self, first: int, last: int, shift: int = 0) -> Floats:
        """The profile at steps ``first`` to ``last`` (exclusive), read ``shift`` steps ahead, shape (S, steps)."""
        return _profile(self.cycles, self.means, self.choice, slice(first, last), shift)

    def whitened(self, x: Floats) -> Floats:
        """``x`` through history's autoregression: a constant stays one; NaN where a value needed is missing."""
        return innovations(x, self.noise)

    def widening(self, n: int) -> Floats:
        """Factor by which errors of the profile raise the variance of what is fitted to n steps: 1 + n/N.

        A batch shorter than the profile's cycle meets each place at most once: then the cycle counts, not n.
        """
        return np.asarray(1 + np.maximum(n, self.length) / np.maximum(self.taught, 1))


def _profile(cycles: tuple[Cycle, ...], means: Sequence[Floats], choice: Ints, part: slice, shift: int = 0) -> Floats:
    shape = means[0][:, (cycles[0].phase[part] + shift) % cycles[0].length]
    for place in range(1, len(cycles)):
        other = means[place][:, (cycles[place].phase[part] + shift) % cycles[place].length]
        shape = np.where(choice[:, None] == place, other, shape)
    return shape


def learn_season(
    history: Floats, cycles: Sequence[Cycle], window: int, left_out: Bools | None = None
) -> SeasonModel:
    """Learn a season's profile, the noise around it, and whether the season stays the same.

    The profile is the mean of the cycles that are not broken. Where longer seasons contain the one asked for (a week
    the day), the one whose left-one-cycle-out errors are smallest is taken, so that a day of the week with its own
    shape is not taken for a fault. The noise is an autoregression of order at most 6 (Burg 1975, AICc).

    The season evolves when history's innovations still correlate at the season (Σ e_t e_{t-s} over its robust error,
    Taylor 1984, more than 3; corrected for the -1/C that taking out means of C cycles leaves) or when the amplitudes of
    windows of the batch's length scatter beyond their errors (χ² test, p under .001).

    Args:
        history: shape (S, N), NaN is missing (rows that should not teach are given as missing).
        cycles: the season asked for, then longer ones of which it is a divisor; their phases cover history and batch.
        window: steps of the batch.
        left_out: steps of history that teach the profile and not how noise and amplitude scatter, shape (N,).

    Returns:
        The model; NaN variance where history is too short to fit anything.
    """
    block = max(1, BLOCK // max(history.shape[1], 1))
    firsts = range(0, max(len(history), 1), block)
    aside = np.zeros(history.shape[1], dtype=bool) if left_out is None else left_out
    return _joined([_learn(history[first : first + block], tuple(cycles), window, aside) for first in firsts])


def _joined(models: list[SeasonModel]) -> SeasonModel:
    """The models of blocks of series as one."""
    first = models[0]
    if len(models) == 1:
        return first

    def join(name: str, part: str | None = None) -> Any:
        pieces = [getattr(model, name) for model in models]
        return np.concatenate(pieces if part is None else [getattr(piece, part) for piece in pieces])

    noise = replace(first.noise, **{field.name: join("noise", field.name) for field in fields(first.noise)})
    means = tuple(np.concatenate(pieces) for pieces in zip(*(model.means for model in models), strict=True))
    rest = {field.name: join(field.name) for field in fields(first) if field.name not in ("cycles", "means", "noise")}
    return SeasonModel(cycles=first.cycles, means=means, noise=noise, **rest)


def _learn(history: Floats, cycles: tuple[Cycle, ...], window: int, left_out: Bools) -> SeasonModel:
    steps = history.shape[1]
    day = cycle_numbers(cycles[0].phase[:steps])
    fits = [robust_phase_means(history, c.phase[:steps], c.length, day) for c in cycles]
    errors = np.stack([_foretold(history, c.phase[:steps], fit) for c, fit in zip(cycles, fits, strict=True)])
    choice = np.argmin(np.where(np.isnan(errors), np.inf, errors), axis=0)
    pick = (choice, np.arange(len(history)))
    means = tuple(fit.means for fit in fits)
    shape = _profile(cycles, means, choice, slice(0, steps))
    kept = np.stack([fit.kept for fit in fits])[pick] if len(cycles) > 1 else fits[0].kept
    count = np.stack([_seen_cycles(fit) for fit in fits])[pick]
    length = np.array([c.length for c in cycles])[choice]
    used = kept & ~left_out
    rest = np.where(used, history - shape, np.nan)
    noise = burg(rest, max_order=HIGHEST_ORDER)
    noise = replace(noise, variance=np.nan_to_num(noise.variance))
    e = innovations(rest, noise)
    variance = _corrected(e, count, noise.order + 1)
    model = SeasonModel(
        cycles, means, choice, length, count, noise, variance, _corrected(rest, count, np.ones(len(rest), np.int64)),
        kept.sum(axis=1), np.zeros(len(rest), dtype=bool), np.ones(len(rest)), np.ones(len(rest)),
    )  # fmt: skip
    correlated = _correlates(e, cycles[0].length, np.where(choice == 0, count, np.inf))
    for place, cycle in enumerate(cycles[1:], start=1):
        correlated |= (choice == place) & _correlates(e, cycle.length, count)
    scatter, df = _scatter(model, np.where(used, history, np.nan), window)
    wild = special.chdtrc(df, scatter * df) < SCATTERS
    return replace(model, evolving=correlated | wild, scatter=np.maximum(scatter, 1.0), windows=df)


def _foretold(history: Floats, phase: Ints, fit: Profile) -> Floats:
    """Mean squared error of each value foretold by the other cycles (in-sample error times C/(C - 1))."""
    counts = fit.counts[:, phase]
    usable = fit.kept & (counts > 1)
    with np.errstate(divide="ignore", invalid="ignore"):
        error = (history - fit.means[:, phase]) * (counts / (counts - 1.0))
        return np.asarray(np.where(usable, error**2, 0.0).sum(axis=1) / usable.sum(axis=1))


def _seen_cycles(fit: Profile) -> Floats:
    places = np.sum(fit.counts > 0, axis=1)
    return np.asarray(fit.counts.sum(axis=1) / np.maximum(places, 1))


def _corrected(e: Floats, count: Floats, fitted: Ints) -> Floats:
    seen = ~np.isnan(e)
    left = seen.sum(axis=1) * (1 - 1 / np.maximum(count, 1)) - fitted
    total = np.where(seen, e, 0.0) ** 2
    return np.where(left > 0, total.sum(axis=1) / np.where(left > 0, left, 1.0), np.nan)


def _correlates(e: Floats, lag: int, count: Floats) -> Bools:
    """Innovations still correlate at a lag at which taking out the means of ``count`` cycles leaves -1/count."""
    if e.shape[1] <= lag:
        return np.zeros(len(e), dtype=bool)
    pair = e[:, lag:] * e[:, :-lag]
    seen: Bools = ~np.isnan(pair)
    pair = np.where(seen, pair, 0.0)
    power = np.nansum(e**2, axis=1) / np.maximum(np.sum(~np.isnan(e), axis=1), 1)
    total = pair.sum(axis=1) + seen.sum(axis=1) * power / np.maximum(count, 1)
    error = np.sqrt((pair**2).sum(axis=1))
    return np.asarray(total > STILL_CORRELATED * error)


def _scatter(model: SeasonModel, history: Floats, window: int) -> tuple[Floats, Floats]:
    """Variance of the amplitudes of history's windows over that of their errors, and its degrees of freedom."""
    steps = history.shape[1]
    if steps // window < FEWEST_WINDOWS:
        window = max(model.cycles[0].length, steps // FEWEST_WINDOWS)
    y = windows(model.whitened(history), window)
    p = windows(model.whitened(model.profile(0, steps)), window)
    count = y.shape[1]
    a, _, norm, _ = fit_amplitude(y.reshape(-1, window), p.reshape(-1, window))
    usable = np.isfinite(a) & (norm > 0)
    bits = np.where(usable, (a - 1) ** 2 * norm, 0.0).reshape(-1, count)
    # the profile is the windows' own mean, which takes its share of the degrees of freedom
    share = 1 - np.minimum(np.maximum(window, model.length) / max(steps, 1), 0.5)
    df = np.maximum(usable.reshape(-1, count).sum(axis=1) * share, 0.5)
    known = model.variance > 0
    return np.divide(bits.sum(axis=1), model.variance * df, out=np.ones(len(df)), where=known), df


def fit_amplitude(y: Floats, p: Floats) -> tuple[Floats, Floats, Floats, Ints]:
    """Least squares of each row of ``y`` on [1, p].

    Returns:
        Amplitude, residual sum of squares, centred sum of squares of ``p`` and number of pairs, each shape (S,).
    """
    seen = ~(np.isnan(y) | np.isnan(p))
    m = seen.sum(axis=1)
    few = np.maximum(m, 1)
    y = np.where(seen, y, 0.0)
    p = np.where(seen, p, 0.0)
    y = np.where(seen, y - (y.sum(axis=1) / few)[:, None], 0.0)
    p = np.where(seen, p - (p.sum(axis=1) / few)[:, None], 0.0)
    norm = np.einsum("ij,ij->i", p, p)
    with np.errstate(divide="ignore", invalid="ignore"):
        a = np.einsum("ij,ij->i", y, p) / norm
        rss = np.einsum("ij,ij->i", y - a[:, None] * p, y - a[:, None] * p)
    return a, rss, norm, m


@dataclass(frozen=True)
class Amplitude:
    """Amplitude of history's profile in a batch, 1 when it is as in history; every array has shape (S,).

    Attributes:
        value: least-squares amplitude over the shrinkage.
        scale: its standard error, the profile's errors included.
        df: degrees of freedom: whitened points less 2 where history's amplitudes scatter no more than their errors.
        shrinkage: λ, by which errors of the profile shrink the least-squares amplitude.
        foreseen: the standard error had the batch history's innovation variance (does not depend on the batch).
        naive: the standard error had the rows been independent.
        points: whitened points.
    """

    value: Floats
    scale: Floats
    df: Floats
    shrinkage: Floats
    foreseen: Floats
    naive: Floats
    points: Ints


SMALLEST_ERROR = 1e-8
"""Least standard error of an amplitude: the square root of a double's precision, for histories without noise."""


def matched_amplitude(batch: Floats, model: SeasonModel, first: int) -> Amplitude:
    """Matched-filter amplitude of the seasonal profile in a batch.

    Batch and profile are whitened by the autoregression of history's noise; least squares of the one on [1, the other]
    gives â with error se from the batch's own residuals. The profile is the mean of C cycles and carries their noise,
    which shrinks â by λ = 1 - σ² (m - 1)/(C ‖w(p)‖²), ‖w(p)‖² the centred norm over the m whitened points and σ² the
    variance of history's innovations, and widens the error by √(1 + n/N). (â/λ - 1) λ/(se √(1 + n/N)) follows
    Student's t on m - 2 degrees of freedom when the batch has history's season.

    Where the amplitudes of history's windows scatter κ > 1 times as much (in variance) as their errors, so may the
    batch's: the error is multiplied by √κ, and its degrees of freedom are those of both estimates together
    (Satterthwaite 1946).

    Args:
        batch: shape (S, n), NaN is missing: a whitened point needs itself and as many values before it as the order.
        model: what history teaches.
        first: the batch's first step on the axis of the model's cycles.
    """
    n = batch.shape[1]
    shape = model.profile(first, first + n)
    a, rss, norm, m = fit_amplitude(model.whitened(batch), model.whitened(shape))
    raw = _centred_norm(shape, ~np.isnan(batch))
    wide = np.sqrt(model.widening(n) * model.scatter)
    left = (m - 2).astype(np.float64)
    with np.errstate(divide="ignore", invalid="ignore"):
        shrinkage = 1 - model.variance * (m - 1) / (model.count * norm)
        safe = np.where(shrinkage > 0, shrinkage, np.nan)
        left = np.where(left > 0, left, np.nan)
        scale = np.sqrt(rss / left / norm) * wide / safe
        foreseen = np.sqrt(model.variance / norm) * wide / safe
        naive = np.sqrt(model.spread / raw)
        value = a / safe
        df = model.scatter**2 / (1 / left + (model.scatter - 1) ** 2 / model.windows)
    return Amplitude(
        value,
        np.maximum(scale, SMALLEST_ERROR),
        df,
        shrinkage,
        np.maximum(foreseen, SMALLEST_ERROR),
        naive,
        m,
    )


def _centred_norm(p: Floats, seen: Bools) -> Floats:
    seen = seen & ~np.isnan(p)
    count = np.maximum(seen.sum(axis=1), 1)
    p = np.where(seen, p, 0.0)
    apart = np.where(seen, p - (p.sum(axis=1) / count)[:, None], 0.0)
    return np.asarray(np.einsum("ij,ij->i", apart, apart))
