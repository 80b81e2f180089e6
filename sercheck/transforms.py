"""The transforms of a rule's ``after``, applied to history and window alike; depends on ``grid``, ``baseline``,
``serial`` and the compiled rules.

Missing values stay missing and are never closed up. A difference reaches back into history where there is some;
without it the window begins later. What is fitted to a stretch (a line, ranks) is fitted to the window and, for
comparison, to stretches of history of the window's length.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace

import numpy as np

from sercheck.baseline import FEWEST_CYCLES, leave_one_cycle_out
from sercheck.grid import Axis, Panel
from sercheck.rulebook.compiled import Transform
from sercheck.serial.arrays import Floats, Ints
from sercheck.serial.season import phase_means

WHOLE_GROUP = 0.9
"""Share of the usual number of steps from which a group at the edge of the axis is whole (a day of 23 hours is)."""


def apply(chain: Sequence[Transform], panel: Panel) -> Panel:
    """Apply the transforms in order; the memo of the result is its own, and it remembers what it was made from."""
    before = panel
    for transform in chain:
        panel = _KINDS[transform.kind](transform, panel)
    return replace(panel, before=before, after=spelled(chain)) if chain else panel


def spelled(chain: Sequence[Transform]) -> str:
    """The transforms as a record tells them."""
    return ", ".join(str(transform) for transform in chain)


def reach(chain: Sequence[Transform], lengths: dict[str, int]) -> int:
    """Steps before the window that the chain's differences look at."""
    return sum(_distance(transform, lengths) for transform in chain if transform.kind == "difference")


def _distance(transform: Transform, lengths: dict[str, int]) -> int:
    if transform.by is None:
        return 1
    return lengths[transform.by] if isinstance(transform.by, str) else transform.by


def _difference(transform: Transform, panel: Panel) -> Panel:
    lag = _distance(transform, dict(panel.axis.lengths))
    steps = panel.values.shape[1]
    if lag >= steps:
        return panel.changed(
            np.full_like(panel.values, np.nan), unable=f"a difference over {lag} steps needs more than {steps} steps"
        )
    return panel.changed(
        panel.values[:, lag:] - panel.values[:, :-lag],
        start=max(panel.start - lag, 0),
        axis=_reaching(panel.axis, lag),
        delivered=panel.delivered[:, lag:],
    )


def _reaching(axis: Axis, lag: int) -> Axis:
    """The axis from step ``lag`` on; a step whose difference reaches into a held batch is one of it."""
    cut = axis.cut(lag, len(axis))
    return replace(cut, held=cut.held | axis.held[: len(cut)]) if len(axis.held) else cut


def _log(_: Transform, panel: Panel) -> Panel:
    with np.errstate(divide="ignore", invalid="ignore"):
        positive = panel.values > 0
        logs = np.where(positive, np.log(panel.values), np.nan)
    lost = int(np.sum(~positive[:, panel.start :] & ~np.isnan(panel.window)))
    note = f"{lost} values of {panel.column} are not positive, have no logarithm and count as missing"
    return panel.changed(logs, notes=(*panel.notes, note) if lost else panel.notes)


def _by_stretches(change: Callable[[Floats], Floats], panel: Panel) -> Panel:
    """Change the window, and history in stretches of the window's length counted back from it.

    Without a window all of history is one stretch.
    """
    values = np.empty_like(panel.values)
    length = panel.values.shape[1] - panel.start or panel.values.shape[1]
    edge = panel.values.shape[1]
    while edge > 0:
        first = max(edge - length, 0)
        values[:, first:edge] = change(panel.values[:, first:edge])
        edge = first
    return panel.changed(values)


def detrend(x: Floats) -> Floats:
    """Residuals of the least-squares line through the observed values of each series, shape (S, T)."""
    seen = ~np.isnan(x)
    count = np.maximum(seen.sum(axis=1, keepdims=True), 1)
    time = np.where(seen, np.arange(x.shape[1], dtype=np.float64), np.nan)
    time = time - np.nansum(time, axis=1, keepdims=True) / count
    level = np.nansum(x, axis=1, keepdims=True) / count
    spread = np.nansum(time**2, axis=1, keepdims=True)
    slope = np.nansum(time * (x - level), axis=1, keepdims=True) / np.where(spread > 0, spread, 1.0)
    return np.asarray(x - level - slope * time)


def ranks(x: Floats) -> Floats:
    """Mid-ranks of the observed values of each series, 1 .. m; missing stays missing."""
    order = np.argsort(x, axis=1, kind="stable")
    ordered = np.take_along_axis(x, order, axis=1)
    steps = x.shape[1]
    places = np.broadcast_to(np.arange(steps), x.shape)
    fresh = np.ones(x.shape, dtype=bool)
    fresh[:, 1:] = ordered[:, 1:] != ordered[:, :-1]
    first = np.maximum.accumulate(np.where(fresh, places, 0), axis=1)
    closing = np.ones(x.shape, dtype=bool)
    closing[:, :-1] = fresh[:, 1:]
    last = np.minimum.accumulate(np.where(closing, places, steps)[:, ::-1], axis=1)[:, ::-1]
    result = np.empty_like(x)
    np.put_along_axis(result, order, (first + last) / 2 + 1.0, axis=1)
    return np.where(np.isnan(x), np.nan, result)


def _without_season(transform: Transform, panel: Panel) -> Panel:
    name = str(transform.by)
    length = panel.axis.lengths[name]
    steps = panel.values.shape[1]
    if panel.start >= FEWEST_CYCLES * length:
        values, _ = leave_one_cycle_out(panel.values, panel, name)
        return panel.changed(values)
    if steps - panel.start >= FEWEST_CYCLES * length:
        means, _ = phase_means(panel.window, panel.phase(name)[panel.start :], length)
        return panel.changed(panel.values - means[:, panel.phase(name)], own_cycle=max(length, panel.own_cycle))
    return panel.changed(
        np.full_like(panel.values, np.nan),
        unable=f"taking out the season '{name}' needs {FEWEST_CYCLES} cycles ({FEWEST_CYCLES * length} steps) of "
        f"history, or as many in the window; there are {panel.start} and {steps - panel.start}",
    )


def _every(transform: Transform, panel: Panel) -> Panel:
    group = panel.axis.groups[str(transform.by)]
    firsts = np.flatnonzero(np.diff(group, prepend=group[0] - 1))
    sizes = np.diff(firsts, append=len(group))
    usual = int(sizes.max())
    seen = ~np.isnan(panel.values)
    observed = np.add.reduceat(seen, firsts, axis=1, dtype=np.int64)
    filled = np.where(seen, panel.values, -np.inf if transform.take == "max" else 0.0)
    gather = np.maximum if transform.take == "max" else np.add
    values = gather.reduceat(filled, firsts, axis=1)
    if transform.take == "mean":
        values = values / sizes
    values = observed.astype(np.float64) if transform.take == "count" else np.where(observed == sizes, values, np.nan)
    values[:, sizes < WHOLE_GROUP * usual] = np.nan
    start = int(np.searchsorted(firsts, panel.start, side="right") - 1) if panel.start < len(group) else len(firsts)
    return panel.changed(
        values,
        start=start,
        axis=_grouped(panel.axis, firsts, group, usual),
        delivered=np.logical_or.reduceat(panel.delivered, firsts, axis=1),
        own_cycle=max(panel.own_cycle // usual, 1),
    )


def _grouped(axis: Axis, firsts: Ints, group: Ints, size: int) -> Axis:
    """The axis of groups of ``size`` steps; seasons that are whole numbers of groups stay."""
    kept = {name: n // size for name, n in axis.lengths.items() if n % size == 0 and n // size > 1}
    return Axis(
        axis.stamps[firsts],
        group[firsts],
        kept,
        {name: axis.phases[name][firsts] // size for name in kept},
        np.logical_and.reduceat(axis.closed, firsts),
        np.logical_or.reduceat(axis.expected, firsts),
        held=np.logical_or.reduceat(axis.held, firsts) if len(axis.held) else axis.held,
    )


_KINDS: dict[str, Callable[[Transform, Panel], Panel]] = {
    "difference": _difference,
    "log": _log,
    "detrended": lambda _, panel: _by_stretches(detrend, panel),
    "ranks": lambda _, panel: _by_stretches(ranks, panel),
    "without_season": _without_season,
    "every": _every,
}
