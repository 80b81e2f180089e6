"""What history foretells of a window, and how likely the window is, as it came or mended; numpy and ``serial`` only.

A window is worth its log-likelihood under history's seasonal profile and autoregression. A fault that can be undone is
recognised by how much likelier the mended window is.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.autoregression import Autoregression, burg, step_up
from sercheck.serial.batch_statistics import existing, through_filter
from sercheck.serial.matched_filter import HIGHEST_ORDER, Cycle
from sercheck.serial.walk_forward import log_unit, off_scale, on_scale, walk_forward
from sercheck.serial.window_t import windows

SCALING_FIRST = 104
"""Windows of history in which scale and gain are chosen: ninety and two weeks, as for a batch and its recent past."""

FEWEST_DF = 3.0
"""Degrees of freedom granted to the scatter of log variances when history holds fewer than five windows."""


@dataclass(frozen=True)
class Law:
    """How a statistic of a window varies over history's windows: Student's t; every array has shape (S,).

    Attributes:
        centre: its mean.
        scatter: standard deviation with which one more varies around it.
        df: degrees of freedom.
    """

    centre: Floats
    scatter: Floats
    df: Floats

    def rows(self, pick: Ints | Bools | slice) -> Law:
        """Some of the series."""
        return Law(self.centre[pick], self.scatter[pick], self.df[pick])

    def surprise(self, value: Floats, error: Floats) -> Floats:
        """Log-likelihood lost by a value fitted with variance ``error``: its place in the law, and the fitting.

        Laplace's approximation: the law widened by the error at the fitted value, and ½ ln of what the fit narrowed it.
        """
        z = (value - self.centre) / np.sqrt(self.scatter**2 + error)
        return np.asarray((self.df + 1) / 2 * np.log1p(z**2 / self.df) + np.log1p(self.scatter**2 / error) / 2)


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
        powers: law of the logarithm of the windows' mean squared innovations over ``variance``.
        means: law of the windows' means, in the feed's unit.
        variances: law of the logarithm of the windows' variances, in the feed's unit.
        levels: law of the means of what the profile left of the windows, on the judged scale.
        scatters: law of the logarithm of the variances of the same.
        cycle: steps in one cycle of the shortest season, 1 without one.
        course: the profile all through history and window, shape (S, T).
        values: history and window as delivered, shape (S, T).
    """

    window: Floats
    before: Floats
    log: Floats
    profile: Floats
    rest: Floats
    noise: Autoregression
    variance: Floats
    powers: Law
    means: Law
    variances: Law
    levels: Law
    scatters: Law
    cycle: int
    course: Floats
    values: Floats

    @property
    def n(self) -> int:
        """Steps of the window."""
        return int(self.window.shape[1])

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
        return Foreseen(
            self.window[pick], self.before[pick], self.log[pick], self.profile[pick], self.rest[pick],
            self.noise.rows(pick), self.variance[pick], self.powers.rows(pick), self.means.rows(pick),
            self.variances.rows(pick), self.levels.rows(pick), self.scatters.rows(pick), self.cycle,
            self.course[pick], self.values[pick],
        )  # fmt: skip

    def earlier(self, count: int) -> Foreseen | None:
        """The same law for the last ``count`` windows of history, one below the other: shape (count · S, ...).

        None where history is too short for so many.
        """
        n, N = self.n, self.rest.shape[1]
        T, length, known = self.values.shape[1], self.profile.shape[1] - n, self.before.shape[1]
        kept = N - count * n
        if count < 1 or kept < 2 * n or T - (count + 1) * n < max(length, known):
            return None
        ends = [T - back * n for back in range(1, count + 1)]

        def stacked(x: Floats, width: int, shift: int) -> Floats:
            return np.concatenate([x[:, end - shift - width : end - shift] for end in ends])

        every = self.rows(np.tile(np.arange(len(self.values)), count))
        rest = np.concatenate([self.rest[:, N - (back * n) - kept : N - back * n] for back in range(1, count + 1)])
        return replace(
            every, window=stacked(self.values, n, 0), before=_carried(stacked(self.values, known, n)),
            profile=stacked(self.course, length + n, 0), rest=rest, course=self.course[:0], values=self.values[:0],
        )  # fmt: skip

    def on_scale(self, x: Floats) -> Floats:
        """From the feed's unit to the scale that is judged; a logarithm goes on in a straight line below 0."""
        c = self.log[:, None]
        with np.errstate(invalid="ignore"):
            return np.where(x < 0, np.where(np.isnan(c), x, x / c), on_scale(x, self.log))

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
            count: how many there are, likewise; with less than half of the rows nothing is likely (-inf).
            n: observed values of the window, shape (S,).
            variance: innovation variance to compare with, shape (S,); history's own by default.
        """
        last = (-1, *[1] * (power.ndim - 1))
        law = self.powers
        usual, centre, scatter, df, n = (
            part.reshape(last)
            for part in (self.variance if variance is None else variance, law.centre, law.scatter, law.df, n)
        )
        with np.errstate(divide="ignore", invalid="ignore"):
            s2 = power / count
            z = (np.log(s2 / usual) - centre) / scatter
            told = gaussian(s2, n) - (df + 1) / 2 * np.log1p(z**2 / df)
            return np.where(2 * count >= n, told, -np.inf)


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
    noise = existing(burg(rest, max_order=HIGHEST_ORDER), rest, ~np.isnan(rest))
    e = through_filter(rest - noise.mean[:, None], noise)
    total, count = power(e)
    with np.errstate(divide="ignore", invalid="ignore"):
        variance = total / count
        powers = _log_power(windows(e, n) / np.sqrt(variance)[:, None, None])
        middle, spreads = _moments(windows(values[:, :start], n))
        levels, scatters = _moments(windows(rest, n))
    return Foreseen(
        values[:, start:], _carried(values[:, max(start - max(longest, 2), 0) : start]), log,
        profile[:, start - longest :], rest, noise, variance,
        _law(powers, 2.0 / n), _law(middle, 0.0), _law(spreads, 2.0 / n), _law(levels, 0.0),
        _law(scatters, 2.0 / n), min((cycle.length for cycle in cycles), default=1),
        profile, values,
    )  # fmt: skip


def _moments(cut: Floats) -> tuple[Floats, Floats]:
    """Mean of each window and the logarithm of its variance, NaN where less than half of it is there, both (S, m)."""
    seen = ~np.isnan(cut)
    count = seen.sum(axis=2)
    middle = np.where(seen, cut, 0.0).sum(axis=2) / np.maximum(count, 1)
    return np.where(count * 2 >= cut.shape[2], middle, np.nan), _log_power(cut - middle[:, :, None])


def _log_power(cut: Floats) -> Floats:
    """Logarithm of each window's mean square, NaN where less than half of it is there, shape (S, m)."""
    seen = (~np.isnan(cut)).sum(axis=2)
    logs = np.log(np.where(np.isnan(cut), 0.0, cut**2).sum(axis=2) / seen)
    return np.where((seen * 2 >= cut.shape[2]) & np.isfinite(logs), logs, np.nan)


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
    every.append(np.broadcast_to(_middle(y[:, : steps - n])[:, None], y.shape))  # no season: its noise is no profile
    errors = np.stack([(y - one) ** 2 for one in every])
    errors[:, :, steps - n :] = np.nan  # the window has no say in it
    missing = np.isnan(errors).any(axis=0)
    best = np.argmin(np.where(missing, 0.0, errors).sum(axis=2), axis=0)
    chosen = np.take_along_axis(np.stack(every), best[None, :, None], axis=0)[0]
    return np.where(np.isnan(every[0]), np.nan, chosen)


def _law(statistics: Floats, least: float) -> Law:
    """Law of one more value of a statistic; its variance is at least ``least``, that of independent normal rows."""
    seen = ~np.isnan(statistics)
    m = seen.sum(axis=1)
    centre = np.where(seen, statistics, 0.0).sum(axis=1) / np.maximum(m, 1)
    square = np.where(seen, statistics - centre[:, None], 0.0) ** 2
    variance = np.maximum(square.sum(axis=1) / np.maximum(m - 1, 1), least)
    return Law(centre, np.sqrt(variance * (1 + 1 / np.maximum(m, 1))), np.maximum(m - 1.0, FEWEST_DF))
