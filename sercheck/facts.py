"""What the history of each series is like, by blocks: moments, profile, model, repeats, gaps, and what spoils it.

How much a window's mean and autocorrelations scatter by it is among the facts. Depends on ``serial``, ``grid``,
``baseline``, ``transforms``, ``sampling`` and the compiled rules.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from sercheck.baseline import residual
from sercheck.grid import Axis, Grid, Panel
from sercheck.rulebook.compiled import Length, Rule, Transform
from sercheck.sampling import after, autocorrelation_laws, lags_of, mean_laws
from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.autocovariances import autocorrelation
from sercheck.serial.autoregression import burg
from sercheck.serial.centre import centred
from sercheck.serial.change_point import most_likely_break, self_normalized, self_normalized_tail
from sercheck.serial.repeats import equal_share, equal_to_earlier
from sercheck.serial.season import median, robust_phase_means
from sercheck.serial.walk_forward import log_unit
from sercheck.transforms import apply

DAY = 86_400_000_000_000
"""Nanoseconds of a day."""
FEWEST_DAYS, FEWEST_BESIDE = 28, 7
"""Days in which a change of level is looked for, and days on either side of it (ours: four weeks, one week)."""
RISK = 0.001
"""Risk of a change of level that is none, for each series (ours: one in a thousand meters)."""
LEAST_CHANGE = 3.0
"""Robust standard deviations of the days on either side that a change of level is worth telling from (ours: weather and
holidays move days by one or two)."""
CUT = 10.0
"""Robust standard deviations at which a day's mean is cut before a change is looked for: a broken day is no change."""


@dataclass(frozen=True)
class Facts:
    """The facts of one value column of a block of series.

    Attributes:
        keys: names of the series, shape (S,).
        column: the value column.
        seasons: names of the seasons whose profile was taken out.
        numbers: name of the fact to an array of shape (S,); NaN where there is none.
        profiles: name of each of the seasons to its phase means, shape (S, length); NaN where there is none.
        places: name of a finding to the step it begins at, shape (S,); -1 where there is none.
        sizes: name of a finding to its size, shape (S,).
    """

    keys: np.ndarray
    column: str
    seasons: tuple[str, ...]
    numbers: Mapping[str, Floats]
    profiles: Mapping[str, Floats]
    places: Mapping[str, Ints]
    sizes: Mapping[str, Floats]


def facts_of(grid: Grid, column: str, rules: Sequence[Rule], steps: Mapping[Length, int]) -> Facts:
    """The facts of one column of a block of history.

    A broken day (see ``robust_phase_means``) teaches nothing, and a change of level is taken out before days are called
    broken, so that neither bends moments, model and autocorrelations. Closed days teach nothing and miss nothing.

    Args:
        grid: history of a block of series.
        column: the value column.
        rules: say which lags, transforms and windows matter.
        steps: steps of each window that rules name; of one that is not there no sampling law is told.
    """
    axis = grid.axis
    values = np.where(axis.closed, np.nan, grid.values[column])
    T = values.shape[1]
    panel = Panel(values, T, axis, grid.delivered, column)
    told = residual(panel)
    per_day = _per_day(axis)
    at, change = _level_change(told.values, per_day)
    level = np.where((at[:, None] >= 0) & (np.arange(T) >= at[:, None]), change[:, None], 0.0)
    kept = _whole(told.values - level, per_day)
    clean = np.where(kept, values, np.nan)
    rest = np.where(kept, told.values - level, np.nan)
    moments = _moments(clean)
    model = burg(rest)
    with np.errstate(over="ignore"):
        laws = mean_laws(rest, _window_lengths(column, rules, steps))
        laws |= autocorrelation_laws(panel.changed(clean), rules, steps)
    gap, gap_at, gaps = _runs(~grid.delivered & _due(grid))
    stuck, stuck_at, _ = _runs(equal_to_earlier(values) == 1)
    broken, broken_at, _ = _runs(~kept & ~np.isnan(values))
    numbers = {
        "n": kept.sum(axis=1).astype(np.float64),
        "n_missing": (np.isnan(values) & ~axis.closed).sum(axis=1).astype(np.float64),
        **moments,
        "season_share": _share(rest, moments["deviation"]),
        "log_unit": log_unit(clean, told.profile) if told.seasons else np.full(len(values), np.nan),
        "ar_order": model.order.astype(np.float64),
        "ar_variance": model.variance,
        **_autocorrelations(panel.changed(clean), rules),
        **laws,
        "repeats_share": equal_share(values),
        "repeats_longest": stuck + 1.0,
        "gaps": gaps,
        "longest_gap": gap,
        "doubles": grid.tally.doubles.astype(np.float64),
        "differing_doubles": grid.tally.differing.astype(np.float64),
        "disorder": grid.tally.disorder.astype(np.float64),
        "off_grid": grid.tally.off_grid.astype(np.float64),
        "level_change": change,
        "broken_steps": (~kept & ~np.isnan(values)).sum(axis=1).astype(np.float64),
    }
    long_stuck = stuck + 1 >= max(per_day, 12)
    places = {
        "gap": np.where(gap > 0, gap_at, -1),
        "level change": at,
        "broken stretch": np.where(broken > 0, broken_at, -1),
        "stuck": np.where(long_stuck, stuck_at - 1, -1),
    }
    sizes = {"gap": gap, "level change": change, "broken stretch": broken, "stuck": stuck + 1}
    return Facts(grid.keys, column, told.seasons, numbers, told.means, places, sizes)


def _per_day(axis: Axis) -> int:
    """Steps of a day, at least 1."""
    return max(1, round(DAY / float(np.median(np.diff(axis.stamps))))) if len(axis) > 1 else 1


def _due(grid: Grid) -> Bools:
    """Steps at which a row of the series was due: from its first row on, the days it rests left out."""
    first = np.where(grid.delivered.any(axis=1), grid.delivered.argmax(axis=1), grid.delivered.shape[1])
    return np.asarray(grid.axis.expected & ~grid.axis.closed & (np.arange(grid.delivered.shape[1]) >= first[:, None]))


def _runs(marks: Bools) -> tuple[Floats, Ints, Floats]:
    """Length of the longest run of marks, the step it begins at, and the number of runs, each of shape (S,)."""
    if not marks.shape[1]:
        none = np.zeros(len(marks), dtype=np.int64)
        return none.astype(np.float64), none, none.astype(np.float64)
    step = np.arange(marks.shape[1])
    length = step - np.maximum.accumulate(np.where(marks, -1, step), axis=1)
    end = length.argmax(axis=1)
    longest = np.take_along_axis(length, end[:, None], axis=1)[:, 0]
    starts = marks & ~np.pad(marks, ((0, 0), (1, 0)))[:, :-1]
    return longest.astype(np.float64), end - longest + 1, starts.sum(axis=1).astype(np.float64)


def _level_change(rest: Floats, per_day: int) -> tuple[Ints, Floats]:
    """First step after the likeliest change of level of each series (-1 for none) and the change (0 for none)."""
    S, T = rest.shape
    days = T // per_day
    nowhere, nothing = np.full(S, -1, dtype=np.int64), np.zeros(S)
    if days < FEWEST_DAYS:
        return nowhere, nothing
    offset = T - days * per_day
    means = _day_means(rest[:, offset:].reshape(S, days, per_day))
    middle = median(means)[:, None]
    wide = 1.4826 * median(np.abs(means - middle))[:, None]
    cut = np.clip(means, middle - CUT * wide, middle + CUT * wide)
    place = most_likely_break(cut).place
    after = np.arange(days) >= place[:, None]
    early, late = (median(np.where(part, means, np.nan)) for part in (~after, after))
    scatter = 1.4826 * median(np.abs(means - np.where(after, late[:, None], early[:, None])))
    p = self_normalized_tail(self_normalized(cut), days)
    with np.errstate(invalid="ignore"):
        told = (place >= FEWEST_BESIDE) & (days - place >= FEWEST_BESIDE) & (p <= RISK)
        told &= np.abs(late - early) >= LEAST_CHANGE * scatter
        told &= np.abs(late - early) > 0
    return np.where(told, place * per_day + offset, nowhere), np.where(told, late - early, nothing)


def _day_means(cube: Floats) -> Floats:
    """Mean of each day that has at least half of its values, shape (S, D)."""
    seen = ~np.isnan(cube)
    count = seen.sum(axis=2)
    total = np.where(seen, cube, 0.0).sum(axis=2)
    return np.where(2 * count >= cube.shape[2], total / np.maximum(count, 1), np.nan)


def _whole(rest: Floats, per_day: int) -> Bools:
    """Values of days that are not broken, shape (S, T); False for missing ones."""
    T = rest.shape[1]
    step = np.arange(T) + (-T) % per_day
    return robust_phase_means(rest, step % per_day, per_day, step // per_day - step[0] // per_day).kept


def _moments(x: Floats) -> dict[str, Floats]:
    data = centred(x)
    n = np.maximum(data.n, 1)
    seen = ~np.isnan(x)
    square = np.einsum("ij,ij->i", data.values, data.values) / n
    cube = np.einsum("ij,ij,ij->i", data.values, data.values, data.values) / n
    fourth = np.einsum("ij,ij->i", data.values**2, data.values**2) / n
    with np.errstate(divide="ignore", invalid="ignore"):
        shape = np.where(square > 0, cube / square**1.5, np.nan), np.where(square > 0, fourth / square**2, np.nan)
    some = data.n > 0
    return {
        "mean": np.where(some, data.mean, np.nan),
        "deviation": np.where(some, np.sqrt(square) * data.scale, np.nan),
        "skewness": shape[0],
        "kurtosis": shape[1],
        "least": np.where(some, np.min(x, axis=1, where=seen, initial=np.inf), np.nan),
        "most": np.where(some, np.max(x, axis=1, where=seen, initial=-np.inf), np.nan),
    }


def _share(rest: Floats, deviation: Floats) -> Floats:
    """Share of the variance that the profile takes out."""
    left = _moments(rest)["deviation"]
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(deviation > 0, np.clip(1 - (left / deviation) ** 2, 0.0, 1.0), np.nan)


def _autocorrelations(panel: Panel, rules: Sequence[Rule]) -> dict[str, Floats]:
    """Autocorrelations at the lags that rules ask for, after their transforms."""
    asked: dict[tuple[Transform, ...], set[int]] = {}
    for rule in rules:
        lags = lags_of(rule, panel.axis)
        if lags and panel.column in rule.columns:
            asked.setdefault(rule.after, set()).update(lags)
    found: dict[str, Floats] = {}
    for chain, lags in asked.items():
        changed = apply(chain, panel)
        able = sorted(lag for lag in lags if lag < changed.values.shape[1])
        if able and not changed.unable:
            r = autocorrelation(changed.values, np.array(able))
            found |= {f"autocorrelation lag {lag}{after(chain)}": r[:, place] for place, lag in enumerate(able)}
    return found


def _window_lengths(column: str, rules: Sequence[Rule], steps: Mapping[Length, int]) -> list[int]:
    """Steps of the windows in which rules look at the column."""
    return sorted({steps[rule.window] for rule in rules if column in rule.columns and rule.window in steps})
