"""Is the series as spread out as it should be?

Null hypothesis: the window's standard deviation is the bound, and log variances scatter as those of history's stretches
of the same length do.

Against history (``like: history``): L = ln of the variance of the normal scores (van der Waerden 1952) of the window's
values in the series' own history, compared with the same of m non-overlapping stretches of history by window-t:
T = (L - mean)/(sd √(1 + 1/m)) on m - 1 degrees of freedom (log variances are nearly normal: Bartlett and Kendall 1946).
A literal bound with history: the log variances of the values themselves, about the bound, with history's scatter.
A literal bound without history is answered only for a feed declared light-tailed (``tails: light``): the variance has
χ² scatter on n/(1 + 2 Σ (1 - k/n) ρ_k²) degrees of freedom (Bayley and Hammersley 1946) with the autocorrelations ρ of
a fitted autoregression (order at most 16, times one echo of a cycle that evolves), taken to the cube root (Wilson and
Hilferty 1931). A window that varies too little shows too little memory as well: for too small a spread the first
reflection coefficient is freed of its bias, -(1 + 3k)/n (Shaman and Stine 1988), and taken 1.5 standard errors stronger
than it looks, and the tail is that of Student's t on half the degrees of freedom (both found by simulation; memory up
to an autoregression at .95 keeps the risk so).

Fixed cycles (``seasons``) are taken out first.

Unit: standard deviation, in the unit of the column. Against history it is history's standard deviation times the
ratio of the scores' standard deviations, so that one wild value does not make it; a spread beyond all of history's
values is told too small.
Missing values take no part and are never closed up.
Minimum: 24 rows and 8 stretches of history of the window's length (20 at a risk of .001 or less); a literal bound
without history 336 rows of a light-tailed feed, and only ``below`` where ``seasons`` are declared: a window's own cycle
takes some of the spread with it, one that evolves so much that half the windows would look too narrow. A literal bound
on a history with far-out values (excess kurtosis above 4) is undecided unless ``tails: light`` is declared. Undecided
when one value makes up more than 80 % of the rows (50 % at a risk of .001 or less).

Example::

    name: spread as usual
    measure: spread
    stays: {like: history}
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import ClassVar, Literal

import numpy as np
from pydantic import BaseModel, ConfigDict

from sercheck.grid import Panel
from sercheck.measure import Measure, Measurement, Question, Reasons
from sercheck.measures._past import (
    ask_history,
    ask_rows,
    ask_variety,
    cell,
    combined,
    mean,
    measured,
    mostly_beyond,
    past,
    pivot_through,
    scored,
    variance,
    varied,
    window_scores,
    without,
)
from sercheck.measures._window_models import own_models
from sercheck.measures._witnesses import own_cycles_out, sides
from sercheck.recent import enough as recent_enough
from sercheck.recent import recent_measurement, recent_past
from sercheck.reference import Pivot
from sercheck.serial.arrays import Floats, Ints
from sercheck.serial.autoregression import Autoregression, model_autocorrelation
from sercheck.serial.effective_sizes import effective_size_of
from sercheck.serial.own_models import OwnModels
from sercheck.serial.window_t import fewest_windows, window_t, windows

FEWEST_ALONE = 336
"""Rows that a literal bound without history needs (simulated for light tails)."""
ERRORS = 1.5
"""Standard errors by which memory is taken for stronger than it looks where a window varies too little (simulated)."""
STRONGEST = 0.99
"""Largest first reflection coefficient that is allowed for (keeps the model stationary)."""
HEAVY = 4.0
"""Excess kurtosis of history (Laplace's law has 3) above which a literal bound is not answered: on Student's t with 3
degrees of freedom the false-alarm rate at .001 would be .009 (simulated)."""
FLAT = 1e-30
"""What the variance of a window without any is taken for, so that its logarithm is finite and far out."""

LOG_VARIANCE = "log variance of normal scores, window-t (van der Waerden 1952; Bartlett and Kendall 1946)"


class SpreadFields(BaseModel):
    """``tails``: ``light`` declares that no value is far out (needed for a literal bound without history)."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    tails: Literal["unknown", "light"] = "unknown"


class Spread(Measure):
    """Standard deviation of the window."""

    kinds: ClassVar[frozenset[str]] = frozenset({"below", "above", "between", "like_history"})
    span: ClassVar[tuple[float, float]] = (0.0, float("inf"))
    Fields: ClassVar[type[BaseModel]] = SpreadFields

    def run(self, panel: Panel, question: Question) -> Measurement:
        if not question.stays.literal:
            return combined(
                mostly_beyond(panel),
                lambda: _beyond_history(panel, question),
                lambda: _within_history(panel, question),
            )
        enough = past(panel).stretches >= fewest_windows(question.risk)
        return combined(enough, lambda: _literal(panel, question), lambda: _alone(panel, question))


def _within_history(panel: Panel, question: Question) -> Measurement:
    """By the recent past where there is enough of it, else by history at large."""
    return combined(
        recent_enough(panel),
        lambda: varied(
            recent_measurement(panel, recent_past(panel, logs=not question.together).spread(question.rests)),
            panel,
            question.risk,
        ),
        lambda: _like_history(panel, question),
    )


def _beyond_history(panel: Panel, question: Question) -> Measurement:
    """What lies beyond all of history has a level to be asked about, and a spread that nothing can be compared with."""
    told, own = _like_history(panel, question), past(panel)
    return replace(
        told,
        observed=cell(np.sqrt(variance(own.window)) * own.scale),
        n_eff=np.full(told.n.shape, np.nan),
        undecided=np.zeros(told.n.shape, dtype=np.int64),
        reasons=("most values lie beyond all of history's: its spread is no measure for theirs, see their level",),
    )


@dataclass(frozen=True)
class _Deviation:
    """Log variance to standard deviation: base · exp((x - origin)/2), row by row; shape (S,) each."""

    base: Floats
    origin: Floats

    def __call__(self, x: Floats) -> Floats:
        with np.errstate(over="ignore"):
            return np.asarray(self.base[:, None] * np.exp((x - self.origin[:, None]) / 2), dtype=np.float64)


@dataclass(frozen=True)
class _CubeRoot:
    """Cube root of a variance to the standard deviation; a root below 0 is none."""

    scale: Floats

    def __call__(self, x: Floats) -> Floats:
        return np.asarray(self.scale[:, None] * np.maximum(x, 0.0) ** 1.5, dtype=np.float64)


def _logs(values: Floats) -> Floats:
    """Logarithm of a variance; NaN where it is 0 or unknown."""
    able = values > 0
    return np.where(able, np.log(np.where(able, values, 1.0)), np.nan)


def _asked(panel: Panel, question: Question) -> Reasons:
    told, reasons = past(panel), Reasons((len(past(panel).n), 1))
    ask_history(reasons, told, question.risk, "a spread")
    ask_variety(reasons, told, question.risk)
    return reasons


def _like_history(panel: Panel, question: Question) -> Measurement:
    told, reasons = past(panel), _asked(panel, question)
    scores = scored(panel).own
    base = np.sqrt(variance(told.history)) * told.scale
    now, then = variance(window_scores(panel)), _then(scores, told.steps)
    at = _logs(np.maximum(now, FLAT))
    centre, scale, df = window_t(_logs(then), at)
    unit = _Deviation(base, centre)
    pivot = pivot_through(unit, at, centre, scale, df, naive=_naive(told.n))
    return measured(
        panel,
        reasons,
        unit(cell(at)),
        (pivot, pivot),
        n_eff=cell(_size(told.n, scale)),
        method=LOG_VARIANCE,
        assumes="stationary history" + without(told),
    )


def _literal(panel: Panel, question: Question) -> Measurement:
    """Raw log variances about the author's number, with the scatter and the bias of history's stretches."""
    told, reasons = past(panel), _asked(panel, question)
    assert isinstance(question.fields, SpreadFields)
    heavy = (question.fields.tails != "light") & (_excess(told.history) > HEAVY)
    reasons.add(cell(heavy) > 0, "history has far-out values, on which a standard deviation hangs: use like: history")
    now, then = variance(told.window), _then(told.history, told.steps)
    at = _logs(np.maximum(now, FLAT))
    middle, wide, df = window_t(_logs(then), at)
    scale = wide / np.sqrt(1 + 1 / (df + 1))
    bias = middle - _logs(variance(told.history))
    unit = _Deviation(told.scale, np.zeros(len(at)))

    def against(bound: float) -> Pivot:
        centre = 2 * _logs(np.asarray(bound / told.scale)) + bias
        number = np.full((len(at), 1), bound)
        return pivot_through(unit, at, centre, scale, df, bound=number, naive=_naive(told.n))

    return measured(
        panel,
        reasons,
        unit(cell(at)),
        sides(question, against),
        n_eff=cell(_size(told.n, scale)),
        method=LOG_VARIANCE,
        assumes="stationary history" + without(told),
    )


def _then(history: Floats, steps: int) -> Floats:
    """Variances of history's stretches with at least half of the window's values, shape (S, m)."""
    cut = windows(history, steps)
    enough = (~np.isnan(cut)).sum(axis=2) * 2 >= steps
    return np.where(enough, variance(cut), np.nan)


def _excess(history: Floats) -> Floats:
    """Excess kurtosis of the observed values, shape (S,); 0 where they do not vary."""
    apart = history - mean(history)[:, None]
    with np.errstate(invalid="ignore", divide="ignore"):
        ratio = mean(apart**4) / mean(apart**2) ** 2
    return np.where(np.isfinite(ratio), ratio - 3, 0.0)


def _size(n: Floats | object, scale: Floats) -> Floats:
    """Rows times the variance of a log variance of independent normal rows, 2/(n - 1), over the one used."""
    rows = np.asarray(n, dtype=np.float64)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(rows * 2 / (rows - 1) / scale**2, dtype=np.float64)


def _naive(n: Ints) -> Floats:
    """Standard error of the log variance of n independent normal rows."""
    return np.asarray(np.sqrt(2 / (np.maximum(n, 2) - 1.0)), dtype=np.float64)


def _alone(panel: Panel, question: Question) -> Measurement:
    """χ² scatter on the effective size of a variance; light tails only."""
    told, reasons = past(panel), Reasons((len(past(panel).n), 1))
    assert isinstance(question.fields, SpreadFields)
    reasons.add(
        question.fields.tails != "light",
        "a spread needs history, or a feed that is declared to have no far-out values (tails: light)",
    )
    ask_rows(reasons, told, FEWEST_ALONE, "a literal spread without history")
    ask_variety(reasons, told, question.risk)
    values, taken = own_cycles_out(panel)
    reasons.add(
        bool(taken) and question.stays.low is not None,
        f"the window's own cycle of {', '.join(taken)} takes part of the spread with it, how much depends on how the "
        "cycle evolves: too small a spread then needs history (below alone can be judged)",
    )
    lengths = panel.axis.lengths
    left = [
        name
        for name, length in lengths.items()
        if length <= told.steps and not any(lengths[each] % length == 0 for each in taken)
    ]
    reasons.add(
        bool(left),
        f"the window holds {', '.join(left)} too few times (fewer than four) to take the cycle out of the spread: "
        "pass --history, or judge a longer window",
    )
    rows = np.maximum(told.n, 2)
    models = OwnModels(values) if taken else own_models(panel)
    model, lags = models.alone(1).model, min(200, max(told.steps - 1, 0))
    rho = model_autocorrelation(model, lags)
    about_mean = effective_size_of(rows, rho)
    size = effective_size_of(rows, rho**2)
    careful = np.maximum(effective_size_of(rows, model_autocorrelation(_stronger(model), lags) ** 2) - 1, 1)
    with np.errstate(divide="ignore", invalid="ignore"):
        corrected = variance(values) * (1 - 1 / rows) / (1 - 1 / np.maximum(about_mean, 1.5))
    wide = np.maximum(size - 1, 1), np.full(len(rows), np.inf)
    narrow = careful, np.maximum(careful / 2, 2)
    reasons.add(~(cell(corrected) > 0), "the window does not vary: there is no sampling error to allow for")
    at, unit = np.cbrt(corrected), _CubeRoot(told.scale)

    def against(bound: float | None, law: tuple[Floats, Floats]) -> Pivot | None:
        if bound is None:
            return None
        df, tail = law
        root = np.cbrt(bound / told.scale) ** 2
        centre, scale = root * (1 - 2 / (9 * df)), root * np.sqrt(2 / (9 * df))
        naive, number = root * np.sqrt(2 / (9.0 * (rows - 1))), np.full((len(at), 1), bound)
        return pivot_through(unit, at, centre, scale, tail, bound=number, naive=naive)

    return measured(
        panel,
        reasons,
        unit(cell(at)),
        (against(question.stays.high, wide), against(question.stays.low, narrow)),
        n_eff=cell(size),
        method="variance on its effective size (Bayley and Hammersley 1946; Wilson and Hilferty 1931)",
        assumes="short memory, light tails, no cycle longer than a third of the window" + without(told),
    )


def _stronger(model: Autoregression) -> Autoregression:
    """The models with a first reflection coefficient free of its bias and ``ERRORS`` standard errors farther from 0."""
    if not model.reflection.shape[1]:
        return model
    reflection = model.reflection.copy()
    first, n = np.minimum(np.abs(reflection[:, 0]), STRONGEST), np.maximum(model.n, 1)
    g = 1 - first**2
    moved = np.tanh(np.arctanh(first) + ((1 + 3 * first) / n + ERRORS * np.sqrt(g / n)) / g)
    reflection[:, 0] = np.where(model.order > 0, np.sign(reflection[:, 0]) * np.minimum(moved, STRONGEST), 0.0)
    return replace(model, reflection=reflection)
