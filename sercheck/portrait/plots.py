"""The plots of a study: the series, its correlogram, its periodogram, and scatters at the telling lags.

Depends on ``page.svg`` and the sentences. Shapes and widths tell what colours tell.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from sercheck.intake.zone import DAY, NOT_A_STAMP
from sercheck.page.svg import INKS, Drawing, drawing, inline
from sercheck.plain import plain
from sercheck.portrait import words
from sercheck.portrait.series import Portrait
from sercheck.portrait.whole import Study
from sercheck.serial.arrays import Floats, Ints
from sercheck.serial.season import detrended

if TYPE_CHECKING:
    from matplotlib.axes import Axes

POINTS = 700
"""Points of a line at most, so that a page stays small: more are drawn as the lowest and highest of each few."""
DOTS = 200
"""Dots of a scatter at most, evenly chosen."""


def plots_of(one: Portrait, study: Study, name: str, *, all_of_them: bool) -> list[tuple[Drawing, str]]:
    """The plots of one series with their captions; none for a series that has nothing to show.

    Args:
        one: the series.
        study: the study that it belongs to.
        name: letters and digits that no other series of the page has.
        all_of_them: the scatters as well.
    """
    if not len(one.values) or not np.isfinite(one.r).any():
        return []
    drawn = [_course(one, study, f"{name}a"), _correlogram(one, f"{name}b"), _periodogram(one, study, f"{name}c")]
    lags = words.telling(one) if all_of_them else []
    return drawn + [_scatter(one, lag, f"{name}d{lag}") for lag in lags]


def _course(one: Portrait, study: Study, name: str) -> tuple[Drawing, str]:
    places, values = _thinned(one.values)
    stamps = study.stamps[places]
    timed = bool((stamps != NOT_A_STAMP).all())
    with drawing() as (figure, axes):
        axes.plot(stamps / DAY if timed else places + 1, values, color=INKS["ink"], linewidth=0.6)
        if timed:
            _dates(axes, stamps)
        else:
            axes.set_xlabel("row")
        axes.set_ylabel(plain(one.column, 30))
        span = f"{one.n:,} values from {_least(one.values):.4g} to {_most(one.values):.4g}, {one.n_missing:,} missing"
        markup = inline(figure, name, f"{plain(words.name_of(one, study), 80)} over the history: {span}.")
    thinned = " Each few values are drawn as their lowest and highest." if len(one.values) > POINTS else ""
    return markup, f"The series.{thinned}"


def _dates(axes: Axes, stamps: Ints) -> None:
    """Three dates under the axis, as short as tells them apart."""
    at = stamps[[0, len(stamps) // 2, -1]]
    unit = "Y" if at[-1] - at[0] > 3000 * DAY else "D" if at[-1] - at[0] > 3 * DAY else "m"
    texts = [str(np.datetime64(int(stamp), "ns").astype(f"datetime64[{unit}]")).replace("T", "\n") for stamp in at]
    axes.set_xticks(at / DAY, texts)


def _thinned(values: Floats) -> tuple[Ints, Floats]:
    """Places and values of a line of at most about ``POINTS`` points."""
    steps = len(values)
    if steps <= POINTS:
        return np.arange(steps), values
    width = -(-2 * steps // POINTS)
    whole = steps // width
    cube = values[: whole * width].reshape(whole, width)
    some = ~np.isnan(cube).all(axis=1)
    low = np.where(some, np.where(np.isnan(cube), np.inf, cube).argmin(axis=1), 0)
    high = np.where(some, np.where(np.isnan(cube), -np.inf, cube).argmax(axis=1), 0)
    places = np.sort(np.stack([low, high], axis=1), axis=1) + (np.arange(whole) * width)[:, None]
    return places.reshape(-1), values[places.reshape(-1)]


def _correlogram(one: Portrait, name: str) -> tuple[Drawing, str]:
    few = len(one.lags) <= 60
    with drawing() as (figure, axes):
        axes.fill_between(one.lags, -one.band, one.band, color=INKS["band"], linewidth=0)
        axes.axhline(0, color=INKS["muted"], linewidth=0.6)
        nothing = np.full(len(one.lags), np.nan)  # one broken line takes a fifth of the room of many stems
        stems = np.stack([np.zeros(len(one.lags)), one.r, nothing], axis=1).reshape(-1)
        axes.plot(np.repeat(one.lags, 3), stems, color=INKS["batch"], linewidth=1.6 if few else 0.7)
        for lag in words.telling(one):
            r = float(one.r[one.lags == lag][0])
            axes.plot([lag], [r], "D", color=INKS["fail"], markersize=4)
            axes.annotate(str(lag), (lag, r), (3, 4), textcoords="offset points")
        axes.set_xlabel("lag, in steps")
        axes.set_ylabel("autocorrelation")
        axes.set_ylim(top=1.12)
        alt = f"Correlogram, lags 1 to {one.lags[-1]}. {words.correlogram_text(one)}"
        markup = inline(figure, name, alt)
    band = "Band: where 95 % of sample autocorrelations lie if there is none from that lag on (Bartlett 1946)."
    return markup, f"The correlogram. {band} Diamonds: the telling lags."


def _periodogram(one: Portrait, study: Study, name: str) -> tuple[Drawing, str]:
    rest = np.nan_to_num(detrended(one.values[None])[0])
    top = float(np.abs(rest).max())
    power = np.abs(np.fft.rfft(rest / top if top > 0 else rest)) ** 2
    k = np.arange(1, len(power))
    period = len(rest) / np.maximum(k, 1)
    share = power[1:] / max(float(power[1:].sum()), 1e-300)
    keep = share > 0
    period, share = period[keep], share[keep]
    order = np.argsort(np.log(period))
    width = max(1, -(-2 * len(order) // POINTS))
    whole = len(order) // width
    highest = order[: whole * width].reshape(whole, width)
    best = np.take_along_axis(highest, share[highest].argmax(axis=1)[:, None], axis=1)[:, 0]
    with drawing() as (figure, axes):
        axes.loglog(period[best], share[best], color=INKS["batch"], linewidth=0.8)
        for season in one.seasons:
            axes.axvline(season.steps, color=INKS["fail"], linewidth=1.2, dashes=(4, 2))
            label = f"{season.steps}{f' ({season.name})' if season.name else ''}"
            axes.annotate(label, (season.steps, 1), (2, -2), xycoords=("data", "axes fraction"),
                          textcoords="offset points", rotation=90, va="top", ha="left")  # fmt: skip
        for axis in (axes.xaxis, axes.yaxis):
            axis.set_major_formatter(lambda value, _: f"{value:g}")
            axis.set_minor_formatter(lambda _value, _: "")
        axes.set_xlabel("period, in steps")
        axes.set_ylabel("share of the variance")
        told = ", ".join(str(season.steps) for season in one.seasons) or "none"
        who = plain(words.name_of(one, study), 80)
        markup = inline(figure, name, f"Periodogram of {who} less a line in time. Seasons marked: {told}.")
    return markup, "The periodogram, a line in time taken out, the highest of each few ordinates. Dashed: the seasons."


def _scatter(one: Portrait, lag: int, name: str) -> tuple[Drawing, str]:
    before, now = one.values[:-lag], one.values[lag:]
    both = np.flatnonzero(~np.isnan(before) & ~np.isnan(now))
    chosen = both[:: max(1, -(-len(both) // DOTS))]
    r = float(one.r[one.lags == lag][0])
    with drawing() as (figure, axes):
        axes.plot(before[chosen], now[chosen], "o", color=INKS["batch"], markersize=2, alpha=0.6)
        axes.set_xlabel(f"value {lag} steps before" if lag > 1 else "value one step before")
        axes.set_ylabel("value")
        pairs = f"{len(chosen):,} of {len(both):,} pairs"
        alt = f"Each value against the value {lag} steps before, {pairs}; autocorrelation {r:.2f}."
        markup = inline(figure, name, alt)
    return markup, f"Lag {lag}: autocorrelation {r:.2f}."


def _least(x: Floats) -> float:
    return float(np.fmin.reduce(x))


def _most(x: Floats) -> float:
    return float(np.fmax.reduce(x))
