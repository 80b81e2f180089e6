"""Undo a fault and see how much likelier the window becomes: one look for every fault; depends on numpy and ``serial``.

Every look gives the log-likelihood of the window as it was delivered, under history's law put through the fault. A fault
that adds a free number pays ½ ln n for it (Schwarz 1978), one that was searched among K places pays ln K.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import NamedTuple

import numpy as np

from sercheck.serial.arrays import Bools, Floats
from sercheck.serial.autoregression import burg
from sercheck.serial.foreseen import Foreseen, from_the_start, gaussian, power

UNITS = (10.0, 100.0, 1000.0, 1e6, 24.0, 60.0, 3600.0, 3.6, 1024.0, 1.609344, 2.20462, 3.28084, 4.1868)
"""Factors between units that feeds are delivered in, tried with their reciprocals: powers of ten, hours in a day,
minutes, seconds, kWh in MJ, binary prefixes, miles, pounds, feet, calories."""

WEIGHTS = (0.1, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8)
"""Weights of exponential smoothing that are tried."""

WIDTHS = (3, 5)
"""Widths of a moving mean that are tried."""

SMOOTH_ORDER = 20
"""Order of the autoregression that stands for a moving mean: its zeros on the unit circle need a long one."""

OWN_ORDER = 4
"""Order of the window's own model, by which anything may be explained at its price."""

PAIR_ORDER = 2
"""Order of each of two interleaved sources."""


class Look(NamedTuple):
    """How well one fault explains the windows.

    Attributes:
        name: which fault.
        score: log-likelihood less what was paid for, shape (S,).
        value: the number that goes with it (a shift, a factor, steps), shape (S,); NaN where there is none.
    """

    name: str
    score: Floats
    value: Floats


class Looker:
    """All looks at the windows of one ``Foreseen``."""

    def __init__(self, law: Foreseen) -> None:
        self.law = law
        self.x = law.window
        self.seen = ~np.isnan(self.x)
        self.n = self.seen.sum(axis=1).astype(np.float64)
        self.free = np.log(np.maximum(self.n, 1.0)) / 2
        self.jacobian = law.stretching(self.x)
        self.e = law.innovations(self.x)
        self.none = np.full(len(self.x), np.nan)
        here = law.here
        self.shape = here - np.nanmean(np.where(np.isnan(here), 0.0, here), axis=1, keepdims=True)

    def all(self) -> Iterator[Look]:
        """Every look, that at an unbroken window first."""
        yield self.healthy()
        yield from self.own()
        yield from self.level()
        yield self.season()
        yield from self.turned()
        yield from self.sums()
        yield from self.units()
        yield from self.clock()
        yield from self.smooth()
        yield self.two_sources()
        yield self.noise()

    def _score(self, e: Floats) -> Floats:
        total, count = power(e)
        return self.law.likelihood(total, count, self.n)

    def healthy(self) -> Look:
        """As it came."""
        return Look("healthy", self._score(self.e) + self.jacobian, self.none)

    def own(self) -> Iterator[Look]:
        """An autoregression of the window's own, around its own mean, with history's season or without any.

        Without a season, but with innovations of history's size, the season is gone. Without memory as well it is
        noise, which has a look of its own.
        """
        y = self.law.on_scale(self.x)
        for rest, seasonal in ((y - self.law.here, True), (y, False)):
            model = burg(rest, max_order=min(OWN_ORDER, self.law.n // 6))
            paid = self.jacobian - (model.order + 1) * self.free
            score = gaussian(model.variance, self.n) + paid - self.free
            yield Look("own", np.where(seasonal | (model.order > 0), score, -np.inf), self.none)
            if not seasonal:
                score = self.law.likelihood(model.variance, np.ones(len(y)), self.n) + paid
                varied = (np.nan_to_num(self.shape) != 0).any(axis=1) & (model.order > 0)
                yield Look("season", np.where(varied, score, -np.inf), np.zeros(len(y)))

    def level(self) -> Iterator[Look]:
        """A constant added to all values, or from some step on."""
        step = self.law.response(np.ones(self.x.shape))
        total, count, beta = _without(self.e, step)
        score = self.law.likelihood(total, count, self.n) - self.free
        yield Look("shifted", score + self.jacobian, beta)
        place, gain, beta = _step_anywhere(self.e, step)
        total, count = power(self.e)
        score = self.law.likelihood(total - gain, count, self.n) - 3 * self.free
        yield Look("shifted", np.where(place > 0, score, -np.inf) + self.jacobian, beta)

    def season(self) -> Look:
        """The season at another strength."""
        total, count, beta = _without(self.e, self.law.response(self.shape))
        score = self.law.likelihood(total, count, self.n) - self.free
        return Look("season", score + self.jacobian, 1 + beta)

    def _mended(self, name: str, x: Floats, stretch: Floats | float = 0.0, value: Floats | None = None) -> Look:
        """The window mended to ``x``, a map whose log-determinant is ``stretch``."""
        score = self._score(self.law.innovations(x)) + self.law.stretching(x) + stretch
        return Look(name, score, self.none if value is None else value)

    def turned(self) -> Iterator[Look]:
        """Sign, mirror and order."""
        yield self._mended("sign", -self.x)
        mean = np.where(self.seen, self.x, 0.0).sum(axis=1) / np.maximum(self.n, 1)
        yield self._mended("mirrored", 2 * mean[:, None] - self.x, -self.free)
        yield self._mended("reversed", self.x[:, ::-1])

    def sums(self) -> Iterator[Look]:
        """Differences in place of values, and totals in place of increments."""
        last = self.law.before[:, -1:]
        before = self.law.before[:, -2:-1]
        once = np.where(self.seen, np.nancumsum(self.x, axis=1), np.nan)
        yield self._mended("differenced", last + once)
        steps = (last - before) + once
        yield self._mended("twice", last + np.where(self.seen, np.nancumsum(steps, axis=1), np.nan))
        yield self._mended("total", np.diff(self.x, axis=1, prepend=np.nan))

    def units(self) -> Iterator[Look]:
        """Another unit, for all values or from some step on."""
        choices = np.log(2.0 * len(UNITS))
        known = [np.full(len(self.x), unit) for factor in UNITS for unit in (factor, 1 / factor)]
        free = self._ratio(0)
        price = [np.full(len(self.x), choices)] * len(known) + [self.free]
        for k, paid in zip([*known, free], price, strict=True):
            with np.errstate(divide="ignore", invalid="ignore"):
                stretch = -self.n * np.log(k) - paid
                yield self._mended("unit", self.x / k[:, None], stretch, k)
        price = [np.full(len(self.x), choices)] * len(known) + [self.free]
        for k, paid in zip([*known, self._ratio(self.law.n // 2)], price, strict=True):
            yield self._unit_from_some_step(k, paid)

    def _ratio(self, first: int) -> Floats:
        """Least-squares factor between the window from ``first`` on and what was foretold, where it makes sense."""
        usual = self.law.usual()[:, first:]
        x = self.x[:, first:]
        told = ~np.isnan(x) & ~np.isnan(usual)
        with np.errstate(divide="ignore", invalid="ignore"):
            k = np.where(told, x * usual, 0.0).sum(axis=1) / np.where(told, usual**2, 0.0).sum(axis=1)
        return np.where(k > 0, k, np.nan)

    def _unit_from_some_step(self, k: Floats, paid: Floats) -> Look:
        mended = self.x / k[:, None]
        after = self.law.innovations(mended)
        order = int(self.law.noise.order.max(initial=0))
        some = np.arange(1, self.law.n - order)  # the first rows after the change have neighbours in the other unit
        if not len(some):
            return Look("unit", np.full(len(self.x), -np.inf), k)

        def joined(before: Floats, later: Floats, skip: int = 0) -> Floats:
            before, later = _running(before), _running(later)
            return np.asarray(before[:, some] + later[:, -1:] - later[:, some + skip])

        total = joined(self.e**2, after**2, order)
        count = joined(~np.isnan(self.e), ~np.isnan(after), order)
        stretch = joined(self._slope(self.x), self._slope(mended))
        later = joined(np.zeros(self.x.shape), ~np.isnan(after), order)
        with np.errstate(divide="ignore", invalid="ignore"):
            score = self.law.likelihood(total, count, self.n) + stretch - later * np.log(k)[:, None]
        score = np.where(count * 2 >= self.n[:, None], score, -np.inf)
        return Look("unit", np.nan_to_num(score, nan=-np.inf).max(axis=1) - paid - 2 * self.free, k)

    def _slope(self, x: Floats) -> Floats:
        """Logarithm of the slope of the judged scale, 0 where it is the unit's own."""
        with np.errstate(invalid="ignore"):
            return np.nan_to_num(-np.log(self.law.log[:, None] + np.maximum(x, 0.0)))

    def clock(self) -> Iterator[Look]:
        """Stamps late or early, in the whole window or from some step on."""
        length = self.law.profile.shape[1] - self.law.n
        reach = length // 2
        choices = np.log(max(2 * reach, 1))
        still = _running(np.nan_to_num(self.e) ** 2)
        for d in (*range(-reach + 1, 0), *range(1, reach + 1)):
            moved = self.law.innovations(self.x, self.law.shifted(d))
            value = np.full(len(self.x), float(d))
            yield Look("slipped", self._score(moved) + self.jacobian - choices, value)
            later = _running(np.nan_to_num(moved) ** 2)
            total = (still + later[:, -1:] - later).min(axis=1)
            count = (~np.isnan(self.e)).sum(axis=1).astype(np.float64)
            score = self.law.likelihood(total, count, self.n) - choices - 2 * self.free
            yield Look("slipped", score + self.jacobian, value)

    def smooth(self) -> Iterator[Look]:
        """Exponential smoothing undone, and moving means as history would show them."""
        before = np.concatenate([np.full((len(self.x), 1), np.nan), self.x[:, :-1]], axis=1)
        for weight in WEIGHTS:
            mended = (self.x - (1 - weight) * before) / weight
            yield self._mended("smoothed", mended, -self.n * np.log(weight) - np.log(len(WEIGHTS)))
        y = self.law.on_scale(self.x)
        for width in WIDTHS:
            model = burg(_moving_mean(self.law.rest, width), max_order=SMOOTH_ORDER)
            shape = _moving_mean(self.law.profile, width)[:, -self.law.n :]
            e, half = from_the_start(y - shape, model)
            total, count = power(e)
            score = self.law.likelihood(total, count, self.n, model.variance) - half
            yield Look("smoothed", score + self.jacobian - np.log(len(WIDTHS)), self.none)

    def two_sources(self) -> Look:
        """Every second row from a source at another level, both with history's season and memory."""
        rest = self.law.on_scale(self.x) - self.law.here
        model = burg(self.law.rest[:, ::2], max_order=PAIR_ORDER)
        total, count, half = np.zeros(len(rest)), np.zeros(len(rest)), np.zeros(len(rest))
        middle = []
        for parity in (0, 1):
            part = rest[:, parity::2]
            mean = np.nansum(part, axis=1) / np.maximum((~np.isnan(part)).sum(axis=1), 1)
            middle.append(mean)
            e, logs = from_the_start(part - mean[:, None] + model.mean[:, None], model)
            some, rows = power(e)
            total, count, half = total + some, count + rows, half + logs
        score = self.law.likelihood(total, count, self.n, model.variance) - half - 2 * self.free
        return Look("interleaved", score + self.jacobian, middle[1] - middle[0])

    def noise(self) -> Look:
        """Independent normal values."""
        mean = np.where(self.seen, self.x, 0.0).sum(axis=1) / np.maximum(self.n, 1)
        square = np.where(self.seen, self.x - mean[:, None], 0.0) ** 2
        return Look("noise", gaussian(square.sum(axis=1) / self.n, self.n) - 2 * self.free, self.none)


def _running(x: Floats | Bools) -> Floats:
    """Sum of the first k values, k = 0 .. n, missing ones as 0."""
    return np.pad(np.cumsum(np.nan_to_num(x), axis=1), ((0, 0), (1, 0)))


def _without(e: Floats, g: Floats) -> tuple[Floats, Floats, Floats]:
    """Least squares of e on g without a constant: what is left, pairs, the coefficient."""
    told = ~np.isnan(e) & ~np.isnan(g)
    e, g = np.where(told, e, 0.0), np.where(told, g, 0.0)
    norm = (g * g).sum(axis=1)
    beta = np.divide((e * g).sum(axis=1), norm, out=np.zeros(len(e)), where=norm > 0)
    return ((e - beta[:, None] * g) ** 2).sum(axis=1), told.sum(axis=1).astype(np.float64), beta


def _step_anywhere(e: Floats, step: Floats) -> tuple[Floats, Floats, Floats]:
    """The step that explains most of the innovations, by its response from its first row on.

    Returns:
        Its place, the squares it explains and its height, each (S,).
    """
    n = e.shape[1]
    e = np.nan_to_num(e)
    spectrum = np.fft.rfft(e, 2 * n, axis=1) * np.conj(np.fft.rfft(step, 2 * n, axis=1))
    top = np.fft.irfft(spectrum, 2 * n, axis=1)[:, :n]
    norm = np.cumsum(step**2, axis=1)[:, ::-1]
    with np.errstate(divide="ignore", invalid="ignore"):
        gain = np.where(norm > 0, top**2 / norm, 0.0)
        place = np.argmax(gain, axis=1)
        pick = (np.arange(len(e)), place)
        return place.astype(np.float64), gain[pick], top[pick] / norm[pick]


def _moving_mean(x: Floats, width: int) -> Floats:
    """Mean of ``width`` successive values around each; at the ends of those there are."""
    reach = width // 2
    wide = np.pad(x, ((0, 0), (reach, reach)), mode="edge")
    n = x.shape[1]
    return np.asarray(sum(wide[:, k : k + n] for k in range(width)) / width)
