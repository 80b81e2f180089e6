"""What a feed's history teaches, for all series of a block at once; depends only on ``serial`` and ``grid``."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from sercheck.grid import Axis, Panel
from sercheck.serial.arrays import Floats
from sercheck.serial.season import cycle_numbers, robust_phase_means

FEWEST_CYCLES = 4
"""Cycles below which no profile is taken out (methods: phase means need at least four cycles)."""


@dataclass(frozen=True)
class Residual:
    """A panel's values with the seasonal profile taken out.

    Attributes:
        values: shape (S, T); history's part is left-one-cycle-out, so that it scatters like new rows do.
        profile: what was taken out, shape (S, T); 0 where nothing was.
        seasons: names of the seasons taken out.
        means: phase means of each of them, shape (S, length); NaN at a place that the axis does not have.
    """

    values: Floats
    profile: Floats
    seasons: tuple[str, ...]
    means: Mapping[str, Floats] = field(default_factory=dict)


def chosen_seasons(axis: Axis, steps: int) -> tuple[str, ...]:
    """The seasons whose profile ``steps`` steps of history can teach, shortest first.

    A season needs ``FEWEST_CYCLES`` cycles; one whose length divides that of a longer chosen one is inside it and left
    out.
    """
    able = sorted((s for s in axis.lengths if axis.lengths[s] * FEWEST_CYCLES <= steps), key=axis.lengths.__getitem__)
    return tuple(
        name
        for place, name in enumerate(able)
        if not any(axis.lengths[longer] % axis.lengths[name] == 0 for longer in able[place + 1 :])
    )


def residual(panel: Panel) -> Residual:
    """Take out the phase means that history teaches (closed days do not teach), computed once a panel.

    History's own residuals are those of a profile without the cycle itself (factor C/(C-1) at a phase seen C times):
    in-sample ones scatter too little and would make every new batch look wide.
    """
    return panel.remember("residual", lambda: _residual(panel))


def _residual(panel: Panel) -> Residual:
    names = chosen_seasons(panel.axis, panel.start)
    values = panel.values
    profile = np.zeros_like(values)
    means = {}
    for name in names:
        values, own = leave_one_cycle_out(values, panel, name)
        profile += own
        phases, first = np.unique(panel.phase(name), return_index=True)
        means[name] = np.full((len(values), panel.axis.lengths[name]), np.nan)
        means[name][:, phases] = own[:, first]
    return Residual(values, profile, names, means)


def remembered(panel: Panel, history: Floats) -> Floats:
    """History without the steps of batches that were held and then let in by a person, shape (S, N).

    Such a batch teaches level and profile, for the person said that it was in order; what it says about memory, cycle
    and phase is what was held, and the law of those leaves it out.
    """
    held = panel.axis.held[: history.shape[1]]
    return np.where(held, np.nan, history) if held.any() else history


def leave_one_cycle_out(values: Floats, panel: Panel, season: str) -> tuple[Floats, Floats]:
    """Values less the phase means of one season that ``panel``'s history teaches, and those means at every step.

    Broken cycles (a day stuck at zero) do not teach, so that they do not bend the profile; the stretch that is left out
    is a cycle of the shortest season inside this one. A phase that history saw once or never leaves missing values:
    there is nothing to compare with.
    """
    axis, start = panel.axis, panel.start
    phase, length = panel.phase(season), axis.lengths[season]
    history = np.where(~axis.closed[:start], values[:, :start], np.nan)
    inside = min((name for name in axis.lengths if length % axis.lengths[name] == 0), key=axis.lengths.__getitem__)
    learned = robust_phase_means(history, phase[:start], length, cycle_numbers(panel.phase(inside)[:start]))
    profile = learned.means[:, phase]
    without = values - profile
    seen = learned.counts[:, phase[:start]]
    with np.errstate(divide="ignore", invalid="ignore"):
        widen = np.where(seen > 1, seen / (seen - 1), np.nan)
    # what did not teach is already apart from the profile
    without[:, :start] *= np.where(learned.kept | (seen == 0), widen, 1.0)
    return without, profile
