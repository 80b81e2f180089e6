"""Do two value columns still move together as they should, at the same time or some rows apart?

At lag k a row is paired with the row of the column ``with`` that lies k steps earlier (k below 0: later).

``like: history``. Null hypothesis: the columns are correlated as in history. r is the correlation of the normal scores
(van der Waerden 1952) of both columns in their own history; atanh r (Fisher 1921) is compared with that of history's
stretches of the window's length: Student's t on m - 1 degrees of freedom, two-sided.

A bound of 0 (``above: 0`` or ``below: 0``): is there any relation of that sign? Null hypothesis: there is none. Two
columns with memory correlate by chance, so each is whitened by its own autoregression first (Haugh 1976; Burg 1975);
with the innovations e and f, Σ e f/√Σ (e f)² is standard normal (Dalla, Giraitis and Phillips 2022), a little wider
where phase means were taken out. What is observed is the correlation of the innovations. No history is asked.

Any other bound. Null hypothesis: the correlation is the bound. r is that of the rows themselves, and atanh r scatters
about the bound as it does in history's stretches. Undecided without history.

Fixed cycles are taken out of both columns first: two daily cycles always move together.

Fields: ``with`` (a value column), ``lag`` or ``lags`` (each is judged by itself).
Unit: none, between -1 and 1.
Missing values: a pair needs both its rows; the other pairs are left as they are, and nothing is closed up.
Minimum: max(24, 4k) rows and 8 stretches of history of the window's length (20 at a risk of .001 or less); for a bound
of 0 max(48, 4k) rows, and four of the feed's shortest cycles in window or history.

Example::

    name: heat follows flow
    measure: cross_correlation
    of: kwh
    with: flow
    lag: 0
    stays: {like: history}
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Annotated, ClassVar

import numpy as np
from pydantic import BaseModel, ConfigDict, Field, model_validator

from sercheck.baseline import FEWEST_CYCLES, chosen_seasons, remembered
from sercheck.grid import Panel
from sercheck.measure import Measure, Measurement, Picture, Question, Reasons, Reference, Side, Stays
from sercheck.measures._lags import literal_bounds, must_be_one_of_both
from sercheck.measures._past import NO_HISTORY, ask_history, ask_variety, past, scored, window_scores
from sercheck.measures._witnesses import own_cycles_out
from sercheck.reference import Pivot
from sercheck.serial.arrays import Floats, Ints
from sercheck.serial.autoregression import burg
from sercheck.serial.cross_correlation import cross_correlation, robust_cross
from sercheck.serial.far_lag import with_far_lag
from sercheck.serial.lag_law import forward
from sercheck.serial.window_t import window_t, windows

FEWEST_ZERO = 48
"""Rows that a test of no relation needs (found by simulation)."""
FEWEST_PAST = 24
"""Rows that a comparison with history needs (found by simulation)."""
ROWS_A_LAG = 4
"""Rows for each step of the lag: at fewer, most of the window has no partner."""

Lag = Annotated[int, Field(strict=True)]


class CrossCorrelationFields(BaseModel):
    """``with``: the other value column; ``lag`` or ``lags``: steps that it lies before the rows (below 0: after)."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    other: str = Field(alias="with", min_length=1, description="The value column to compare with.")
    lag: Lag | None = Field(default=None, description="Steps that the other column lies before; below 0: after.")
    lags: Annotated[tuple[Lag, ...], Field(min_length=1)] | None = Field(
        default=None, description="Several lags; each is judged by itself."
    )

    @model_validator(mode="after")
    def _one_of_both(self) -> CrossCorrelationFields:
        must_be_one_of_both(self.lag, self.lags)
        return self

    @property
    def chosen(self) -> tuple[int, ...]:
        """The lags, one or several."""
        return (self.lag,) if self.lag is not None else self.lags or ()


class CrossCorrelation(Measure):
    """Correlation with another value column."""

    kinds: ClassVar[frozenset[str]] = frozenset({"below", "above", "between", "like_history"})
    span: ClassVar[tuple[float, float]] = (-1.0, 1.0)
    Fields: ClassVar[type[BaseModel]] = CrossCorrelationFields

    def beside(self, fields: BaseModel) -> tuple[str, ...]:
        assert isinstance(fields, CrossCorrelationFields)
        return (fields.other,)

    def picture(self, fields: BaseModel, stays: Stays) -> Picture:
        return "course"

    def run(self, panel: Panel, question: Question) -> Measurement:
        fields = question.fields
        assert isinstance(fields, CrossCorrelationFields)
        pair = _Pair(panel, panel.beside[fields.other], fields.chosen)
        if not question.stays.literal:
            return _like_history(pair, question)
        if all(bound == 0 for _, bound in literal_bounds(question)):
            return _no_relation(pair, question)
        return _bounded(pair, question)


@dataclass(frozen=True)
class _Pair:
    """Both columns and the lags."""

    panel: Panel
    other: Panel
    lags: tuple[int, ...]

    @property
    def n(self) -> Ints:
        """Complete pairs of the window at each lag, shape (S, L)."""
        seen, also = ~np.isnan(self.panel.window), ~np.isnan(self.other.window)
        counted = [(_ahead(seen, lag) & _behind(also, lag)).sum(axis=1) for lag in self.lags]
        return np.stack(counted, axis=1).astype(np.int64)

    def ask(self, reasons: Reasons, question: Question, least: int) -> None:
        """Undecided where a lag has too few pairs, or one of the columns hardly varies."""
        n = self.n
        for column, lag in enumerate(self.lags):
            need = max(least, ROWS_A_LAG * abs(lag))
            few = (n[:, column : column + 1] + abs(lag) < need) & (np.arange(len(self.lags)) == column)
            reasons.add(few, f"fewer than {need} rows with both values in the window: lag {lag} needs {need}")
        for side in (self.panel, self.other):
            ask_variety(reasons, past(side), question.risk)

    def cycles(self) -> str:
        """What was taken out, for ``assumes``."""
        names = sorted({*past(self.panel).seasons, *past(self.other).seasons})
        return f", fixed cycles ({', '.join(names)}) taken out" if names else ""

    def measured(
        self, reasons: Reasons, r: Floats, n_eff: Floats, laws: dict[Side, Reference], method: str, assumes: str
    ) -> Measurement:
        n = self.n
        return Measurement(
            observed=r,
            n=n,
            n_missing=self.panel.window.shape[1] - n,
            n_eff=n_eff,
            upper=laws.get("upper"),
            lower=laws.get("lower"),
            undecided=reasons.index,
            reasons=tuple(reasons.texts),
            method=method,
            assumes=assumes,
            lags=self.lags,
        )


def _ahead(x: np.ndarray, lag: int) -> np.ndarray:
    """The rows that have a partner ``lag`` steps earlier (later for a lag below 0)."""
    return x[:, lag:] if lag >= 0 else x[:, :lag]


def _behind(x: np.ndarray, lag: int) -> np.ndarray:
    return x[:, : x.shape[1] - lag] if lag >= 0 else x[:, -lag:]


def _law(r: Floats, then: Floats, bound: Floats | None, whole: Floats, naive: Floats) -> Pivot:
    """Student's t of atanh r over history's stretches, about history's own mean or about a bound."""
    told = window_t(forward(then), forward(r))
    bias = told.centre - forward(whole)  # of stretches: a short one correlates a little less than all of history
    centre = told.centre if bound is None else forward(bound) + bias
    shown = np.tanh(told.centre) if bound is None else bound
    error = told.scale * (1 - shown**2)
    return Pivot(forward(r), centre, told.scale, told.df, shown, error, np.tanh, naive_scale=naive)


def _in_stretches(x: Floats, y: Floats, steps: int, lags: tuple[int, ...]) -> Floats:
    """Correlations in history's stretches, (S, m, L); NaN where under half of the pairs are there."""
    cut, also = windows(x, steps), windows(y, steps)
    series, m, _ = cut.shape
    r, count = cross_correlation(cut.reshape(series * m, steps), also.reshape(series * m, steps), lags)
    due = steps - np.abs(np.array(lags))
    return np.where(2 * count >= due, r, np.nan).reshape(series, m, len(lags))


def _against_stretches(
    pair: _Pair, reasons: Reasons, question: Question, history: tuple[Floats, Floats], window: tuple[Floats, Floats],
    bounds: list[tuple[Side, float | None]],
) -> tuple[Floats, Floats, dict[Side, Reference]]:  # fmt: skip
    """Observed correlation, effective sizes and laws."""
    for column in (pair.panel, pair.other):
        ask_history(reasons, past(column), question.risk, "a correlation")
    pair.ask(reasons, question, FEWEST_PAST)
    r, count = cross_correlation(*window, pair.lags)
    one, two = (remembered(pair.panel, x) for x in history)
    whole, known = cross_correlation(one, two, pair.lags)
    then = _in_stretches(one, two, past(pair.panel).steps, pair.lags)
    with np.errstate(divide="ignore"):
        naive = np.sqrt(1 / np.maximum(count, 1) + 1 / np.maximum(known, 1))
    laws: dict[Side, Reference] = {}
    n_eff = np.full(r.shape, np.nan)
    for side, bound in bounds:
        law = _law(r, then, None if bound is None else np.full(r.shape, bound), whole, naive)
        laws[side] = law
        with np.errstate(divide="ignore", invalid="ignore"):
            n_eff = pair.n * (naive / law.scale) ** 2
            reasons.add(~(law.scale > 0) & ~np.isnan(r), "too few of history's stretches have both columns")
    reasons.add(np.isnan(r), "one of the columns does not vary in the window")
    return r, n_eff, laws


def _like_history(pair: _Pair, question: Question) -> Measurement:
    reasons = Reasons((len(pair.panel.values), len(pair.lags)))
    one, two = pair.panel, pair.other
    r, n_eff, laws = _against_stretches(
        pair, reasons, question,
        (scored(one).own, scored(two).own), (window_scores(one), window_scores(two)),
        [("upper", None), ("lower", None)],
    )  # fmt: skip
    method = "correlation of normal scores against history's stretches, Student's t on atanh r"
    return pair.measured(reasons, r, n_eff, laws, method, "stationary history" + pair.cycles())


def _bounded(pair: _Pair, question: Question) -> Measurement:
    reasons = Reasons((len(pair.panel.values), len(pair.lags)))
    bounds = literal_bounds(question)
    reasons.add(pair.panel.start == 0, f"{NO_HISTORY} (only a bound of 0 can do without)")
    beyond = any(abs(bound) >= 1 for _, bound in bounds)
    reasons.add(beyond, "a correlation lies between -1 and 1: a bound of that size says nothing")
    one, two = past(pair.panel), past(pair.other)
    inside = [(side, float(np.clip(bound, -1, 1))) for side, bound in bounds]
    r, n_eff, laws = _against_stretches(
        pair, reasons, question, (one.history, two.history), (one.window, two.window), [*inside]
    )
    method = "correlation, scatter of atanh r as in history's stretches, Student's t"
    return pair.measured(reasons, r, n_eff, laws, method, "stationary history" + pair.cycles())


def _no_relation(pair: _Pair, question: Question) -> Measurement:
    reasons = Reasons((len(pair.panel.values), len(pair.lags)))
    pair.ask(reasons, question, FEWEST_ZERO)
    lengths = pair.panel.axis.lengths
    reasons.add(
        bool(lengths) and not (past(pair.panel).seasons or chosen_seasons(pair.panel.axis, pair.panel.window.shape[1])),
        f"the seasons cannot be taken out, and two cycles always move together: {FEWEST_CYCLES} cycles "
        f"({FEWEST_CYCLES * min(lengths.values(), default=0)} steps) of window or history are needed",
    )
    cross = robust_cross(_whitened(pair.panel), _whitened(pair.other), pair.lags)
    gaps = "gaps leave too few innovations, or one of the columns does not vary in the window"
    reasons.add(np.isnan(cross.t) | (2 * cross.pairs < pair.n), gaps)
    unit, zero, widen = cross.unit, np.zeros(cross.t.shape), _by_profiles(pair.panel)
    with np.errstate(divide="ignore", invalid="ignore"):
        naive = 1 / np.sqrt(cross.pairs) / unit
        n_eff = pair.n / cross.pairs / (widen * unit) ** 2
    scale, normal = np.full_like(zero, widen), np.full_like(zero, np.inf)
    law = Pivot(cross.t, zero, scale, normal, zero, widen * unit, lambda t: t * unit, naive_scale=naive)
    laws: dict[Side, Reference] = {side: law for side, _ in literal_bounds(question)}
    method = "correlation of innovations (Haugh 1976), robust error (Dalla, Giraitis and Phillips 2022)"
    return pair.measured(
        reasons, cross.t * unit, n_eff, laws, method, "an autoregression for each column" + pair.cycles()
    )


def _by_profiles(panel: Panel) -> float:
    """Standard deviation of t when phase means were taken out of both columns, 1 without.

    Means of the window's own C cycles leave n (1 - 1/C) free products of n: √(C/(C - 1)). Errors of means of history's
    C cycles repeat over the k cycles of the window: √((1 + 2/C + k/C²)/(1 + 1/C)²).
    """
    n, lengths = panel.window.shape[1], panel.axis.lengths
    by_history = past(panel).seasons
    taken = by_history or chosen_seasons(panel.axis, n)
    if not taken:
        return 1.0
    length = max(lengths[name] for name in taken)
    if not by_history:
        return float(np.sqrt(n / (n - length)))
    C, k = panel.start / length, max(n / length, 1.0)
    return float(np.sqrt((1 + 2 / C + k / C**2) / (1 + 1 / C) ** 2))


def _whitened(panel: Panel) -> Floats:
    """Innovations of the window by its own autoregression, cycles taken out by history or, without one, by itself."""

    def make() -> Floats:
        told = past(panel)
        values = told.window if told.seasons else own_cycles_out(panel)[0]
        return with_far_lag(values, burg(values))[1]  # a cycle that evolves echoes beyond the order

    return panel.remember("window innovations", make)
