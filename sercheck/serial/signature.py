"""Undo a fault and see how much likelier the window becomes: one look for every fault; depends on numpy and ``serial``.

Every look gives the log-likelihood of the window as it was delivered, under history's law put through the fault. A
fault that adds a free number pays ½ ln n for it (Schwarz 1978), one that was searched among K places pays ln K.
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

LEAST_STRENGTH = 1e-3
"""Part of its strength under which nothing is left of a window to be mended: three decimals of the values are gone."""

FEWEST_ROWS, FEWEST_PART = 3, 8
"""Rows in either unit, three and an eighth of the window: fewer are outliers."""

FAR = 3.0
"""Standard deviations of history's window means beyond which a mean is another one (as far as 1 in 370)."""

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
        yield from self.weaker()
        yield from self.turned()
        yield from self.sums()
        yield from self.units()
        yield from self.clock()
        yield from self.smooth()
        yield self.two_sources()
        yield from self.noise()

    def _score(self, e: Floats) -> Floats:
        total, count = power(e)
        return self.law.likelihood(total, count, self.n)

    def away(self, rows: slice) -> Floats:
        """How far some rows lie above what was foretold, on average, in the feed's unit, shape (S,)."""
        apart = (self.x - self.law.usual())[:, rows]
        seen = ~np.isnan(apart)
        return np.asarray(np.where(seen, apart, 0.0).sum(axis=1) / np.maximum(seen.sum(axis=1), 1))

    def healthy(self) -> Look:
        """As it came."""
        return Look("healthy", self._score(self.e) + self.jacobian, self.none)

    def _price(self, numbers: np.ndarray) -> Floats:
        """Price of free numbers fitted to the window itself: Schwarz's, or for short ones that of AICc."""
        short = numbers * self.n / np.maximum(self.n - numbers - 1, 0.5)
        return np.asarray(np.maximum(numbers * self.free, short))

    def own(self) -> Iterator[Look]:
        """An autoregression of the window's own, around its own mean, with history's season or without any.

        Where its innovations have history's size all the same, it is known what happened: without a season, the season
        is gone (without memory as well, if the values scatter as history's do around its season; else it is noise,
        which has a look of its own); around a mean that history's windows do not have, the level shifted.
        """
        y = self.law.on_scale(self.x)
        for rest, seasonal in ((y - self.law.here, True), (y, False)):
            model = burg(rest, max_order=min(OWN_ORDER, self.law.n // 6))
            e, half = from_the_start(rest, model)
            total, count = power(e)
            with np.errstate(divide="ignore", invalid="ignore"):
                score = gaussian(total / count, self.n) - half + self.jacobian - self._price(model.order + 2.0)
            yield Look("own", np.where(seasonal | (model.order > 0), score, -np.inf), self.none)
            likely = self.law.likelihood(total, count, self.n) - half + self.jacobian
            likely = likely - (model.order + 1) * self.free
            if seasonal:
                moved = np.asarray(model.mean - self.law.levels.centre)
                far = np.abs(moved) > FAR * self.law.levels.scatter
                yield Look("shifted", np.where(far, likely, -np.inf), self.away(slice(None)))
                continue
            with np.errstate(divide="ignore", invalid="ignore"):
                lost = self.law.scatters.surprise(np.log(model.variance), 2 / self.n) + self.free
            white = gaussian(model.variance, self.n) + self.jacobian - lost
            score = np.where(model.order > 0, likely, white)
            varied = (np.nan_to_num(self.shape) != 0).any(axis=1)
            yield Look("season", np.where(varied, score, -np.inf), np.zeros(len(y)))

    def level(self) -> Iterator[Look]:
        """A constant added to all values, or from some step on."""
        step = self.law.response(np.ones(self.x.shape))
        rest, _ = _without(self.e, step)
        yield Look("shifted", self._score(rest) - self.free + self.jacobian, self.away(slice(None)))
        place, rest = _step_anywhere(self.e, step)
        score = np.where(place > 0, self._score(rest) - 3 * self.free, -np.inf)
        yield Look("shifted", score + self.jacobian, self.away(slice(None)))

    def season(self) -> Look:
        """The season at another strength."""
        rest, beta = _without(self.e, self.law.response(self.shape))
        return Look("season", self._score(rest) - self.free + self.jacobian, 1 + beta)

    def weaker(self) -> Iterator[Look]:
        """Everything around the window's mean at a part of its strength, season and noise alike.

        Two estimates of the strength are tried: the regression on what was foretold, and the standard deviation over
        that of history's windows.
        """
        mean = np.where(self.seen, self.x, 0.0).sum(axis=1) / np.maximum(self.n, 1)
        apart = self.x - mean[:, None]
        usual = self.law.usual()
        told = self.seen & ~np.isnan(usual)
        middle = np.where(told, usual, 0.0).sum(axis=1) / np.maximum(told.sum(axis=1), 1)
        shape = np.where(told, usual - middle[:, None], 0.0)
        square = np.where(self.seen, apart, 0.0) ** 2
        with np.errstate(divide="ignore", invalid="ignore"):
            slope = np.where(told, apart * shape, 0.0).sum(axis=1) / (shape**2).sum(axis=1)
            ratio = np.sqrt(square.sum(axis=1) / self.n / np.exp(self.law.variances.centre))
        for strength in (slope, ratio):
            a = np.where((strength > LEAST_STRENGTH) & (strength < 1), strength, np.nan)
            stretch = -np.maximum(self.n - 1, 0) * np.log(a) - self.free
            yield self._mended("weaker", mean[:, None] + apart / a[:, None], stretch, a)

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
                stretch = -(self.seen & (self.x != 0)).sum(axis=1) * np.log(k) - paid  # 0 is 0 in any unit
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
        """Rows before some step as they came, those from it on divided by ``k``: all steps at once."""
        mended = self.x / k[:, None]
        after = self.law.innovations(mended)
        order = int(self.law.noise.order.max(initial=0))
        n = self.law.n
        fewest = max(FEWEST_ROWS, n // FEWEST_PART)
        first = np.arange(fewest, n - fewest + 1)
        if not len(first):
            return Look("unit", np.full(len(self.x), -np.inf), k)

        def joined(before: Floats | Bools, later: Floats | Bools, skip: int = 0) -> Floats:
            before, later = _running(before), _running(later)
            return np.asarray(before[:, first] + later[:, -1:] - later[:, np.minimum(first + skip, n)])

        total = joined(self.e**2, after**2, order)
        count = joined(~np.isnan(self.e), ~np.isnan(after), order)
        for late, e in enumerate(self._across(mended, order)):
            some = first[first + late < n]
            here = e[:, some + late]
            total[:, : len(some)] += np.nan_to_num(here**2)
            count[:, : len(some)] += ~np.isnan(here)
        stretch = joined(self._slope(self.x), self._slope(mended))
        later = joined(np.zeros(self.x.shape), self.seen & (self.x != 0))
        with np.errstate(divide="ignore", invalid="ignore"):
            score = self.law.likelihood(total, count, self.n) + stretch - later * np.log(k)[:, None]
        score = np.where(np.isfinite(score), score, -np.inf)
        return Look("unit", score.max(axis=1, initial=-np.inf) - paid - 2 * self.free, k)

    def _across(self, mended: Floats, order: int) -> Iterator[Floats]:
        """Innovations 0, 1, ... rows after a change: the rows before it in the old unit, those since in the new."""
        mean = self.law.noise.mean[:, None]
        tail = self.law.rest[:, self.law.rest.shape[1] - order :]
        old, new = (
            np.concatenate([tail, self.law.on_scale(x) - self.law.here], axis=1) - mean for x in (self.x, mended)
        )
        n = self.law.n
        for late in range(order):
            e = new[:, order:].copy()
            for j in range(1, order + 1):
                part = (new if j <= late else old)[:, order - j : order - j + n]
                a = self.law.noise.coefficients[:, j - 1 : j]
                e -= np.where(a == 0, 0.0, a * part)
            yield e

    def _slope(self, x: Floats) -> Floats:
        """Logarithm of the slope of the judged scale, 0 where it is the unit's own."""
        with np.errstate(invalid="ignore"):
            return np.nan_to_num(-np.log(self.law.log[:, None] + np.maximum(x, 0.0)))

    def clock(self) -> Iterator[Look]:
        """Stamps late or early, in the whole window or from some step on."""
        reach = self.law.cycle // 2
        choices = np.log(max(2 * reach, 1))
        still = _running(self.e**2)
        for d in (*range(-reach + 1, 0), *range(1, reach + 1)):
            moved = self.law.innovations(self.x, self.law.shifted(d))
            value = np.full(len(self.x), float(d))
            yield Look("slipped", self._score(moved) + self.jacobian - choices, value)
            later = _running(moved**2)
            total = (still + later[:, -1:] - later).min(axis=1)
            count = (~np.isnan(self.e)).sum(axis=1).astype(np.float64)
            score = self.law.likelihood(total, count, self.n) - choices - 2 * self.free
            yield Look("slipped", score + self.jacobian, value)

    def smooth(self) -> Iterator[Look]:
        """Exponential smoothing undone, and moving means as history would show them."""
        before = np.concatenate([np.full((len(self.x), 1), np.nan), self.x[:, :-1]], axis=1)
        for weight in WEIGHTS:
            mended = (self.x - (1 - weight) * before) / weight
            changed = (self.seen & (self.x != before)).sum(axis=1)
            yield self._mended("smoothed", mended, -changed * np.log(weight) - self.free - np.log(len(WEIGHTS)))
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
        for parity in (0, 1):
            part = rest[:, parity::2]
            mean = np.nansum(part, axis=1) / np.maximum((~np.isnan(part)).sum(axis=1), 1)
            e, logs = from_the_start(part - mean[:, None] + model.mean[:, None], model)
            some, rows = power(e)
            total, count, half = total + some, count + rows, half + logs
        score = self.law.likelihood(total, count, self.n, model.variance) - half - 2 * self.free
        return Look("interleaved", score + self.jacobian, self.away(slice(1, None, 2)) - self.away(slice(0, None, 2)))

    def noise(self) -> Iterator[Look]:
        """Independent normal values: of any mean and variance, or of those that history's windows have."""
        x = self.x
        rows = np.maximum(self.n, 1.0)
        mean = np.where(self.seen, x, 0.0).sum(axis=1) / rows
        variance = (np.where(self.seen, x - mean[:, None], 0.0) ** 2).sum(axis=1) / rows
        score = gaussian(variance, self.n)
        other = self._price(np.full(len(x), 2.0)) + self.free  # once more, for not being history's
        yield Look("noise", score - other, self.none)
        with np.errstate(divide="ignore", invalid="ignore"):
            for value, law, error in (
                (mean, self.law.means, variance / rows),
                (np.log(variance), self.law.variances, 2 / rows),
            ):
                score = score - law.surprise(value, error)
        yield Look("noise", score, self.none)


def _running(x: Floats | Bools) -> Floats:
    """Sum of the first k values, k = 0 .. n, missing ones as 0."""
    return np.pad(np.cumsum(np.nan_to_num(x), axis=1), ((0, 0), (1, 0)))


def _without(e: Floats, g: Floats) -> tuple[Floats, Floats]:
    """Least squares of e on g without a constant: what is left, shape (S, n), and the coefficient, shape (S,)."""
    told = ~np.isnan(e) & ~np.isnan(g)
    known, g = np.where(told, e, 0.0), np.where(told, g, 0.0)
    norm = (g * g).sum(axis=1)
    beta = np.divide((known * g).sum(axis=1), norm, out=np.zeros(len(e)), where=norm > 0)
    return e - beta[:, None] * g, beta


def _step_anywhere(e: Floats, step: Floats) -> tuple[Floats, Floats]:
    """The step that explains most of the squares, by its response from its first row on.

    Returns:
        Its place, shape (S,), and what it leaves of the innovations, shape (S, n).
    """
    n = e.shape[1]
    spectrum = np.fft.rfft(np.nan_to_num(e), 2 * n, axis=1) * np.conj(np.fft.rfft(step, 2 * n, axis=1))
    top = np.fft.irfft(spectrum, 2 * n, axis=1)[:, :n]
    norm = np.cumsum(step**2, axis=1)[:, ::-1]
    gain = np.divide(top**2, norm, out=np.zeros(top.shape), where=norm > 0)
    place = np.argmax(gain, axis=1)
    since = np.arange(n) - place[:, None]
    moved = np.where(since >= 0, np.take_along_axis(step, np.maximum(since, 0), axis=1), 0.0)
    return place.astype(np.float64), _without(e, moved)[0]


def _moving_mean(x: Floats, width: int) -> Floats:
    """Mean of ``width`` successive values around each; at the ends of those there are."""
    reach = width // 2
    wide = np.pad(x, ((0, 0), (reach, reach)), mode="edge")
    n = x.shape[1]
    return np.asarray(sum(wide[:, k : k + n] for k in range(width)) / width)
