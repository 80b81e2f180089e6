"""What history foretells of a window, and how likely the window is, as it came or mended; numpy and ``serial`` only.

A window is worth its log-likelihood under history's seasonal profile and autoregression. A fault that can be undone is
recognised by how much likelier the mended window is.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields

import numpy as np

from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.autoregression import Autoregression, burg, step_up
from sercheck.serial.batch_statistics import through_filter
from sercheck.serial.matched_filter import HIGHEST_ORDER, Cycle
from sercheck.serial.walk_forward import log_unit, off_scale, on_scale, walk_forward
from sercheck.serial.window_t import windows

SCALING_FIRST = 104
"""Windows of history in which scale and gain are chosen: ninety and two weeks, as for a batch and its recent past."""

FEWEST_DF = 3.0
"""Degrees of freedom granted to the scatter of log variances when history holds fewer than five windows."""


@dataclass(frozen=True)
class Foreseen:
    """History's law for a window of n steps, for S series.

    Attributes:
        window: the window's values as delivered, shape (S, n).
        before: history's last values as delivered, two at least (the nearest earlier value where one is missing),
            shape (S, K).
        log: c of the series judged on the scale ln(1 + x/c), NaN for the others, shape (S,).
        profile: seasonal profile on that scale, learned before each step came, one cycle of history and the window,
            shape (S, L + n).
        rest: what the profile left of history, shape (S, N).
        noise: its autoregression, of order at most 6.
        variance: mean squared innovation of history, shape (S,).
        centre: mean of the logarithm of the windows' mean squared innovations over ``variance``, shape (S,).
        scatter: the standard deviation with which a new window's varies around it, shape (S,).
        df: degrees of freedom of ``scatter``, shape (S,).
    """

    window: Floats
    before: Floats
    log: Floats
    profile: Floats
    rest: Floats
    noise: Autoregression
    variance: Floats
    centre: Floats
    scatter: Floats
    df: Floats

    @property
    def n(self) -> int:
        """Steps of the window."""
        return self.window.shape[1]

    @property
    def here(self) -> Floats:
        """The profile at the window's steps, on the judged scale."""
        return self.profile[:, -self.n :]

    def shifted(self, late: int) -> Floats:
        """The profile that a clock ``late`` steps late would show (a cycle back where the future is needed)."""
        length = self.profile.shape[1] - self.n
        first = length - late if late >= 0 else -late
        return self.profile[:, first : first + self.n]

    def rows(self, pick: Ints | Bools | slice) -> Foreseen:
        """Some of the series."""
        parts = {part.name: getattr(self, part.name) for part in fields(self)}
        return Foreseen(**{name: part.rows(pick) if name == "noise" else part[pick] for name, part in parts.items()})

    def on_scale(self, x: Floats) -> Floats:
        """From the feed's unit to the scale that is judged."""
        return on_scale(x, self.log)

    def usual(self) -> Floats:
        """What was foretold of the window in the feed's unit, shape (S, n)."""
        return off_scale(self.here, self.log)

    def stretching(self, x: Floats) -> Floats:
        """Σ ln |dy/dx| of the judged scale: what turns a likelihood of y into one of x, shape (S,)."""
        c = self.log[:, None]
        with np.errstate(invalid="ignore"):
            slope = -np.log(c + np.maximum(x, 0.0))
        return np.asarray(np.nansum(slope, axis=1))

    def innovations(self, x: Floats, profile: Floats | None = None) -> Floats:
        """What history's law does not foresee of ``x`` in place of the window, shape (S, n)."""
        return self.filtered(self.on_scale(x) - (self.here if profile is None else profile))

    def filtered(self, rest: Floats) -> Floats:
        """Deviations from the profile through the autoregression, history's last ones before them."""
        order = int(self.noise.order.max(initial=0))
        tail = self.rest[:, self.rest.shape[1] - order :]
        mean = self.noise.mean[:, None]
        return through_filter(np.concatenate([tail, rest], axis=1) - mean, self.noise)[:, tail.shape[1] :]

    def response(self, change: Floats) -> Floats:
        """What a change of the window's values (S, n) does to its innovations."""
        order = int(self.noise.order.max(initial=0))
        return through_filter(np.pad(change, ((0, 0), (order, 0))), self.noise)[:, order:]

    def likelihood(self, power: Floats, count: Floats, n: Floats, variance: Floats | None = None) -> Floats:
        """Log-likelihood of a window with this sum of squared innovations.

        −(n/2)(ln 2πs² + 1), s² = power/count, and the law of ln s² in history's windows: a log density of Student's t
        relative to its mode. The level of s² is not held against a window more than history's own windows scatter.

        Args:
            power: sum of squared innovations, shape (S,) or (S, K).
            count: how many there are, likewise.
            n: observed values of the window, shape (S,).
            variance: innovation variance to compare with, shape (S,); history's own by default.
        """
        last = (-1, *[1] * (power.ndim - 1))
        usual, centre, scatter, df, n = (
            part.reshape(last)
            for part in (self.variance if variance is None else variance, self.centre, self.scatter, self.df, n)
        )
        with np.errstate(divide="ignore", invalid="ignore"):
            s2 = power / count
            z = (np.log(s2 / usual) - centre) / scatter
            return np.asarray(gaussian(s2, n) - (df + 1) / 2 * np.log1p(z**2 / df))


def gaussian(variance: Floats, n: Floats) -> Floats:
    """Log-likelihood of n normal values at their own variance, −(n/2)(ln 2πs² + 1)."""
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(-n / 2 * (np.log(2 * np.pi * variance) + 1))


def power(e: Floats) -> tuple[Floats, Floats]:
    """Sum of squares of what is there and how much is there, both (S,)."""
    seen = ~np.isnan(e)
    return (np.where(seen, e, 0.0) ** 2).sum(axis=1), seen.sum(axis=1).astype(np.float64)


def from_the_start(rest: Floats, model: Autoregression) -> tuple[Floats, Floats]:
    """Innovations of a stretch with nothing known before it, and half the log-determinant of its first ones.

    The first values are foretold by the models of lower order of the Levinson recursion (Levinson 1947), each error
    divided by its own standard deviation over that of the full model: the exact Gaussian likelihood.
    """
    r = rest - model.mean[:, None]
    e = through_filter(r, model)
    left = np.cumprod(1 - model.reflection**2, axis=1)
    final = left[:, -1] if left.shape[1] else np.ones(len(r))
    half = np.zeros(len(r))
    for t in range(min(int(model.order.max(initial=0)), r.shape[1])):
        a = step_up(model.reflection[:, :t])
        v = (left[:, t - 1] if t else np.ones(len(r))) / final
        first = (r[:, t] - np.einsum("sj,sj->s", a, r[:, t - 1 :: -1][:, :t] if t else r[:, :0])) / np.sqrt(v)
        e[:, t] = np.where(t < model.order, first, e[:, t])
        half += np.where(t < model.order, np.log(v) / 2, 0.0)
    return e, half


def foresee(values: Floats, start: int, cycles: Sequence[Cycle]) -> Foreseen | None:
    """Learn from history what the window was to be; None where history is shorter than two windows or a few cycles.

    Args:
        values: history and window, shape (S, T), NaN is missing.
        start: first step of the window.
        cycles: seasons whose profile may be meant (a day, a week); each series takes the one that foretold its history
            with the least squared error. Empty for a feed without a season.
    """
    n = values.shape[1] - start
    if start < max(2 * n, 2) or not n:
        return None
    first = min(start, SCALING_FIRST * n)
    log = np.full(len(values), np.nan)
    longest = max((cycle.length for cycle in cycles), default=1)
    profile = np.broadcast_to(_middle(values[:, :start])[:, None], values.shape)
    if cycles:
        early = _profile(values[:, :first], cycles, n, first, plain=True)
        log = log_unit(values[:, :first], early)
    y = on_scale(values, log)
    if cycles:
        profile = _profile(y, cycles, n, first)
    rest = (y - profile)[:, :start]
    known = ~np.isnan(rest)
    begin = int(np.argmax(known.any(axis=0)))
    rest = rest[:, begin:]
    if rest.shape[1] < max(n, 2 * HIGHEST_ORDER):
        return None
    noise = burg(rest, max_order=HIGHEST_ORDER)
    e = through_filter(rest - noise.mean[:, None], noise)
    total, count = power(e)
    with np.errstate(divide="ignore", invalid="ignore"):
        variance = total / count
        cut = windows(e, n)
        seen = (~np.isnan(cut)).sum(axis=2)
        logs = np.log(np.where(np.isnan(cut), 0.0, cut**2).sum(axis=2) / seen / variance[:, None])
    centre, scatter, df = _scatter(np.where(seen * 2 >= n, logs, np.nan), n)
    return Foreseen(
        values[:, start:], _carried(values[:, max(start - longest, 0) : start]), log,
        profile[:, start - longest :], rest, noise, variance, centre, scatter, df,
    )  # fmt: skip


def _middle(x: Floats) -> Floats:
    seen = ~np.isnan(x)
    return np.asarray(np.where(seen, x, 0.0).sum(axis=1) / np.maximum(seen.sum(axis=1), 1))


def _carried(x: Floats) -> Floats:
    """Missing values take the value before them."""
    place = np.where(np.isnan(x), 0, np.arange(x.shape[1]))
    return np.take_along_axis(x, np.maximum.accumulate(place, axis=1), axis=1)


def _profile(y: Floats, cycles: Sequence[Cycle], n: int, first: int, *, plain: bool = False) -> Floats:
    """Walk-forward profile of the season that foretells each series best."""
    gain = np.zeros(len(y)) if plain else None
    steps = y.shape[1]
    every = [
        walk_forward(y, cycle.phase[:steps], cycle.length, max(n, cycle.length), first=first, block=n, gain=gain).here
        for cycle in cycles
    ]
    if len(every) == 1:
        return every[0]
    errors = np.stack([(y - one) ** 2 for one in every])
    told = ~np.isnan(errors).any(axis=0)
    told[:, steps - n :] = False  # the window has no say in it
    best = np.argmin(np.where(told, errors, 0.0).sum(axis=2), axis=0)
    return np.take_along_axis(np.stack(every), best[None, :, None], axis=0)[0]


def _scatter(logs: Floats, n: int) -> tuple[Floats, Floats, Floats]:
    """Mean, standard deviation for one more, and degrees of freedom of the windows' log variances."""
    seen = ~np.isnan(logs)
    m = seen.sum(axis=1)
    usable = np.where(seen & np.isfinite(logs), logs, 0.0)
    centre = usable.sum(axis=1) / np.maximum(m, 1)
    square = np.where(seen & np.isfinite(logs), usable - centre[:, None], 0.0) ** 2
    least = 2.0 / n  # variance of the log of a mean of n squared normal values
    variance = np.maximum(square.sum(axis=1) / np.maximum(m - 1, 1), least)
    return centre, np.sqrt(variance * (1 + 1 / np.maximum(m, 1))), np.maximum(m - 1.0, FEWEST_DF)
