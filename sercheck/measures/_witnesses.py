"""Literal bounds without history: two witnesses of the long-run variance, of whom the more careful counts.

Depends on ``serial``, ``grid``, ``measure``, ``reference`` and ``baseline``.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from sercheck.baseline import chosen_seasons
from sercheck.grid import Panel
from sercheck.measure import Measurement, Question, Reasons, Reference
from sercheck.measures._past import ToUnit, ask_rows, ask_variety, cell, mean, measured, past, taken_out, variance
from sercheck.measures._window_models import own_models
from sercheck.reference import Larger, Pivot
from sercheck.serial.arrays import Floats
from sercheck.serial.echoed_run import echoed_long_run
from sercheck.serial.long_run import LongRun, cosine_long_run
from sercheck.serial.own_models import OwnModels
from sercheck.serial.season import phase_means

FEWEST_ALONE = 96
"""Rows that a literal bound without history needs (simulated, short memory)."""
FEWEST_STRONG = 336
"""The same where lag-one memory may reach .9 (simulated)."""
STRONG = 0.8
"""Fitted memory Σφ from which the true one may reach .9 (its bias is -.04 and its error .05 at 96 rows)."""


def own_cycles_out(panel: Panel) -> tuple[Floats, tuple[str, ...]]:
    """The window in units of ``Past.scale`` without its own phase means, and the names of the cycles taken out.

    Only cycles that the window holds at least four times; deviations are widened by √(C/(C-1)), so that their variance
    is that of the rows about the true profile.
    """
    values = panel.window / past(panel).scale[:, None]
    names = chosen_seasons(panel.axis, values.shape[1])
    for name in names:
        phase = panel.phase(name)[panel.start :]
        means, seen = phase_means(values, phase, panel.axis.lengths[name])
        cycles = seen[:, phase]
        with np.errstate(divide="ignore", invalid="ignore"):
            values = (values - means[:, phase]) * np.where(cycles > 1, np.sqrt(cycles / (cycles - 1)), np.nan)
    return values, names


def ask_alone(
    reasons: Reasons, panel: Panel, question: Question, run: LongRun, what: str, strong: int, memory: float = STRONG
) -> None:
    """The reasons that all literal bounds without history share; ``strong`` rows are needed above ``memory``."""
    told = past(panel)
    ask_rows(reasons, told, FEWEST_ALONE, f"{what} without history")
    ask_variety(reasons, told, question.risk)
    reasons.add(~(cell(run.variance) > 0), "the window does not vary: there is no sampling error to allow for")
    reasons.add(
        (cell(told.n) < strong) & (cell(run.memory) > memory),
        f"rows depend strongly on each other: without history {what} then needs {strong} rows",
    )


def sides(question: Question, against: Callable[[float], Reference]) -> tuple[Reference | None, Reference | None]:
    """References for too large and too small of a literal bound."""
    low, high = question.stays.low, question.stays.high
    return None if high is None else against(high), None if low is None else against(low)


def two_witnesses(
    panel: Panel, at: Floats, errors: tuple[Floats, Floats], runs: tuple[LongRun, LongRun], naive: Floats
) -> Callable[[float], Reference]:
    """Law of a statistic about a bound, given the standard errors that two long-run variances lead to.

    Statistic and errors have shape (S,) and are in units of ``Past.scale``.
    """
    scale = past(panel).scale
    unit = ToUnit(None, np.zeros(len(at)), scale)

    def witness(bound: float, error: Floats, run: LongRun) -> Pivot:
        return Pivot(
            statistic=cell(at),
            centre=cell(bound / scale),
            scale=cell(error),
            df=cell(run.df),
            bound=np.full((len(at), 1), bound),
            standard_error=unit(cell(error)),
            to_unit=unit,
            naive_scale=cell(naive),
        )

    return lambda bound: Larger(witness(bound, errors[0], runs[0]), witness(bound, errors[1], runs[1]))


def mean_alone(panel: Panel, question: Question) -> Measurement:
    """The window's mean against the author's number, p = max(p_AR, p_EWC)."""
    told, reasons = past(panel), Reasons((len(past(panel).n), 1))
    values, taken = own_cycles_out(panel)
    level = mean(panel.window / told.scale[:, None])
    models = OwnModels(values) if taken else own_models(panel).in_unit(told.scale)
    first = echoed_long_run(models)
    second = cosine_long_run(models.data)
    ask_alone(reasons, panel, question, first, "a level", FEWEST_STRONG)
    rows = np.maximum(told.n, 1)
    spread = variance(values)
    errors = np.sqrt(first.variance / rows), np.sqrt(second.variance / rows)
    against = two_witnesses(panel, level, errors, (first, second), np.sqrt(spread / rows))
    with np.errstate(divide="ignore", invalid="ignore"):
        n_eff = rows * spread / np.maximum(first.variance, second.variance)
    return measured(
        panel,
        reasons,
        cell(level * told.scale),
        sides(question, against),
        n_eff=cell(n_eff),
        method="mean, two long-run variances (Berk 1974; Lazarus, Lewis, Stock and Watson 2018)",
        assumes="short memory, no long tail on one side" + taken_out(taken),
    )
