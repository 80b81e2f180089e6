"""The location or mean of a window against history or, with history's scatter, against a number.

Depends on ``serial``, ``grid``, ``measure`` and ``reference``. Used by ``level`` and ``count``.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy import special

from sercheck.grid import Panel
from sercheck.measure import Measurement, Question, Reasons
from sercheck.measures._past import (
    MUTE,
    ToUnit,
    ask_history,
    ask_variety,
    at_the_end,
    cell,
    mean,
    measured,
    out_of_reach,
    past,
    score_spectrum,
    scored,
    value_spectrum,
    window_scores,
    without,
)
from sercheck.reference import Pivot
from sercheck.serial.arrays import Bools, Floats
from sercheck.serial.long_run import contrast_variance, mean_contrast


@dataclass(frozen=True)
class _Law:
    """What the sides of a comparison with history share, on the statistic's scale, shape (S,) each.

    Attributes:
        at: the window's mean score or mean.
        centre: history's.
        scale: standard error.
        df: degrees of freedom.
        naive: standard error had the rows been independent.
        variance: variance of the values that were averaged.
        plain: the statistic is a mean of values, not of scores.
        unit: way to the unit of the rows.
    """

    at: Floats
    centre: Floats
    scale: Floats
    df: Floats
    naive: Floats
    variance: Floats
    plain: Bools
    unit: ToUnit

    def about(self, centre: Floats, bound: Floats) -> Pivot:
        """The pivot about ``centre``, whose value in the unit of the rows is ``bound``."""
        place, scale = cell(centre), cell(self.scale)
        return Pivot(
            statistic=cell(self.at),
            centre=place,
            scale=scale,
            df=cell(self.df),
            bound=bound,
            standard_error=(self.unit(place + scale) - self.unit(place - scale)) / 2,
            to_unit=self.unit,
            naive_scale=cell(self.naive),
        )


def _law(panel: Panel, *, raw: bool, new: Floats | float) -> _Law:
    """Mean and standard error from history's cosine powers; ``new`` widens for the error of history's own mean."""
    told = past(panel)
    spectrum = value_spectrum(panel) if raw else score_spectrum(panel)
    variance, df = contrast_variance(spectrum, mean_contrast(~np.isnan(told.window)))
    rows = np.maximum(told.n, 1)
    return _Law(
        at=mean(told.window if raw else window_scores(panel)),
        centre=spectrum.mean,
        scale=np.sqrt(variance * new),
        df=df,
        naive=np.sqrt(spectrum.variance * new / rows),
        variance=spectrum.variance,
        plain=np.full(len(rows), raw),
        unit=ToUnit(None if raw else scored(panel).unit, told.offset, told.scale),
    )


def _mixed(pick: Bools, raw: _Law, robust: _Law) -> _Law:
    """``raw`` where ``pick``."""
    if not pick.any():
        return robust
    names = ("at", "centre", "scale", "df", "naive", "variance", "plain")
    chosen = {name: np.where(pick, getattr(raw, name), getattr(robust, name)) for name in names}
    return _Law(**chosen, unit=replace(robust.unit, plain=pick))


def location_with_history(panel: Panel, question: Question, *, raw: bool) -> Measurement:
    """The window's mean score (or value) at the time scale that history's cosine powers give."""
    told, stays, reasons = past(panel), question.stays, Reasons((len(past(panel).n), 1))
    ask_history(reasons, told, question.risk, "a level")
    ask_variety(reasons, told, question.risk)
    upper: Pivot | None
    lower: Pivot | None
    if stays.literal:
        law = _law(panel, raw=raw, new=1.0)
        if not raw:
            far = _beyond(panel, law, [b for b in (stays.low, stays.high) if b is not None], question.risk)
            law = _mixed(far, _law(panel, raw=True, new=1.0), law) if far.any() else law
        upper, lower = (None if b is None else _literal(panel, law, b) for b in (stays.high, stays.low))
    else:
        law = _law(panel, raw=raw, new=1 + told.n / np.maximum(told.known, 1))
        upper = lower = law.about(law.centre, law.unit(cell(law.centre)))
        if not raw:
            reasons.add(out_of_reach(scored(panel), law.centre, law.scale, law.df, question.risk)[:, None], MUTE)
    reasons.add(~(cell(law.scale) > 0), "history does not vary: there is no sampling error to allow for")
    with np.errstate(divide="ignore", invalid="ignore"):
        n_eff = told.n * (law.naive / law.scale) ** 2
    return measured(
        panel,
        reasons,
        _observed(panel, law),
        (upper, lower),
        n_eff=cell(n_eff),
        method=("mean" if raw else "mean of normal scores (van der Waerden 1952)")
        + ", overlapping batch means of history (Meketon and Schmeiser 1984; Welch 1987)",
        assumes="stationary history" + (", light tails" if raw else "") + without(told),
    )


def _literal(panel: Panel, law: _Law, bound: float) -> Pivot:
    """The pivot about the author's number, whose score history knows no better than it knows its own quantiles.

    F(1 - F)/(N φ²) is the variance of a score (Bahadur 1966, for independent rows): next to nothing beside that of the
    window's mean, unless neighbours compensate each other.
    """
    value = bound / law.unit.scale - law.unit.offset
    if law.unit.grid is None:
        return law.about(value, np.full((len(value), 1), bound))
    score = scored(panel).of(value[:, None])[:, 0]
    below = special.ndtr(score)
    error = below * (1 - below) * 2 * np.pi * np.exp(score**2) / np.maximum(past(panel).known, 1)
    wider = replace(law, scale=np.where(law.plain, law.scale, np.sqrt(law.scale**2 + error)))
    return wider.about(np.where(law.plain, value, score), np.full((len(value), 1), bound))


def _beyond(panel: Panel, law: _Law, bounds: list[float], risk: float) -> Bools:
    """Series of which a number or its limit lies outside history's values, where scores cannot follow."""
    told, values = past(panel), scored(panel)
    outside = np.zeros(len(told.n), dtype=bool)
    for bound in bounds:
        at = (bound / told.scale - told.offset)[:, None]
        outside |= out_of_reach(values, values.of(at)[:, 0], law.scale, law.df, risk)
    return outside


def _observed(panel: Panel, law: _Law) -> Floats:
    """The level in the unit of the rows; a window beyond all of history is told by its own median.

    Without any history the mean is told.
    """
    inside, told = law.unit(cell(law.at)), past(panel)
    if law.unit.grid is None:
        return inside
    inside = np.where(np.isnan(inside), cell((mean(told.window) + told.offset) * told.scale), inside)
    beyond = at_the_end(scored(panel), law.at) & ~law.plain
    middle = np.full(len(told.n), np.nan)
    if beyond.any():
        middle[beyond] = np.nanmedian(told.window[beyond], axis=1)
    return np.where(beyond[:, None], cell((middle + told.offset) * told.scale), inside)
