"""A batch against the feed's own recent past, measure by measure; depends on ``serial``, ``reference``, ``looks``.

Real feeds have annual cycles, weather, growth: what they did years ago says little. Each measure boils a batch down to
one number; the numbers of the last ninety or so batches foretell the newest one, and their own misses tell how far it
may be off.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from sercheck.looks import Sooner
from sercheck.reference import Larger, Pivot
from sercheck.serial import batch_statistics as statistic
from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.autoregression import Autoregression, burg
from sercheck.serial.recent import LOOK_DF, LongerLook, OneStep, against_earlier, longer_look, one_step, smaller
from sercheck.serial.scores import Ranking, ranking
from sercheck.serial.walk_forward import Profile, off_scale

WHITENER = 6
"""Highest order of the model that whitens for amplitude and phase: a batch is short, and each order costs a value."""

Map = Callable[[Floats], Floats]


@dataclass(frozen=True)
class Comparison:
    """What one measure saw of the newest batch.

    Attributes:
        observed: in the unit a reader knows, shape (S, 1); NaN where it cannot be had.
        reference: how it scatters, both sides.
        n: values that it was computed from, shape (S, 1).
        n_eff: n times the variance that independent rows would give over the variance used, shape (S, 1).
        t: T of the judged batch, shape (S,); NaN without a regression.
        misses: T of history's batches, shape (S, B); empty without a regression.
        batches: batches of history that the forecast was learned from, shape (S, 1).
    """

    observed: Floats
    reference: Sooner | Pivot
    n: Ints
    n_eff: Floats
    t: Floats
    misses: Floats
    batches: Ints


@dataclass(frozen=True)
class RecentPast:
    """The newest batch and the stretches of its length before it. Arrays of W steps end with the batch.

    Attributes:
        x: values as delivered (but for ``scale``), shape (S, W), W at least (B + 1)·n.
        y: the same on the scale that is judged, closed days missing, shape (S, (B + 1)·n).
        profile: what was expected a week before, on that scale; None for a feed without a season.
        n: steps in one batch.
        held: batches of history that were held, shape (S, B).
        counts: series of whole numbers not below 0, shape (S,).
        scale: unit of x in the feed's unit, a power of two, shape (S,).
        log: c of the series judged on the scale ln(1 + x/c), NaN for the others, shape (S,).
    """

    x: Floats
    y: Floats
    profile: Profile | None
    n: int
    held: Bools
    log: Floats
    counts: Bools
    scale: Floats

    # -- shared by the measures, each computed once ------------------------------------------------------------------

    @cached_property
    def expected(self) -> Floats:
        """The profile, 0 without one, shape (S, (B + 1)·n)."""
        return np.zeros_like(self.y) if self.profile is None else self.profile.here

    @cached_property
    def residual(self) -> Floats:
        """What the profile does not explain."""
        return np.asarray(self.y - self.expected)

    @cached_property
    def held_steps(self) -> Bools:
        """Steps of history that lie in held batches."""
        return np.repeat(self.held, self.n, axis=1)

    def model(self, highest: int | None = None) -> Autoregression:
        """The autoregressive model of history's residuals, held batches left out, short enough for the gaps."""
        past = self.residual[:, : -self.n]
        begin = int(np.argmax((~np.isnan(past)).any(axis=0)))  # before it the profile was not yet known
        fitted = burg(np.where(self.held_steps, np.nan, past)[:, begin:], max_order=highest)
        return statistic.existing(fitted, past, ~self.held_steps)

    @cached_property
    def whitener(self) -> Autoregression:
        """The short model that whitens for amplitude and phase."""
        return self.model(WHITENER)

    @cached_property
    def places(self) -> Ranking:
        """History's residuals, ordered; those that are equal but for their rounding are ties."""
        terms = () if self.profile is None else (self.y[:, : -self.n], self.expected[:, : -self.n])
        return ranking(self.residual[:, : -self.n], terms)

    @cached_property
    def scores(self) -> Floats:
        """Normal scores of the residuals in history."""
        return np.concatenate((self.places.own, self.places.of(self.residual[:, -self.n :])), axis=1)

    @cached_property
    def innovations(self) -> Floats:
        """What neither profile nor model foresees."""
        model = self.model()
        return statistic.through_filter(self.residual - model.mean[:, None], model)

    @cached_property
    def innovation_scores(self) -> Floats:
        """Normal scores of the innovations in history's."""
        order = ranking(self.innovations[:, : -self.n])
        return np.concatenate((order.own, order.of(self.innovations[:, -self.n :])), axis=1)

    def inverse(self, y: Floats) -> Floats:
        """From the scale that is judged back to the feed's unit, shape (S, ...)."""
        return _to_feed(y, self.log, self.scale)

    def _count(self, values: Floats) -> Ints:
        return np.asarray((~np.isnan(values[:, -self.n :])).sum(axis=1, keepdims=True), dtype=np.int64)

    # -- the measures ------------------------------------------------------------------------------------------------

    def level(self) -> Comparison:
        """Where the batch lies, in the unit of the values; one look."""
        step = one_step(statistic.level(self.scores, self.n))
        middle = _last_mean(self.expected, self.n)
        unit, log, scale = self.places.unit, self.log, self.scale  # not all of history, as the map outlives the block

        def to_unit(score: Floats) -> Floats:
            return _to_feed(unit(score) + middle, log, scale)

        n = self._count(self.scores)
        naive = 1 / np.sqrt(np.maximum(n, 1))
        return _comparison(step, to_unit, _pivot(step, to_unit, naive), n, naive)

    def spread(self, paused: Bools | bool = False) -> Comparison:
        """Standard deviation around the profile, in the unit of the values; two looks on two scales each."""
        past = self.residual[:, : -self.n]
        unit = np.sqrt(_variance(past))[:, None]
        level = (self.log + off_scale(_last_mean(self.expected, self.n), self.log)[:, 0])[:, None]
        unit = np.where(np.isnan(level), unit, unit * level) * self.scale[:, None]  # sd of ln(1 + x/c) times c + level
        return self._two_scales(
            statistic.spread(self.scores, self.n),
            lambda v: unit * np.sqrt(np.maximum(v - statistic.FLOOR, 0.0)),
            self._count(self.scores),
            paused,
        )

    def innovations_variance(self, paused: Bools | bool = False) -> Comparison:
        """Variance of what the model does not foresee, over history's; two looks on two scales each."""
        table = statistic.power(self.innovation_scores, self.n)
        with np.errstate(invalid="ignore", divide="ignore"):
            usual = _average(table[:, :-1])[:, None]
        return self._two_scales(table, lambda v: v / usual, self._count(self.innovation_scores), paused)

    def difference_autocorrelation(self, paused: Bools | bool = False) -> Comparison:
        """Lag-one autocorrelation of the first differences, the season left in; two looks."""
        table = statistic.difference_autocorrelation(self._even, self.n)
        n = self._count(self._even)
        return self._two_looks(self._without_held(table), np.tanh, n, 1 / np.sqrt(np.maximum(n - 2, 1)), paused)

    def roughness(self, paused: Bools | bool = False) -> Comparison:
        """Mean square of the fourth differences over the first, 1 for independent values, season left in; two looks."""
        table = statistic.roughness(self._even, self.n)
        n = self._count(self._even)
        naive = np.sqrt(statistic.ROUGH_VARIANCE / np.maximum(n, 1))
        return self._two_looks(self._without_held(table), statistic.rough_unit, n, naive, paused)

    @cached_property
    def _even(self) -> Floats:
        """Values whose noise is of even size: roots of counts (Anscombe 1948), else the scale that is judged."""
        root = np.sqrt(np.maximum(self.x[:, -self.y.shape[1] :], 0.0))
        return np.where(self.counts[:, None] & ~np.isnan(self.y), root, self.y)

    def _white(self, x: Floats) -> Floats:
        return statistic.through_filter(x, self.whitener)

    @cached_property
    def amplitudes(self) -> statistic.Fitted | None:
        """Strength of the season in every batch."""
        if self.profile is None:
            return None
        return statistic.amplitude(self._white(self.y), self._white(self.profile.here), self.n)

    @cached_property
    def slips(self) -> statistic.Fitted | None:
        """Steps by which every batch runs late."""
        if self.profile is None:
            return None
        own = self.profile
        here, ahead, behind = (self._white(part) for part in (own.here, own.ahead, own.behind))
        return statistic.slip(self._white(self.y), here, ahead, behind, self.n)

    def amplitude(self, paused: Bools | bool = False) -> Comparison:
        """Strength of the season, 1 being the profile's; two looks.

        Raises:
            ValueError: for a feed without a season.
        """
        return self._of_fit(self.amplitudes, 1.0, paused)

    def phase(self, paused: Bools | bool = False) -> Comparison:
        """Steps by which the season runs late; two looks.

        Raises:
            ValueError: for a feed without a season.
        """
        return self._of_fit(self.slips, 0.0, paused)

    def whiteness(self, stride: int, lags: int = 10) -> Comparison:
        """Whether the innovations are as white as they were: the portmanteau sum Q of the window; one look, upwards.

        Judged by ln Q less its mean over the windows that ended 7 to 34 strides earlier, against the same of the
        windows that share no row with it. Never for a window of one day of hours: it gives 17 times its risk there.

        Args:
            stride: steps of one batch; the window is to span seven of them.
            lags: autocorrelations in the sum.
        """
        table = statistic.portmanteau(self.innovations, self.n, stride, lags)
        usual = statistic.mean_earlier(table)
        step = against_earlier(table - usual, self.n // stride)
        last = usual[:, -1:]
        n = self._count(self.innovations)
        naive = np.full((len(self.x), 1), np.sqrt(2 / lags))  # sd of ln Q for a chi-square law

        def to_unit(u: Floats) -> Floats:
            return np.exp(u + last)

        return _comparison(step, to_unit, _pivot(step, to_unit, naive), n, naive)

    def sight(self, fit: statistic.Fitted | None) -> Floats:
        """How far a lost season (or a slip of one step) moves T, in standard deviations of T, shape (S,).

        The median over history of 1/error, divided by the standard deviation of the t-values: where it does not exceed
        t_{1-α/4} + .84 (√7 times it, for the longer look), such a fault is not seen and the rule is idle.
        """
        if fit is None:
            return np.full(len(self.x), np.nan)
        told = ~np.isnan(fit.error[:, :-1])
        ordered = np.sort(np.where(told, 1 / np.where(told, fit.error[:, :-1], 1.0), np.inf), axis=1)
        middle = np.take_along_axis(ordered, np.maximum(told.sum(axis=1, keepdims=True) - 1, 0) // 2, axis=1)[:, 0]
        score = fit.score[:, :-1]
        return np.asarray(middle / np.sqrt(_variance(score)))

    # -- how a table becomes a reference -----------------------------------------------------------------------------

    def _without_held(self, table: Floats) -> Floats:
        table = table.copy()
        table[:, :-1][self.held] = np.nan
        return table

    def _look(self, misses: Floats, paused: Bools | bool) -> LongerLook:
        return longer_look(misses, self.held, paused)

    def _two_looks(self, table: Floats, to_unit: Map, n: Ints, naive: Floats, paused: Bools | bool) -> Comparison:
        step = one_step(table)
        look = self._look(step.misses, paused)
        first, second = _pivot(step, to_unit, naive), _look_pivot(step, look, to_unit)
        return _comparison(step, to_unit, Sooner(first, second), n, naive)

    def _two_scales(self, table: Floats, to_unit: Map, n: Ints, paused: Bools | bool) -> Comparison:
        """A variance on the logarithm and on the cube root (Wilson and Hilferty 1931): the more careful one counts."""
        scales: tuple[tuple[Map, Map], ...] = ((np.log, np.exp), (np.cbrt, _cube))
        steps = [one_step(np.asarray(change(table))) for change, _ in scales]
        backs = [_then(back, to_unit) for _, back in scales]
        look = self._look(smaller(steps[0].misses, steps[1].misses), paused)
        naive = np.sqrt(2 / np.maximum(n - 1, 1))
        thirds = (naive, naive / 3 * np.exp(steps[0].centre / 3)[:, None])
        first = [_pivot(step, back, scale) for step, back, scale in zip(steps, backs, thirds, strict=True)]
        second = [_look_pivot(step, look, back) for step, back in zip(steps, backs, strict=True)]
        reference = Sooner(Larger(*first), Larger(*second))
        told = _comparison(steps[0], backs[0], reference, n, naive)
        t, misses = smaller(steps[0].t, steps[1].t), smaller(steps[0].misses, steps[1].misses)
        return replace(told, t=t, misses=misses)

    def _of_fit(self, fit: statistic.Fitted | None, usual: float, paused: Bools | bool) -> Comparison:
        if fit is None:
            raise ValueError("a feed without a season has neither amplitude nor phase")

        def to_unit(score: Floats) -> Floats:
            return fit.of_score(score[..., 0], usual)[:, None]

        told = self._two_looks(
            self._without_held(fit.score), to_unit, self._count(self.y), np.ones((len(self.x), 1)), paused
        )
        return replace(told, observed=fit.estimate[:, -1:])  # the score is clipped, the estimate is not


def _to_feed(y: Floats, log: Floats, scale: Floats) -> Floats:
    """From the scale that is judged to the feed's unit, shape (S, ...)."""
    return off_scale(y, log) * scale.reshape(-1, *([1] * (y.ndim - 1)))


def _then(first: Map, second: Map) -> Map:
    return lambda u: second(first(u))


def _cube(u: Floats) -> Floats:
    return np.asarray(np.maximum(u, 0.0) ** 3)


def _average(x: Floats) -> Floats:
    told = ~np.isnan(x)
    return np.asarray(np.where(told, x, 0.0).sum(axis=1) / told.sum(axis=1))


def _variance(x: Floats) -> Floats:
    told = ~np.isnan(x)
    count = told.sum(axis=1)
    mean = np.where(told, x, 0.0).sum(axis=1) / np.maximum(count, 1)
    square = np.where(told, x - mean[:, None], 0.0) ** 2
    return np.where(count > 1, square.sum(axis=1) / np.maximum(count - 1, 1), np.nan)


def _last_mean(x: Floats, n: int) -> Floats:
    """Mean of the newest batch's part, shape (S, 1)."""
    return _average(np.nan_to_num(x[:, -n:]))[:, None]


def _pivot(step: OneStep, to_unit: Map, naive: Floats) -> Pivot:
    """The batch by itself."""
    centre, scale = step.centre[:, None], (step.scale / step.widen)[:, None]
    return Pivot(step.statistic[:, None], centre, scale, step.df[:, None], to_unit(centre),
                 _error(centre, step.scale[:, None], to_unit), to_unit, naive_scale=naive)  # fmt: skip


def _look_pivot(step: OneStep, look: LongerLook, to_unit: Map) -> Pivot:
    """The batch with those before it: Z as a pivot in the newest batch's statistic, the others being given."""
    centre = (step.centre - look.carried * step.scale)[:, None]
    scale = (step.scale * look.stretch)[:, None]
    return Pivot(step.statistic[:, None], centre, scale, np.full_like(centre, LOOK_DF), to_unit(step.centre[:, None]),
                 _error(step.centre[:, None], scale, to_unit), to_unit)  # fmt: skip


def _error(centre: Floats, scale: Floats, to_unit: Map) -> Floats:
    """Standard error in the unit: half of what one standard error to either side spans."""
    return np.asarray((to_unit(centre + scale) - to_unit(centre - scale)) / 2)


def _comparison(step: OneStep, to_unit: Map, reference: Sooner | Pivot, n: Ints, naive: Floats) -> Comparison:
    blank = np.where(np.isnan(step.scale), np.nan, 0.0)[:, None]
    n_eff = n * (naive / step.scale[:, None]) ** 2 + blank
    return Comparison(to_unit(step.statistic[:, None]), reference, n, n_eff, step.t, step.misses, step.batches[:, None])
