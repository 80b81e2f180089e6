"""The catalogue of faults that a rehearsal puts into yesterday's batches; depends on ``serial``, ``causes``, errors."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from importlib import metadata

import numpy as np

from sercheck import causes
from sercheck.baseline import FEWEST_CYCLES
from sercheck.errors import UsageError
from sercheck.rehearsal import rows, values
from sercheck.rehearsal.rows import Given
from sercheck.serial.arrays import Floats

GROUP = "sercheck.faults"
"""Entry-point group under which another package announces its faults."""

Damage = Callable[[Given], Floats]

BREAKS = (ImportError, SyntaxError, NameError, AttributeError, TypeError, ValueError, LookupError, RuntimeError)
"""What a broken file raises when it is imported."""


@dataclass(frozen=True)
class Fault:
    """One thing that goes wrong with feeds.

    Attributes:
        name: what it is called in tables and options.
        says: one sentence for a reader.
        cause: the cause that should be named for it, one of ``sercheck.causes``.
        sizes: sizes worth trying; what a size means is in ``says``.
        damage: from what is given to the broken window (S, n). Pure: nothing that comes in is changed, the same seed
            gives the same damage.
        fewest_series: series that it needs.
        history: history that it needs: "", "cycle" or "batch".
        longest: it is about the longest season that history teaches (a week of hours), not the shortest.
        curve: sizes at which a rehearsal tries it, for a curve; ``sizes`` where there are none.
        partial: it has no strength of its own: a size below 1 is the share of the batch's rows, in one stretch, that a
            rehearsal puts it into.
        lasts: it goes on in the batches after; else it hits one batch.
        later: what it does to the batches after the first; None: the same.
        undelivered: rows whose value it takes are not delivered at all.
    """

    name: str
    says: str
    cause: str
    sizes: tuple[float, ...]
    damage: Damage
    fewest_series: int = 1
    history: str = ""
    longest: bool = False
    curve: tuple[float, ...] = ()
    partial: bool = False
    lasts: bool = True
    later: Damage | None = None
    undelivered: bool = False

    def steps(self, lengths: Mapping[str, int], history: int) -> int:
        """Steps in one cycle of the season that it is about, of those that ``history`` steps teach; 1 without any.

        Args:
            lengths: steps in one cycle of each season of the feed.
            history: steps of history.
        """
        able = [length for length in lengths.values() if length * FEWEST_CYCLES <= history]
        if not able:
            return 1
        return max(able) if self.longest else min(able)

    def apply(self, window: Floats, history: Floats, size: float, rng: np.random.Generator, steps: int) -> Floats:
        """The broken window, shape (S, n).

        Args:
            window: the batch, shape (S, n), NaN is missing.
            history: the rows right before it, shape (S, N).
            size: one of ``sizes``, or another.
            rng: a seeded generator.
            steps: steps in one cycle of the season that the fault may be about.
        """
        return self.damage(Given(window, history, size, rng, steps))

    def fits(self, series: int, window: int, history: int, steps: int) -> bool:
        """Whether it can be put into a window of that many series and steps after so much history."""
        needed = {"": 0, "cycle": steps, "batch": window}[self.history]
        return series >= self.fewest_series and history >= needed


def catalogue() -> tuple[Fault, ...]:
    """All faults: the built-in ones and those that installed packages announce, in this order.

    Raises:
        UsageError: when an announced one cannot be loaded, is no ``Fault``, or has the name of another.
    """
    found = {fault.name: fault for fault in BUILT_IN}
    for point in metadata.entry_points(group=GROUP):
        fault = _load(point)
        if fault.name in found:
            raise UsageError(
                f"fault {fault.name}", f"{point.value} has the name of another fault", todo="Rename one of them."
            )
        found[fault.name] = fault
    return tuple(found.values())


def _load(point: metadata.EntryPoint) -> Fault:
    place = f"fault {point.name} ({point.value})"
    todo = "Mend it, or uninstall the package that announces it."
    try:
        loaded: object = point.load()
    except BREAKS as reason:
        raise UsageError(place, f"cannot be loaded: {type(reason).__name__}: {reason}", todo=todo) from reason
    if not isinstance(loaded, Fault):
        raise UsageError(place, f"is {type(loaded).__name__}", "a sercheck.rehearsal.faults.Fault", todo)
    return loaded


ONE = (1.0,)
"""The size of faults that have none."""
PARTS = (0.25, 0.5, 1.0)
"""Shares of a batch that a fault without strength is put into."""

BUILT_IN = (
    Fault("shuffled", "All rows in random order.", causes.WRONG_ORDER, ONE, rows.shuffled, curve=PARTS,
          partial=True),
    Fault("sorted", "Rows ordered by value.", causes.WRONG_ORDER, ONE, rows.ordered, curve=PARTS, partial=True),
    Fault("reversed", "The newest row first.", causes.WRONG_ORDER, ONE, rows.backwards, curve=PARTS,
          partial=True),
    Fault("noise", "Independent noise of the same mean and spread.", causes.NOISE, ONE, values.noise, curve=PARTS,
          partial=True),
    Fault("rows twice", "Each row of the first half twice in a row.", causes.REPEATED, ONE, rows.twice,
          curve=PARTS, partial=True),
    Fault("filled forward", "This share of rows given the value before.", causes.FILLED, (0.1, 0.3),
          rows.filled_forward, curve=(0.05, 0.1, 0.3, 0.5)),
    Fault("interpolated", "Every second row half-way between its neighbours.", causes.INTERPOLATED, ONE,
          rows.interpolated, curve=PARTS, partial=True),
    Fault("smoothed", "Each value the mean of so many around it.", causes.SMOOTHED, (3.0,), values.smoothed,
          curve=(3.0, 5.0, 7.0)),
    Fault("exponentially smoothed", "Exponential smoothing with this weight.", causes.SMOOTHED, (0.4,),
          values.exponentially_smoothed, curve=(0.7, 0.4, 0.2)),
    Fault("stuck", "So many rows at one value.", causes.STUCK, (6.0, 24.0), rows.stuck, curve=(3.0, 6.0, 12.0, 24.0)),
    Fault("clock slipped", "Stamps so many steps late.", causes.SLIPPED, ONE, rows.late, history="cycle",
          curve=(1.0, 2.0, 3.0)),
    Fault("clock slipped in mid-window", "Stamps so many steps late from the middle on.", causes.SLIPPED, ONE,
          rows.late_from_middle, history="cycle", later=rows.late),
    Fault("cycle lost", "One whole cycle not delivered.", causes.MISSING, ONE, rows.lost_cycle, curve=PARTS,
          partial=True, lasts=False, undelivered=True),
    Fault("interleaved", "Every second row from a source so many standard deviations higher.", causes.INTERLEAVED,
          (2.0,), values.interleaved, history="cycle", curve=(0.5, 1.0, 2.0)),
    Fault("differenced", "Changes in place of values.", causes.DIFFERENCED, ONE, values.differenced, history="cycle"),
    Fault("differenced twice", "Changes of changes in place of values.", causes.TWICE, (2.0,), values.differenced,
          history="cycle"),
    Fault("running total", "The total since the window began.", causes.TOTAL, ONE, values.running_total, curve=PARTS,
          partial=True),
    Fault("spread evenly", "Means of so many cycles given to each of their rows.", causes.SPREAD, (1.0, 0.25),
          values.spread_evenly),
    Fault("sign turned", "Every value with the other sign.", causes.SIGN, ONE, values.sign_turned, curve=PARTS,
          partial=True),
    Fault("mirrored", "Every value on the other side of the mean.", causes.MIRRORED, ONE, values.mirrored, curve=PARTS,
          partial=True),
    Fault("unit changed", "Every value times this.", causes.UNIT, (1000.0,), values.unit_changed,
          curve=(1.1, 1.2, 1.5, 10.0, 1000.0)),
    Fault("unit changed in mid-window", "Values times this from the middle on.", causes.UNIT, (1000.0, 1.2),
          values.unit_changed_from_middle, later=values.unit_changed),
    Fault("level shifted", "Values so many standard deviations higher.", causes.SHIFTED, ONE, values.level_shifted,
          history="cycle", curve=(0.5, 1.0, 2.0, 3.0)),
    Fault("cycle again", "The newest cycle is the one before again.", causes.AGAIN, ONE, rows.cycle_again,
          history="cycle", curve=PARTS, partial=True, lasts=False),
    Fault("batch again", "The batch of so many batches ago again.", causes.AGAIN, (4.0,), rows.batch_again,
          history="batch", lasts=False),
    Fault("rounded", "Values rounded to this many standard deviations.", causes.ROUNDED, (0.5,), values.rounded,
          curve=(0.2, 0.5, 1.0)),
    Fault("season flattened", "The season at this part of its strength.", causes.FLATTENED, (0.5,),
          values.season_weakened, history="cycle", longest=True, curve=(0.75, 0.5, 0.25)),
    Fault("season gone", "The season taken out.", causes.GONE, (0.0,), values.season_weakened, history="cycle",
          longest=True),
    Fault("keys swapped", "So many pairs of series under each other's keys.", causes.SWAPPED, ONE, rows.keys_swapped,
          fewest_series=2),
)  # fmt: skip
"""The faults that are always there, in the order in which they are told."""
