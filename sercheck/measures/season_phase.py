"""Has the clock slipped: does the season come early or late?

Null hypothesis: the window holds history's seasonal profile, at any amplitude, without a shift in time. Window and
profile p are whitened by the autoregression (Burg 1975, order at most 6) of history without its season; the window is
regressed on [1, p, (p_{+d} + p_{-d})/2 - p, (p_{-d} - p_{+d})/2]. The last coefficient, times d, is the slip; its t
(error times √(1 + n/N) for the errors of the profile) is judged two-sided, and only where the profile moved that way
fits better too; elsewhere the slip is 0. The risk is shared (Bonferroni) among the distances d searched, and among the
whole window and its later half, so far as a slip of d would be seen in them with probability .8.

Fields: ``season`` (a name from ``seasons``, or steps) and ``reach`` (largest slip searched, default 1 step; searching
many costs power).
Unit: steps; positive is late. ``below``, ``above`` and ``between`` bound the slip, ``like: history`` asks for none.
Missing values: nothing is closed up; a value takes part where those before it that the model needs are there.
Minimum: history of 4 cycles, 12 whitened values, and a season strong enough against its noise that a slip of one step
would be seen; with one or two cycles it seldom is. Undecided where history shows that the season evolves.

Example::

    name: no clock has slipped
    measure: season_phase
    season: day
    window: 7D
    stays: {like: history}
"""

from __future__ import annotations

from typing import Annotated, ClassVar

import numpy as np
from pydantic import BaseModel, ConfigDict, Field

from sercheck.errors import UsageError
from sercheck.grid import Panel
from sercheck.measure import Measure, Measurement, Question, Reasons, told_reasons
from sercheck.measures._lags import window_counts
from sercheck.measures._past import combined
from sercheck.measures._season import (
    Named,
    ask_history,
    ask_window,
    effective,
    learned,
    named_season,
)
from sercheck.measures._season_laws import Best
from sercheck.recent import enough, has_profile, idle_phase, recent_measurement, recent_past
from sercheck.reference import Pivot
from sercheck.serial.arrays import Floats
from sercheck.serial.matched_filter import Amplitude, matched_amplitude
from sercheck.serial.phase import Slip, phase_slip

THERE = 2.0
"""Standard errors of its amplitude by which a season must be there to have a phase (the usual two)."""


class SeasonPhaseFields(BaseModel):
    """``season``: a name from ``seasons`` or steps; ``reach``: largest slip searched, in steps."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    season: str | Annotated[int, Field(ge=3, strict=True)]
    reach: Annotated[int, Field(ge=1, strict=True)] = 1


class SeasonPhase(Measure):
    """Slip of a season in time."""

    kinds: ClassVar[frozenset[str]] = frozenset({"below", "above", "between", "like_history"})
    Fields: ClassVar[type[BaseModel]] = SeasonPhaseFields

    def run(self, panel: Panel, question: Question) -> Measurement:
        fields = question.fields
        assert isinstance(fields, SeasonPhaseFields)
        season = named_season(panel, fields.season)
        if 2 * fields.reach >= season.cycle.length:
            raise UsageError(
                f"season_phase of season {season.name}",
                f"a reach of {fields.reach} steps",
                f"less than half of the season's {season.cycle.length} steps",
                "A slip of half a cycle forward is the same as one backward: ask for a smaller reach.",
            )
        if question.stays.kind == "like_history" and fields.reach == 1:
            return combined(
                enough(panel) & has_profile(panel),
                lambda: recent_measurement(
                    panel,
                    recent_past(panel, logs=not question.together).phase(question.rests),
                    season=season.name,
                    idle=idle_phase(panel, question.risk),
                ),
                lambda: _searched(panel, question, season, fields.reach),
            )
        return _searched(panel, question, season, fields.reach)


def _searched(panel: Panel, question: Question, season: Named, reach: int) -> Measurement:
    """By history's profile moved either way."""
    n, n_missing = window_counts(panel, (season.cycle.length,))
    reasons, unsure = Reasons(n.shape), Reasons(n.shape)
    enough = ask_history(reasons, panel, season)
    stays = question.stays
    both = stays.kind in ("like_history", "between")
    unknown = np.full(len(n), np.nan)
    slip = Slip(unknown, unknown, unknown, np.zeros(len(n), np.int64), unknown, np.zeros(len(n), np.int64), unknown)
    if enough.any():
        told = learned(panel, season)
        slip = phase_slip(told.window, told.model, panel.start, reach, question.risk if both else 2 * question.risk)
        reasons.add(
            told.model.evolving[:, None],
            f"history's season {season.name} evolves: a slip cannot be told from its changes",
        )
        amplitude = matched_amplitude(told.window, told.model, panel.start)
        ask_window(reasons, season, slip.points, amplitude.shrinkage)
        _ask_power(reasons, slip)
        _ask_season(unsure, amplitude)
    low, high = (0.0, 0.0) if stays.kind == "like_history" else (stays.low, stays.high)
    texts, unsure_at = told_reasons(reasons, unsure)
    return Measurement(
        observed=slip.value[:, None],
        n=n,
        n_missing=n_missing,
        n_eff=effective(n, slip.naive, slip.scale),
        upper=None if high is None else _reference(slip, high),
        lower=None if low is None else _reference(slip, low),
        undecided=reasons.index,
        reasons=texts,
        unsure=unsure_at,
        method="regression on history's whitened seasonal profile moved either way, Student's t, the best of the "
        "whole window and its later half (Bonferroni)",
        assumes="stationary history, a season that stays the same",
        season=season.name,
    )


def _ask_power(reasons: Reasons, slip: Slip) -> None:
    """Undecided where no look could have shown a slip."""
    for times in (2, 5, np.inf):
        # a few round sentences rather than one for each series
        with np.errstate(invalid="ignore"):
            cells = (slip.looks == 0) & (slip.needed**2 <= times)
        longer = "" if np.isinf(times) else f": a window about {times} times as long is needed"
        reasons.add(
            cells[:, None],
            f"a slip of the size looked for could not be seen against the noise of this window{longer}",
        )
    reasons.add((slip.looks == 0)[:, None], "a slip of the size looked for could not be seen in this window")


def _ask_season(unsure: Reasons, seen: Amplitude) -> None:
    """That there is no slip says nothing where the window does not hold the season."""
    with np.errstate(invalid="ignore"):
        absent = ~(seen.value > THERE * seen.scale)
    unsure.add(
        absent[:, None],
        "the window does not hold the season, so that it has no phase: see seasonal_lag for its strength",
    )


def _reference(slip: Slip, bound: float) -> Best:
    centre: Floats = np.where(np.isnan(slip.value), np.nan, bound)[:, None]
    look = Pivot(
        statistic=slip.value[:, None],
        centre=centre,
        scale=slip.scale[:, None],
        df=slip.df[:, None],
        bound=centre,
        standard_error=slip.scale[:, None],
        naive_scale=slip.naive[:, None],
    )
    return Best(look, np.maximum(slip.looks, 1)[:, None])
