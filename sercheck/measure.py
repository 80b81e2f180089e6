"""The contract between a measure and the judge; depends only on ``serial`` and ``grid``.

A measure is one file under ``sercheck/measures/`` (or a class announced under the entry-point group
``sercheck.measures``). It says what it saw (``observed``) and how such an observation scatters when the bound holds
(a ``Reference`` for each side); it never decides.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass, field
from typing import ClassVar, Literal, Protocol

import numpy as np
from pydantic import BaseModel

from sercheck.grid import Grid, Panel
from sercheck.serial.arrays import Bools, Floats, Ints

Side = Literal["upper", "lower"]
Picture = Literal["stretch", "correlogram", "partial", "innovations", "course"]
"""The window's values over history's band; the correlogram of the window, of its partial autocorrelations or of its
innovations over history's; the measure over the last batches."""
POWER = 0.8
"""Probability with which the ``detectable`` change is found (common practice)."""


@dataclass(frozen=True)
class Stays:
    """What a rule's ``stays`` says: ``kind`` is below, above, between, like_history or present."""

    kind: Literal["below", "above", "between", "like_history", "present"]
    low: float | None = None
    high: float | None = None

    @property
    def literal(self) -> bool:
        """The author wrote numbers."""
        return self.kind in ("below", "above", "between")


class Reference(Protocol):
    """How the observed value scatters, for one side, when the bound holds exactly. All arrays have shape (S, L)."""

    @property
    def bound(self) -> Floats:
        """The bound in the unit of the observed value: the author's number, or what history gives."""

    @property
    def standard_error(self) -> Floats:
        """Standard error of the observed value in its own unit; NaN where it has none."""

    def p_value(self, side: Side) -> Floats:
        """Probability of an observation this far or farther beyond the bound on ``side``; NaN when undecided."""

    def limit(self, side: Side, risk: Floats) -> Floats:
        """The observation at which ``p_value`` equals ``risk``."""

    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        """The same limit had the rows been independent; NaN where that has no meaning."""

    def detectable(self, side: Side, risk: Floats) -> Floats:
        """The smallest change from the bound that is found with probability ``POWER``, as a positive number."""


@dataclass(frozen=True)
class Measurement:
    """What a measure saw on a block of S series, at L lags (L = 1 for a measure without lags).

    Attributes:
        observed: shape (S, L), NaN where it cannot be computed.
        n: observed values in the window, shape (S, L).
        n_missing: missing values in the window, shape (S, L).
        n_eff: effective number of observations: n times the ratio of the variance that independent rows would give
            to the variance used, shape (S, L); NaN where it has no meaning.
        upper: reference for 'too large', or None when the rule does not look there.
        lower: reference for 'too small', or None.
        undecided: index into ``reasons`` where nothing can be said, -1 elsewhere, shape (S, L).
        reasons: the sentences that ``undecided`` points to.
        method: name and source of the method.
        assumes: what the method takes for granted.
        exact: no sampling error: the limit is the bound, there is no p-value.
        lags: the lag of each column, or None.
        season: name of the season the measure looked at, or None.
        integer: the observed value is a count (shown without decimals).
        certify: the p-value is that of 'there is nothing': small means the rule is kept (``stays: {present: true}``).
        scores: the statistic in standard deviations of the series' recent past, history's stretches first and the
            window last, shape (S, B + 1), for a verdict on all series together; None where the method has none.
        unsure: index into ``reasons`` where a pass would say nothing although a failure stands, -1 elsewhere (all
            cells keep their p-value, so that the risk is shared as if nothing were known of them), or None. With
            ``certify`` it is the failure that would say nothing.
    """

    observed: Floats
    n: Ints
    n_missing: Ints
    n_eff: Floats
    upper: Reference | None
    lower: Reference | None
    undecided: Ints
    reasons: tuple[str, ...]
    method: str
    assumes: str
    exact: bool = False
    lags: tuple[int, ...] | None = None
    season: str | None = None
    integer: bool = False
    certify: bool = False
    scores: Floats | None = None
    unsure: Ints | None = None


@dataclass(frozen=True)
class Clock:
    """What the measures of the clock read beside the panel.

    Attributes:
        grid: the grid with its tally.
        as_of: int64 nanoseconds since 1970 UTC at which the batch is judged.
        step: nanoseconds of one step of the cadence (the usual one for calendar cadences).
        timezone: the feed's zone.
    """

    grid: Grid
    as_of: int
    step: int
    timezone: str = "UTC"


@dataclass(frozen=True)
class Question:
    """What the rule asks of a measure.

    Attributes:
        fields: the measure's own fields, validated.
        stays: the bound.
        risk: false-alarm risk asked of the rule, over all its series and lags (a measure may abstain because of it).
        lengths: steps in one cycle of each named season.
        clock: for the measures of the clock.
        together: one verdict is asked for all series: values are pooled as delivered, on no scale of their own.
        rests: the rule's longer look held a batch within the last seven and rests (see ``looks.Sooner``).
    """

    fields: BaseModel
    stays: Stays
    risk: float
    lengths: dict[str, int] = field(default_factory=dict)
    clock: Clock | None = None
    together: bool = False
    rests: bool = False


class Measure(ABC):
    """One measure: a file of ``sercheck/measures`` holds one subclass, and the file's name is the word in YAML.

    The module's (or, in another package, the class's) docstring is what ``sercheck measures`` prints: question, null
    hypothesis, formula, source, unit, missing-value policy, minimum size, a YAML example.

    Attributes:
        kinds: which kinds of ``stays`` it accepts.
        of_values: reads a value column; False: reads the clock, judged once a series whatever the columns.
        of_missing: has something to say about a series of which the batch holds no value.
        exact: no sampling error, so that no false alarm comes by chance: its rules take no share of the alarm budget.
        weight: what a rule of this measure weighs in the alarm budget unless it says so itself.
        compares_series: what it says of a series depends on the other series of the panel.
        bounds_in: numbers, or lengths in time that the rule file compiles to seconds.
        span: smallest and largest value that the observation can take; a literal bound must lie between them.
        Fields: pydantic model of its own fields (forbids unknown ones).
    """

    kinds: ClassVar[frozenset[str]] = frozenset({"below", "above", "between"})
    of_values: ClassVar[bool] = True
    of_missing: ClassVar[bool] = False
    exact: ClassVar[bool] = False
    weight: ClassVar[float] = 1.0
    compares_series: ClassVar[bool] = False
    bounds_in: ClassVar[Literal["numbers", "time"]] = "numbers"
    span: ClassVar[tuple[float, float]] = (float("-inf"), float("inf"))
    Fields: ClassVar[type[BaseModel]]

    def beside(self, fields: BaseModel) -> tuple[str, ...]:
        """Further value columns that the fields name: ``Panel.beside`` holds them when the measure runs."""
        return ()

    def picture(self, fields: BaseModel, stays: Stays) -> Picture:
        """What a person should look at where the rule fails."""
        return "stretch" if self.of_values else "course"

    @abstractmethod
    def run(self, panel: Panel, question: Question) -> Measurement:
        """Look at all series of the panel at once. Pure: changes nothing that it is given."""


class Reasons:
    """Collects why something is undecided; the first reason given for a cell stays."""

    def __init__(self, shape: tuple[int, ...]) -> None:
        self.index: Ints = np.full(shape, -1, dtype=np.int64)
        self.texts: list[str] = []

    def add(self, where: Bools | bool, text: str) -> None:
        """Mark the cells ``where`` (broadcast to the shape) as undecided because of ``text``."""
        cells = np.broadcast_to(np.asarray(where, dtype=bool), self.index.shape) & (self.index < 0)
        if cells.any():
            self.texts.append(text)
            self.index = np.where(cells, len(self.texts) - 1, self.index)

    @property
    def undecided(self) -> Bools:
        """Cells that have a reason."""
        return self.index >= 0


def told_reasons(reasons: Reasons, unsure: Reasons | None) -> tuple[tuple[str, ...], Ints | None]:
    """Both lists of sentences as one, and the second's places in it (``Measurement.unsure``)."""
    if unsure is None:
        return tuple(reasons.texts), None
    return (*reasons.texts, *unsure.texts), np.where(unsure.undecided, unsure.index + len(reasons.texts), -1)
