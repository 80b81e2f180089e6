"""What the two measures of a season share: which season is meant, and what history teaches about it.

Depends on numpy, ``serial``, ``grid``, ``measure``, ``baseline`` and the errors.
"""

from __future__ import annotations

from dataclasses import dataclass
from difflib import get_close_matches

import numpy as np

from sercheck.baseline import FEWEST_CYCLES, chosen_seasons, remembered
from sercheck.errors import UsageError
from sercheck.grid import Panel
from sercheck.measure import Reasons
from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.centre import centred
from sercheck.serial.matched_filter import SMALLEST_ERROR, Cycle, SeasonModel, learn_season
from sercheck.serial.phase import FEWEST_POINTS
from sercheck.serial.season import robust_phase_means

LEARNABLE = 0.5
"""Shrinkage λ under which history's profile is more noise than season (at ½ both are as large)."""


@dataclass(frozen=True)
class Named:
    """The season that a rule means.

    Attributes:
        name: as the rule gives it.
        cycle: its length and phases.
    """

    name: str
    cycle: Cycle


def named_season(panel: Panel, season: str | int, multiple: int = 1) -> Named:
    """Find a season by name or length; several cycles together count as one of their own.

    Raises:
        UsageError: for a name that the axis does not know.
    """
    axis = panel.axis
    if isinstance(season, str):
        if season not in axis.lengths:
            close = get_close_matches(season, axis.lengths, n=1)
            raise UsageError(
                f"season {season}",
                "not among the feed's seasons",
                ", ".join(axis.lengths) or "a number of steps",
                f"Did you mean {close[0]}?" if close else "Name it under seasons:, or give its length in steps.",
            )
        length = axis.lengths[season] * multiple
    else:
        length = season * multiple
    name = str(season) if multiple == 1 else f"{season} x {multiple}"
    known = season if isinstance(season, str) and multiple == 1 else _of_length(panel, length)
    phase = axis.index % length if known is None else panel.phase(known)
    return Named(name, Cycle(length, phase))


def _of_length(panel: Panel, length: int) -> str | None:
    return next((name for name, steps in panel.axis.lengths.items() if steps == length), None)


@dataclass(frozen=True)
class Learned:
    """What history teaches about one season, and the window to compare with it.

    Attributes:
        model: profile, noise and whether the season evolves.
        window: shape (S, n), in a unit of its own, other seasons taken out, closed days missing.
        history: shape (S, N), the same, without the steps of batches that were held and then let in.
    """

    model: SeasonModel
    window: Floats
    history: Floats


def learned(panel: Panel, season: Named) -> Learned:
    """Learn a season from the panel's history, once a panel."""
    return panel.remember(("season", season.name), lambda: _learned(panel, season.cycle))


def _learned(panel: Panel, cycle: Cycle) -> Learned:
    start, axis = panel.start, panel.axis
    # everything that is learned is the same in any unit: one without huge squares or a far-off mean is safe
    data = centred(panel.values)
    values = np.where(data.seen & ~axis.closed, data.values, np.nan)
    cycles = [cycle]
    for name in chosen_seasons(axis, start):
        other = Cycle(axis.lengths[name], panel.phase(name))
        if other.length % cycle.length == 0:
            if other.length > cycle.length:
                cycles.append(other)
        elif cycle.length % other.length:
            # a season that neither contains the one asked for nor lies inside it
            profile = robust_phase_means(values[:, :start], other.phase[:start], other.length)
            values = values - profile.means[:, other.phase]
    history, held = values[:, :start], axis.held[:start] if len(axis.held) else None
    model = learn_season(history, cycles, values.shape[1] - start, held)
    return Learned(model, values[:, start:], remembered(panel, history))


def ask_history(reasons: Reasons, panel: Panel, season: Named) -> Bools:
    """Undecided without enough history to learn a season from; tells whether any series has enough, shape (S,)."""
    reasons.add(panel.start == 0, "no history: pass --history or learn a baseline")
    taught = np.sum(~np.isnan(np.where(panel.axis.closed[: panel.start], np.nan, panel.history)), axis=1)
    enough: Bools = taught >= FEWEST_CYCLES * season.cycle.length
    reasons.add(
        ~enough[:, None],
        f"history holds fewer than {FEWEST_CYCLES} cycles of season {season.name}: "
        f"{FEWEST_CYCLES * season.cycle.length} values are needed",
    )
    return enough


def ask_window(reasons: Reasons, season: Named, points: Ints, shrinkage: Floats, where: Bools | bool = True) -> None:
    """Undecided where the window is too short or gappy to be whitened, or history shows no season; shape (S,) each.

    Series outside ``where`` are not asked.
    """
    reasons.add(
        ((points < FEWEST_POINTS) & where)[:, None],
        f"fewer than {FEWEST_POINTS} values of the window have the values before them that the history's model needs: "
        "a longer or more complete window is needed",
    )
    with np.errstate(invalid="ignore"):
        reasons.add(
            (~(shrinkage > LEARNABLE) & where)[:, None],
            f"history shows no season {season.name} that stands out from its noise: there is nothing to compare with",
        )


def effective(n: Ints, naive: Floats, scale: Floats) -> Floats:
    """Values that n count for: n times the variance of independent rows over the one used; unknown without noise."""
    told = scale > 2 * SMALLEST_ERROR
    ratio = np.divide(naive, scale, out=np.full(scale.shape, np.nan), where=told)
    return np.asarray(n * ratio[:, None] ** 2)
