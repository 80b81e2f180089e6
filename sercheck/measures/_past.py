"""A window and its history with the fixed cycles taken out, and the reasons that the classical measures share.

Depends on ``serial``, ``grid``, ``measure``, ``reference`` and ``baseline``. Everything here is computed once a panel.
"""

from __future__ import annotations

from collections.abc import Callable, Collection
from dataclasses import dataclass, replace

import numpy as np

from sercheck.baseline import residual
from sercheck.grid import Panel
from sercheck.measure import Measurement, Reasons, Reference, Side
from sercheck.reference import Pivot
from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.long_run import CosineSpectrum, cosine_spectrum
from sercheck.serial.risk import t_quantile
from sercheck.serial.scores import QuantileGrid, Ranking, commonest_share, ranking
from sercheck.serial.window_t import SMALL_RISK, fewest_windows

NO_HISTORY = "no history: pass --history or learn a baseline"
FEWEST_ROWS = 24
"""Rows of a window that a comparison with history needs (simulated: sizes hold from there on)."""
TIED, TIED_SMALL_RISK = 0.8, 0.5
"""Share of the commonest value above which moments say nothing, and the same at a risk of .001 or less (simulated)."""


@dataclass(frozen=True)
class Past:
    """The window that is judged and the history before it, in units of ``scale`` and without fixed cycles.

    Attributes:
        window: shape (S, n).
        history: shape (S, N), residuals of a profile that did not see the cycle itself.
        offset: what to add to a mean of ``window`` to have the mean of the rows, in units of ``scale``, shape (S,).
        scale: a power of two for each series that keeps squares within reach of doubles, shape (S,).
        n: observed values of the window, shape (S,).
        known: observed values of history, shape (S,).
        commonest: share of the commonest value among the rows as delivered, of history or, without one, of the
            window, shape (S,).
        seasons: names of the cycles taken out.
    """

    window: Floats
    history: Floats
    offset: Floats
    scale: Floats
    n: Ints
    known: Ints
    commonest: Floats
    seasons: tuple[str, ...]

    @property
    def steps(self) -> int:
        """Steps of the window."""
        return int(self.window.shape[1])

    @property
    def stretches(self) -> Ints:
        """How many windows' worth of values history holds, shape (S,)."""
        return np.asarray(self.known // max(self.steps, 1), dtype=np.int64)


def past(panel: Panel) -> Past:
    """Cut the panel into window and history, residuals of the profile."""
    return panel.remember("past", lambda: _past(panel))


def _past(panel: Panel) -> Past:
    without = residual(panel)
    seen = ~np.isnan(without.values)
    # fmax and fmin pass over missing values, much faster than a mask does
    high, low = (end.reduce(panel.values, axis=1, initial=0.0) for end in (np.fmax, np.fmin))
    peak = np.fmax(high, -low)
    exponent = np.clip(np.frexp(peak)[1], -1021, 1022)
    values = np.ldexp(without.values, -exponent[:, None])
    window, history = values[:, panel.start :], values[:, : panel.start]
    n = seen[:, panel.start :].sum(axis=1)
    there = seen[:, panel.start :]
    profile = np.ldexp(without.profile[:, panel.start :], -exponent[:, None])
    rows = panel.history if panel.start else panel.window
    return Past(
        window=window,
        history=history,
        offset=mean(np.where(there, profile, np.nan)),
        scale=np.ldexp(1.0, exponent),
        n=n,
        known=seen[:, : panel.start].sum(axis=1),
        commonest=commonest_share(rows) if without.seasons or not panel.start else scored(panel, history).commonest,
        seasons=without.seasons,
    )


def scored(panel: Panel, history: Floats | None = None) -> Ranking:
    """Normal scores in the series' own history, without its cycles."""
    return panel.remember("ranking", lambda: _scored(panel) if history is None else ranking(history))


def _scored(panel: Panel) -> Ranking:
    """Residuals that are equal but for their rounding are ties, as they are in every other unit."""
    told = past(panel)
    if not told.seasons:
        return ranking(told.history)
    terms = (panel.history, residual(panel).profile[:, : panel.start])
    return ranking(told.history, [term / told.scale[:, None] for term in terms])


def score_spectrum(panel: Panel) -> CosineSpectrum:
    """Cosine powers of history's scores."""
    return panel.remember("score spectrum", lambda: cosine_spectrum(scored(panel).own))


def value_spectrum(panel: Panel) -> CosineSpectrum:
    """Cosine powers of history's values (in units of ``Past.scale``)."""
    return panel.remember("value spectrum", lambda: cosine_spectrum(past(panel).history))


def window_scores(panel: Panel) -> Floats:
    """Scores of the window's values, shape (S, n)."""
    return panel.remember("window scores", lambda: scored(panel).of(past(panel).window))


def quartile_scale(panel: Panel) -> Floats:
    """What one step of a score is worth in the unit of the rows: history's quartile distance over that of N(0, 1).

    The standard deviation where the quartiles coincide. Shape (S,).
    """
    told, unit = past(panel), scored(panel).unit
    quartile = 0.6744897501960817
    at = np.full((len(told.n), 1), quartile)
    distance = (unit(at) - unit(-at))[:, 0] / (2 * quartile)
    return np.where(distance > 0, distance, np.sqrt(variance(told.history))) * told.scale


def mean(x: Floats) -> Floats:
    """Mean of the observed values of each row; NaN when there is none."""
    seen = ~np.isnan(x)
    count = seen.sum(axis=1)
    total = (x if seen.all() else np.where(seen, x, 0.0)).sum(axis=1)
    return np.where(count > 0, total / np.maximum(count, 1), np.nan)


def variance(x: Floats) -> Floats:
    """Variance (divisor n - 1) of the observed values along the last axis; NaN where fewer than two are observed."""
    seen = ~np.isnan(x)
    count = seen.sum(axis=-1)
    middle = np.where(seen, x, 0.0).sum(axis=-1) / np.maximum(count, 1)
    squares = (np.where(seen, x - middle[..., None], 0.0) ** 2).sum(axis=-1)
    return np.where(count > 1, squares / np.maximum(count - 1, 1), np.nan)


def cell(x: Floats | Ints | Bools) -> Floats:
    """Shape (S,) to the (S, 1) of a measure without lags."""
    return np.asarray(x, dtype=np.float64)[:, None]


def counts(panel: Panel) -> tuple[Ints, Ints]:
    """Observed and missing values of the window as delivered, both of shape (S, 1)."""
    n = np.asarray((~np.isnan(panel.window)).sum(axis=1, keepdims=True), dtype=np.int64)
    return n, np.asarray(panel.window.shape[1] - n, dtype=np.int64)


def ask_rows(reasons: Reasons, told: Past, fewest: int, what: str) -> None:
    """Undecided where the window has fewer than ``fewest`` values."""
    few = cell(told.n) < fewest
    reasons.add(few, f"fewer than {fewest} values in the window: {what} needs {fewest}")


def ask_history(reasons: Reasons, told: Past, risk: float, what: str) -> None:
    """Undecided without history, or where it holds too few stretches of the window's length."""
    reasons.add(cell(told.known) == 0, NO_HISTORY)
    ask_rows(reasons, told, FEWEST_ROWS, f"{what} against history")
    fewest = fewest_windows(risk)
    reasons.add(
        cell(told.stretches) < fewest,
        f"history holds fewer than {fewest} stretches of the window's {told.steps} steps: "
        f"{fewest * told.steps} steps are needed at a risk of {risk:g}",
    )


def ask_variety(reasons: Reasons, told: Past, risk: float) -> None:
    """Undecided where one value makes up most of the rows."""
    ask_commonest(reasons, told.commonest, risk)


def ask_commonest(reasons: Reasons, commonest: Floats, risk: float) -> None:
    """The same, given the share of the commonest value, shape (S,)."""
    share = TIED_SMALL_RISK if risk <= SMALL_RISK else TIED
    with np.errstate(invalid="ignore"):
        reasons.add(
            cell(commonest) > share,
            f"one value makes up more than {share:.0%} of the rows: use the measure rate for it",
        )


MUTE = "the limit lies beyond all of history's values: a longer window or history is needed"


def out_of_reach(rank: Ranking, centre: Floats, scale: Floats, df: Floats, risk: float) -> Bools:
    """Where a limit lies at or beyond the extreme scores, so that no window could break it, shape (S,)."""
    ends = rank.unit.scores
    with np.errstate(invalid="ignore"):
        reach = t_quantile(1 - risk / 2, df) * scale
        return np.asarray((centre + reach >= ends[:, -1]) | (centre - reach <= ends[:, 0]))


def at_the_end(rank: Ranking, score: Floats) -> Bools:
    """Where a score is one of the extremes (to rounding), so that the value may lie anywhere beyond, shape (S,)."""
    ends, nearly = rank.unit.scores, 1 - 1e-9
    with np.errstate(invalid="ignore"):
        return np.asarray((score >= ends[:, -1] * nearly) | (score <= ends[:, 0] * nearly))


def without(told: Past) -> str:
    """What was taken out, for ``assumes``."""
    return taken_out(told.seasons)


def taken_out(seasons: Collection[str]) -> str:
    """The same, given the names of the cycles."""
    return f", fixed cycles ({', '.join(seasons)}) taken out" if seasons else ""


def pivot_through(
    to_unit: Callable[[Floats], Floats], at: Floats, centre: Floats, scale: Floats, df: Floats, *,
    bound: Floats | None = None, naive: Floats | None = None,
) -> Pivot:  # fmt: skip
    """Student's t on a scale that ``to_unit`` bends: its standard error in the unit is half of what two steps span.

    Shape (S,) for what is on that scale; ``bound``, shape (S, 1), is what ``to_unit`` makes of the centre unless given.
    """
    place, step = cell(centre), cell(scale)
    return Pivot(
        statistic=cell(at),
        centre=place,
        scale=step,
        df=cell(df),
        bound=to_unit(place) if bound is None else bound,
        standard_error=(to_unit(place + step) - to_unit(place - step)) / 2,
        to_unit=to_unit,
        naive_scale=None if naive is None else cell(naive),
    )


def measured(
    panel: Panel,
    reasons: Reasons,
    observed: Floats,
    both: tuple[Reference | None, Reference | None],
    *,
    n_eff: Floats | None = None,
    method: str,
    assumes: str,
) -> Measurement:
    """What a measure without lags saw; ``both``: for too large and too small, ``n_eff`` None: it has no meaning."""
    n, n_missing = counts(panel)
    return Measurement(
        observed=observed,
        n=n,
        n_missing=n_missing,
        n_eff=np.full(n.shape, np.nan) if n_eff is None else n_eff,
        upper=both[0],
        lower=both[1],
        undecided=reasons.index,
        reasons=tuple(reasons.texts),
        method=method,
        assumes=assumes,
    )


@dataclass(frozen=True)
class Chosen:
    """One of two references for each series: ``first`` where ``pick``, shape (S, 1)."""

    pick: Bools
    first: Reference
    second: Reference

    @property
    def bound(self) -> Floats:
        return np.where(self.pick, self.first.bound, self.second.bound)

    @property
    def standard_error(self) -> Floats:
        return np.where(self.pick, self.first.standard_error, self.second.standard_error)

    def p_value(self, side: Side) -> Floats:
        return np.where(self.pick, self.first.p_value(side), self.second.p_value(side))

    def limit(self, side: Side, risk: Floats) -> Floats:
        return np.where(self.pick, self.first.limit(side, risk), self.second.limit(side, risk))

    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        return np.where(self.pick, self.first.naive_limit(side, risk), self.second.naive_limit(side, risk))

    def detectable(self, side: Side, risk: Floats) -> Floats:
        return np.where(self.pick, self.first.detectable(side, risk), self.second.detectable(side, risk))


def combined(pick: Bools, make_first: Callable[[], Measurement], make_second: Callable[[], Measurement]) -> Measurement:
    """The first measurement where ``pick`` (shape (S,)), the second elsewhere; only what is needed is made.

    Each series is judged by the method that its own history allows, whatever stands beside it in the block.
    """
    if pick.all() or not pick.any():
        return make_first() if pick.all() and len(pick) else make_second()
    first, second, here = make_first(), make_second(), pick[:, None]

    def either(a: Reference | None, b: Reference | None) -> Reference | None:
        return None if a is None or b is None else Chosen(here, a, b)

    def places(a: Ints | None, b: Ints | None) -> Ints:
        a, b = (np.full(here.shape, -1) if each is None else each for each in (a, b))
        return np.where(here, a, np.where(b < 0, -1, b + len(first.reasons)))

    nothing_unsure = first.unsure is None and second.unsure is None
    return replace(
        first,
        observed=np.where(here, first.observed, second.observed),
        n_eff=np.where(here, first.n_eff, second.n_eff),
        upper=either(first.upper, second.upper),
        lower=either(first.lower, second.lower),
        undecided=places(first.undecided, second.undecided),
        unsure=None if nothing_unsure else places(first.unsure, second.unsure),
        reasons=(*first.reasons, *second.reasons),
        scores=second.scores if first.scores is None else first.scores,
        method=f"{first.method}; where history is too short: {second.method}",
        assumes=f"{first.assumes}; where history is too short: {second.assumes}",
    )


def mostly_beyond(panel: Panel) -> Bools:
    """Series of which more than half of the window's values lie beyond all of history's, shape (S,).

    Scores end where history ends: such a window has lost what a score could tell.
    """
    told = past(panel)
    if not told.history.shape[1]:
        return np.zeros(len(told.n), dtype=bool)
    known = ~np.isnan(told.history)
    low = np.min(told.history, axis=1, where=known, initial=np.inf)
    high = np.max(told.history, axis=1, where=known, initial=-np.inf)
    with np.errstate(invalid="ignore"):
        beyond = ((told.window > high[:, None]) | (told.window < low[:, None])).sum(axis=1)
        varies = variance(told.history) > 0  # so far beyond that history vanishes beside it: scores must do
    return np.asarray((2 * beyond > told.n) & (told.known > 0) & varies)


def varied(told: Measurement, panel: Panel, risk: float) -> Measurement:
    """The same measurement, undecided where one value makes up most of history's rows."""
    reasons = Reasons(told.observed.shape)
    reasons.index = np.where(told.undecided < 0, -1, told.undecided)
    reasons.texts = list(told.reasons)
    ask_commonest(reasons, panel.remember("commonest", lambda: commonest_share(panel.history)), risk)
    return replace(told, undecided=reasons.index, reasons=tuple(reasons.texts))


@dataclass(frozen=True)
class ToUnit:
    """Increasing map from a statistic's scale to the unit of the rows, shape (S, L) to (S, L).

    Attributes:
        grid: way from a mean score to a value; None when the statistic is a value already.
        offset: added, in units of ``scale``, shape (S,).
        scale: shape (S,).
        plain: series whose statistic is a value already, shape (S,), or None.
    """

    grid: QuantileGrid | None
    offset: Floats
    scale: Floats
    plain: Bools | None = None

    def __call__(self, x: Floats) -> Floats:
        value = x if self.grid is None else self.grid(x)
        if self.plain is not None:
            value = np.where(self.plain[:, None], x, value)
        return np.asarray((value + self.offset[:, None]) * self.scale[:, None], dtype=np.float64)
