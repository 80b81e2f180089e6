"""One batch's statistic against those of the last ninety or so batches; depends on numpy and ``serial`` only.

A feed that lives (annual cycles, weather, growth) has no stationary history, but what the newest batches were foretells
the next one well, and how far it missed before tells how far it may miss now.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sercheck.serial.arrays import Bools, Floats, Ints

DAYS = 7
"""Batches whose mean foretells the next, and that the longer look takes together: a week of days."""

LEAST = 4
"""Batches of the last seven that a mean or a longer look needs: more than half."""

RIDGE = 1e-3
"""Ridge in units of the first regressor's sum of squares: keeps the two near-equal regressors of a slow feed apart."""

LOOK_DF = 40.0
"""Degrees of freedom of the longer look: its scale comes from 83 overlapping windows, half of them informative."""


@dataclass(frozen=True)
class OneStep:
    """How the newest batch's statistic compares with what the batches before it foretold; arrays have shape (S,).

    T = (statistic - centre) / scale; |T| · widen follows Student's t with ``df`` degrees of freedom.

    Attributes:
        statistic: the judged batch's.
        centre: what was foretold.
        scale: standard error of the forecast.
        df: degrees of freedom, fewer where history's own misses had heavy tails.
        widen: at least 1: undoes what the smaller ``df`` would gain in the middle.
        misses: T of the batches of history, studentised, shape (S, B); NaN where there is none.
        batches: batches of history that the regression used.
    """

    statistic: Floats
    centre: Floats
    scale: Floats
    df: Floats
    widen: Floats
    misses: Floats
    batches: Ints

    @property
    def t(self) -> Floats:
        """T of the judged batch."""
        return np.asarray((self.statistic - self.centre) / self.scale)


@dataclass(frozen=True)
class LongerLook:
    """The last batches together: Z = (T + carried) / (root · spread) against t with ``LOOK_DF`` degrees of freedom.

    Attributes:
        carried: sum of the misses of the batches before that take part, shape (S,).
        stretch: √k times how much past looks scattered beyond 1, shape (S,); NaN where fewer than four take part.
    """

    carried: Floats
    stretch: Floats


def one_step(table: Floats) -> OneStep:
    """Regress each batch's statistic on the one before it and on the mean of the last seven; judge the newest by it.

    Ordinary least squares on [1, S_{d-1}, mean(S_{d-7} .. S_{d-1})], centred, with a small ridge on both slopes. A
    missing S_{d-1} is replaced by the mean of the seven. Residuals e are studentised, e/√(1 - h), and their root mean
    square s gives T = (S - fit)/(s √(1 + min(1, h_0))). With γ > 0 their excess kurtosis, the tails are those of
    Student's t with ν = min(df, 4 + 6/γ) degrees of freedom (its own excess kurtosis being 6/(ν - 4)), at the same
    standard deviation as t with df = m - 3.

    Args:
        table: statistics in time order, the judged batch last, shape (S, B + 1); NaN is missing or left out.
    """
    with np.errstate(invalid="ignore", divide="ignore"):
        week = _mean_before(table)
        before = np.full_like(table, np.nan)
        before[:, 1:] = table[:, :-1]
        before = np.where(np.isnan(before), week, before)
        used = ~np.isnan(table) & ~np.isnan(week)
        used[:, -1] = False
        m = used.sum(axis=1)
        y, mean_y = _about_mean(table, used, m)
        a, mean_a = _about_mean(before, used, m)
        b, mean_b = _about_mean(week, used, m)
        saa, sab, sbb = (a * a).sum(axis=1), (a * b).sum(axis=1), (b * b).sum(axis=1)
        saa, sbb = saa * (1 + RIDGE), sbb + RIDGE * saa
        det = saa * sbb - sab * sab
        flat = ~(det > 0)
        det = np.where(flat, np.inf, det)
        say, sby = (a * y).sum(axis=1), (b * y).sum(axis=1)
        slope_a, slope_b = (sbb * say - sab * sby) / det, (saa * sby - sab * say) / det

        def leverage(u: Floats, v: Floats) -> Floats:
            quadratic = u * u * sbb[:, None] - 2 * u * v * sab[:, None] + v * v * saa[:, None]
            return np.asarray(1 / m[:, None] + quadratic / det[:, None])

        residual = np.where(used, y - slope_a[:, None] * a - slope_b[:, None] * b, np.nan)
        studentised = residual / np.sqrt(np.maximum(1 - leverage(a, b), 1e-6))
        s = np.sqrt(np.nansum(studentised**2, axis=1) / m)
        now_a, now_b = before[:, -1:] - mean_a, week[:, -1:] - mean_b
        now_a, now_b = np.nan_to_num(now_a), np.nan_to_num(now_b)  # nothing known of the last week: the mean
        centre = (mean_y + slope_a[:, None] * now_a + slope_b[:, None] * now_b)[:, 0]
        scale = s * np.sqrt(1 + np.minimum(1, leverage(now_a, now_b)[:, 0]))
        misses = studentised / s[:, None]
        df, widen = tails(misses, m)
    able = (m > 3 + DAYS) & (s > _rounding(table))
    nothing = np.where(able, 0.0, np.nan)
    return OneStep(table[:, -1], centre + nothing, scale + nothing, df, widen, misses[:, :-1], m)


def against_earlier(table: Floats, overlap: int) -> OneStep:
    """Judge the newest statistic of overlapping windows by those of windows that share no row with it.

    No regression: the statistics just before it come from rows that are themselves judged. T = (S - mean)/(s √(1 +
    v/m)), m earlier windows of which ``overlap`` in a row share rows: v = Σ ρ_j and df = m/Σ ρ_j² - 1, with
    ρ_j = 1 - j/``overlap``, the correlation of statistics that add up over rows.

    Args:
        table: statistics in time order, the judged window last, shape (S, B + 1); NaN is missing.
        overlap: windows in a row that share rows with one.
    """
    rho = 1 - np.abs(np.arange(1 - overlap, overlap)) / overlap
    earlier = table[:, :-1].copy()
    earlier[:, max(earlier.shape[1] - overlap + 1, 0) :] = np.nan
    m = np.asarray((~np.isnan(earlier)).sum(axis=1), dtype=np.int64)
    with np.errstate(invalid="ignore", divide="ignore"):
        centre = np.nansum(earlier, axis=1) / m
        freedom = m / (rho**2).sum()
        s = np.sqrt(np.nansum((earlier - centre[:, None]) ** 2, axis=1) / m * freedom / (freedom - 1))
        misses = (earlier - centre[:, None]) / s[:, None]
        scale = s * np.sqrt(1 + rho.sum() / m)
    nothing = np.where((freedom > 3) & (s > _rounding(table)), 0.0, np.nan)
    heavy, _ = tails(misses, m)
    df = np.minimum(heavy, np.maximum(freedom - 1, 1.0))
    return OneStep(table[:, -1], centre + nothing, scale + nothing, df, np.ones_like(s), misses, m)


def tails(misses: Floats, m: Ints) -> tuple[Floats, Floats]:
    """Degrees of freedom and widening that history's own misses ask for, each of shape (S,)."""
    with np.errstate(invalid="ignore", divide="ignore"):
        centred = misses - np.nansum(misses, axis=1, keepdims=True) / m[:, None]
        second = np.nansum(centred**2, axis=1) / m
        excess = np.nansum(centred**4, axis=1) / m / second**2 - 3
        df = np.maximum(m - 3.0, 3.0)
        heavy = np.where(excess > 0, np.minimum(df, 4 + 6 / np.where(excess > 0, excess, 1.0)), df)
        widen = np.maximum(1.0, np.sqrt(heavy / (heavy - 2)) / np.sqrt(df / (df - 2)))
    return heavy, np.asarray(widen)


def longer_look(misses: Floats, left_out: Bools, paused: Bools | bool = False) -> LongerLook:
    """Take the judged batch together with up to six before it.

    Z = Σ T/√k over the k ≤ 7 last batches, k ≥ 4, divided by the root mean square of the same over history where that
    exceeds 1 (misses that follow each other are not independent).

    Args:
        misses: T of history's batches, shape (S, B).
        left_out: batches that take no part (they were held), shape (S, B).
        paused: series whose look rests because it held a batch in the last seven, shape (S,).
    """
    told = ~np.isnan(misses) & ~left_out
    total = np.cumsum(np.pad(np.where(told, misses, 0.0), ((0, 0), (DAYS, 0))), axis=1)
    count = np.cumsum(np.pad(told, ((0, 0), (DAYS, 0))).astype(np.int64), axis=1)
    sums, counts = total[:, DAYS:] - total[:, :-DAYS], count[:, DAYS:] - count[:, :-DAYS]
    whole = told & (counts >= LEAST)
    past = np.where(whole, sums / np.sqrt(np.maximum(counts, 1)), 0.0)
    spread = np.sqrt((past**2).sum(axis=1) / np.maximum(whole.sum(axis=1), 1))
    last = told[:, -(DAYS - 1) :]
    k = last.sum(axis=1) + 1
    carried = np.where(last, misses[:, -(DAYS - 1) :], 0.0).sum(axis=1)
    stretch = np.where((k >= LEAST) & ~np.asarray(paused), np.sqrt(k) * np.maximum(1.0, spread), np.nan)
    return LongerLook(carried, stretch)


def smaller(first: Floats, second: Floats) -> Floats:
    """The more careful of two misses: the one nearer to 0."""
    return np.where(np.abs(second) < np.abs(first), second, first)


def studentised(t: Floats, misses: Floats, batches: Ints) -> Floats:
    """T of history's batches, put on the footing of a new one, with the judged batch's T last: (S, B + 1).

    A miss r of history took part in the scale that it is divided by; r √((m - 2)/(m - 1 - r²)) is what it would be
    without itself (externally studentised residual, Cook and Weisberg 1982).

    Args:
        t: T of the judged batch, shape (S,).
        misses: shape (S, B).
        batches: m, shape (S,).
    """
    m = batches[:, None].astype(np.float64)
    with np.errstate(invalid="ignore", divide="ignore"):
        outside = misses * np.sqrt((m - 2) / np.maximum(m - 1 - misses**2, 1e-6))
    return np.concatenate((outside, t[:, None]), axis=1)


def together(scores: Floats) -> OneStep:
    """One verdict for all series of a feed: the mean of their studentised T, judged by history's means of the same.

    Correlation among the series is in the reference, so that a small change of all is seen at once.

    Args:
        scores: what ``studentised`` gives, all series below each other, shape (S, B + 1).

    Returns:
        Arrays of shape (1,).
    """
    return one_step(mean_scores(scores)[None])


def mean_scores(scores: Floats) -> Floats:
    """Mean over the series of the scores of each batch, shape (B + 1,); NaN where less than half of them have one."""
    told = ~np.isnan(scores)
    count = told.sum(axis=0)
    mean = np.where(told, scores, 0.0).sum(axis=0) / np.maximum(count, 1)
    return np.where(2 * count >= count.max(initial=1), mean, np.nan)


def _mean_before(table: Floats) -> Floats:
    """Mean of the seven before each place, of at least four; NaN elsewhere."""
    seen = ~np.isnan(table)
    total = np.cumsum(np.pad(np.where(seen, table, 0.0), ((0, 0), (DAYS + 1, 0))), axis=1)
    count = np.cumsum(np.pad(seen, ((0, 0), (DAYS + 1, 0))).astype(np.int64), axis=1)
    size = table.shape[1]
    sums = total[:, DAYS : DAYS + size] - total[:, :size]
    counts = count[:, DAYS : DAYS + size] - count[:, :size]
    full = np.arange(size) >= DAYS
    return np.where((counts >= LEAST) & full, sums / np.maximum(counts, 1), np.nan)


def _rounding(table: Floats) -> Floats:
    """Scatter that rounding alone may give: 1e-12 of the largest statistic."""
    return np.asarray(1e-12 * np.max(np.abs(table), axis=1, where=~np.isnan(table), initial=0.0))


def _about_mean(x: Floats, used: Bools, m: Ints) -> tuple[Floats, Floats]:
    mean = np.where(used, x, 0.0).sum(axis=1, keepdims=True) / m[:, None]
    return np.where(used, x - mean, 0.0), mean
