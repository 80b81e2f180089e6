"""Sketches of failed rules, made while the rows are at hand; depends on the grid, ``serial`` and the engine's parts.

Whether a rule fails is known only after all blocks, when their rows are gone. So of each rule and column the one series
that breaks it most clearly is kept as the blocks go by: memory grows with the rules, never with the series.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from sercheck.baseline import chosen_seasons, residual
from sercheck.grid import Axis, Grid, Panel
from sercheck.judge import Judged, Seen, clearest
from sercheck.measures import get
from sercheck.rulebook.compiled import Rule, Rulebook
from sercheck.serial.arrays import Floats, Ints
from sercheck.serial.autocovariances import autocorrelation, partial_autocorrelation
from sercheck.serial.autoregression import burg, innovations
from sercheck.serial.quantiles import in_order, quantile
from sercheck.serial.recent import mean_scores
from sercheck.serial.sampling_error import bartlett_error
from sercheck.sketches import Numbers, Sketch
from sercheck.transforms import apply, spelled

POINTS = 360
"""Points of a line at most, one for each pixel of a telephone; of longer stretches each point is a mean."""
CYCLES = 28
"""Cycles of history in a band (ours: four weeks of days follow the weather and have every weekday four times)."""
STEPS = 200
"""Steps of history in the band of a feed without a season."""
INNER = (0.05, 0.5, 0.95)
"""Quantiles of a band of values: nine tenths of history lie inside."""
STRETCHES, FEWEST = 60, 20
"""Stretches of history in the band of a correlogram, and how many are needed; with fewer Bartlett's formula serves."""
SAMPLING = (0.025, 0.5, 0.975)
"""Quantiles of the sampling band of a correlogram (common practice: 95 %)."""
LAGS, MOST_LAGS = 24, 200
"""Lags of a correlogram, at least where the window allows it and at most."""
BATCHES = 30
"""Batches in a course."""


@dataclass(frozen=True)
class Clearest:
    """The series that breaks a rule most clearly: how clearly, and its rows."""

    order: tuple[float, float]
    key: str
    panel: Panel
    lags: tuple[int, ...]
    irregular: bool


class Sketcher:
    """Watches the blocks of a batch go by."""

    def __init__(self, book: Rulebook) -> None:
        self._book = book
        self.kept: dict[tuple[int, str | None], Clearest] = {}

    def watch(self, grid: Grid, seen: Sequence[Seen]) -> None:
        """Keep the rows of the series that break a rule more clearly than all before."""
        for part in seen:
            column = part.column or next(iter(self._book.values), None)
            if part.cause is None or column is None:
                continue
            order = clearest(part.measurement)
            row = int(np.lexsort(order[::-1])[0])
            told = (float(order[0][row]), float(order[1][row]))
            known = self.kept.get((part.rule, part.column))
            if np.isfinite(told[0]) and (known is None or told < known.order):
                self.kept[part.rule, part.column] = _kept(grid, part, row, column, told)

    def join(self, kept: Mapping[tuple[int, str | None], Clearest]) -> None:
        """Take in what was kept of later blocks elsewhere."""
        for place, other in kept.items():
            known = self.kept.get(place)
            if known is None or other.order < known.order:
                self.kept[place] = other

    def sketches(self, judged: Sequence[Judged]) -> tuple[Sketch, ...]:
        """One sketch for each column of each rule that fails, and one for each verdict on all series that fails."""
        made: dict[tuple[int, str | None, bool], Sketch] = {}
        scores: dict[tuple[int, str | None], list[Floats]] = {}
        for each in judged:
            if each.seen.measurement.scores is not None:
                scores.setdefault((each.seen.rule, each.seen.column), []).append(each.seen.measurement.scores)
        for each in judged:
            place = (each.seen.rule, each.seen.column)
            rule, whole = self._book.rules[place[0]], each.seen.keys[:1].tolist() == [None]
            if not each.failed or (*place, whole) in made:
                continue
            if whole and place in scores:
                made[*place, True] = _course(rule, place[1], scores[place])
            elif not whole and place in self.kept:
                made[*place, False] = _sketch(rule, place[1], self.kept[place])
        return tuple(made.values())


def _kept(grid: Grid, part: Seen, row: int, column: str, order: tuple[float, float]) -> Clearest:
    key = str(part.keys[row])
    at = row if len(part.keys) == len(grid.keys) else int(np.flatnonzero(grid.keys == key)[0])
    values, delivered = grid.values[column][at : at + 1].copy(), grid.delivered[at : at + 1].copy()
    begin = int(np.searchsorted(grid.axis.stamps, part.window_start))
    start = grid.start if grid.irregular else begin
    return Clearest(
        order, key, Panel(values, start, grid.axis, delivered, column), part.measurement.lags or (), grid.irregular
    )


def _sketch(rule: Rule, column: str | None, kept: Clearest) -> Sketch:
    picture = get(rule.measure).picture(rule.fields, rule.stays)
    if picture in ("stretch", "course"):
        return _stretch(rule, column, kept, course_first=picture == "course")
    changed = apply(rule.after, kept.panel)
    if picture == "innovations":
        rest = residual(changed).values
        changed = changed.changed(innovations(rest, burg(rest[:, : changed.start] if changed.start else rest)))
    told = None if changed.unable else _correlogram(rule, column, kept, changed, picture)
    return told or _stretch(rule, column, kept, course_first=False)


def _stretch(rule: Rule, column: str | None, kept: Clearest, *, course_first: bool) -> Sketch:
    """Values of the window, some of what came before it, and where history's values lay."""
    panel = kept.panel
    steps = panel.values.shape[1]
    lead = min(steps - panel.start, panel.start) if rule.window == "batch" else 0
    shown = np.arange(panel.start - lead, steps)
    (low, middle, high), band = _band(panel, shown)
    x = shown.astype(np.float64) if kept.irregular else panel.axis.stamps[shown] / 1e9
    each = -(-len(shown) // POINTS)
    lines = [_thinned(line, each) for line in (panel.values[0, shown], middle, low, high)]
    of = panel.column if each == 1 else f"{panel.column}, means of {each} rows"
    y, middle, low, high = map(_numbers, lines)
    return Sketch(
        "stretch", rule.name, column, kept.key, tuple(np.round(x[::each], 3).tolist()), y, middle, low, high,
        begins=float(x[lead]), of=of, band=band, in_time=not kept.irregular, course_first=course_first,
    )  # fmt: skip


def _band(panel: Panel, shown: Ints) -> tuple[Floats, str]:
    """Quantiles of history at the place in the cycle of each step, shape (3, shown), and what they are."""
    axis, start = panel.axis, panel.start
    history = np.where(axis.closed[:start], np.nan, panel.values[0, :start])
    season = _season(axis, start)
    if season is None:
        table = history[None, max(start - STEPS, 0) :]
        place, text = np.zeros(len(shown), dtype=np.int64), f"nine tenths of the {min(start, STEPS)} rows before"
    else:
        length = axis.lengths[season]
        cycles = min(CYCLES, start // length)
        place = axis.phases[season][shown]
        phase, recent = axis.phases[season][start - cycles * length : start], history[start - cycles * length :]
        table = _by_phase(recent, phase, length)
        text = f"nine tenths of the last {cycles} cycles, at the same place in the {season}"
    ordered = in_order(table)
    held = (~np.isnan(ordered)).sum(axis=1, keepdims=True)
    told = quantile(ordered, held, np.broadcast_to(INNER, (len(table), 3)))
    told = np.where(held < 4, np.nan, told)
    return told[place].T, text if np.isfinite(told).any() else ""


def _season(axis: Axis, start: int) -> str | None:
    """The shortest season that history has four cycles of."""
    able = chosen_seasons(axis, start)
    inside = [name for name in axis.lengths if able and axis.lengths[able[0]] % axis.lengths[name] == 0]
    return min(inside, key=axis.lengths.__getitem__, default=None)


def _by_phase(values: Floats, phase: Ints, length: int) -> Floats:
    """One row for each place of the cycle, its values in time order, NaN behind them, shape (length, most)."""
    order = np.argsort(phase, kind="stable")
    counts = np.bincount(phase, minlength=length)
    within = np.arange(len(phase)) - np.repeat(np.cumsum(counts) - counts, counts)
    table = np.full((length, max(int(counts.max(initial=0)), 1)), np.nan)
    table[phase[order], within] = values[order]
    return table


def _thinned(line: Floats, each: int) -> Floats:
    """Means of ``each`` steps; missing where all are."""
    if each == 1:
        return line
    padded = np.concatenate([line, np.full(-len(line) % each, np.nan)]).reshape(-1, each)
    seen = ~np.isnan(padded)
    count = seen.sum(axis=1)
    return np.where(count > 0, np.where(seen, padded, 0.0).sum(axis=1) / np.maximum(count, 1), np.nan)


def _correlogram(rule: Rule, column: str | None, kept: Clearest, panel: Panel, picture: str) -> Sketch | None:
    """Coefficients of the window by lag, over those of history's stretches of its length."""
    window, history = panel.window, panel.history[0]
    n = window.shape[1]
    lags = np.arange(1, min(n - 2, max(LAGS, *(round(1.25 * lag) for lag in kept.lags), 1), MOST_LAGS) + 1)
    if len(lags) < 2:
        return None
    of = partial_autocorrelation if picture == "partial" else autocorrelation
    y = of(window, lags)[0]
    count = min(len(history) // n, STRETCHES)
    if count >= FEWEST:
        past = of(history[len(history) - count * n :].reshape(count, n), lags)
        ordered = in_order(past.T)
        held = (~np.isnan(ordered)).sum(axis=1, keepdims=True)
        low, middle, high = quantile(ordered, held, np.broadcast_to(SAMPLING, (len(lags), 3))).T
        band = f"19 in 20 of history's last {count} stretches of the same length"
    else:
        base = history[None] if len(history) > 2 * n else window
        middle = of(base, lags)[0] if len(history) > 2 * n else np.zeros(len(lags))
        error = bartlett_error(base, lags)[0] * np.sqrt(base.shape[1] / n)
        low, high = middle - 1.96 * error, middle + 1.96 * error
        band = "95 % sampling band (Bartlett 1946)"
    name = {"partial": "partial autocorrelation", "innovations": "autocorrelation of the innovations"}
    after = f" after {spelled(rule.after)}" if rule.after else ""
    y_, middle_, low_, high_ = map(_numbers, (y, middle, low, high))
    return Sketch(
        "correlogram", rule.name, column, kept.key, tuple(lags.astype(float).tolist()), y_, middle_, low_, high_,
        of=f"{name.get(picture, 'autocorrelation')} of {kept.panel.column}{after}", band=band,
    )  # fmt: skip


def _course(rule: Rule, column: str | None, scores: Sequence[Floats]) -> Sketch:
    """The mean over all series in the last batches, in standard deviations."""
    wide = max(table.shape[1] for table in scores)
    mean = mean_scores(np.concatenate([table for table in scores if table.shape[1] == wide]))[-BATCHES - 1 :]
    x = tuple(float(place) for place in range(1 - len(mean), 1))
    return Sketch(
        "course", rule.name, column, None, x, _numbers(mean),
        of="mean over all series, in standard deviations of each series' recent past", course_first=True,
    )  # fmt: skip


def _numbers(values: Floats) -> Numbers:
    """Five significant digits, enough to draw; None for missing."""
    return tuple(float(f"{value:.5g}") if np.isfinite(value) else None for value in values.tolist())
