"""Is the season there, as strong as it should be?

Three questions, by what ``stays`` says:

``like: history``: has the seasonal profile its usual amplitude? Null hypothesis: the window holds history's profile
with amplitude 1. History's phase means (cycles that are broken left out) and the window are whitened by the
autoregression (Burg 1975, order at most 6) of history without its season; least squares on [1, profile] gives the
amplitude, and (â/λ - 1) λ/(se √(1 + n/N)) is judged as Student's t, two-sided; λ = 1 - σ² n/(C ‖profile‖²) undoes the
shrinkage by the errors of a mean of C cycles. Where a longer declared season (a week) contains this one and foretells
history better, its profile is used. Where history shows that its season evolves (innovations still correlate at the
season, Taylor 1984, or amplitudes scatter beyond their errors), the autocorrelation at the season is compared with that
of history's windows by Student's t instead; it then is what is observed.

``above``, ``below``, ``between``: is the autocorrelation at the season beyond a bound? Null hypothesis: it is the
bound. A straight line is taken out first; variance and bias of r come from an autoregression changed so that its
autocorrelation at the season is the bound (Bartlett 1946; Kendall 1954; Taylor 1984).

``present: true``: is there a season at all? Null hypothesis: there is none; the rule is kept when that is rejected.
Periodogram ordinates at up to three harmonics over their neighbours, F distributed, their p-values combined by Fisher
(1932).

Fields: ``season`` (a name from ``seasons``, or steps) and ``multiple`` (cycles taken together, default 1).
Unit: the amplitude is 1 when it is as in history; autocorrelations have none; with ``present`` the statistic is χ².
Missing values: nothing is closed up. A value takes part where those before it that the model needs are there;
autocorrelations sum the complete pairs; for ``present`` a missing value counts as lying on the trend.
Minimum: history of 4 cycles and 12 whitened values; 2 cycles and 8 windows of history where the season evolves. For a
bound max(48, 4k) values at lag k when it is at most .6 in size, max(168, 7k) above. For ``present`` 4 cycles.

Example::

    name: the daily cycle has its usual strength
    measure: seasonal_lag
    season: day
    stays: {like: history}
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Annotated, ClassVar

import numpy as np
from pydantic import BaseModel, ConfigDict, Field

from sercheck.grid import Panel
from sercheck.measure import POWER, Measure, Measurement, Picture, Question, Reasons, Stays, told_reasons
from sercheck.measures._lags import window_counts
from sercheck.measures._past import combined
from sercheck.measures._season import Named, ask_history, ask_window, effective, learned, named_season
from sercheck.measures._season_bound import bounded
from sercheck.measures._season_laws import ChiSquare
from sercheck.recent import enough, has_profile, idle_amplitude, recent_measurement, recent_past
from sercheck.reference import Pivot
from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.autocovariances import autocorrelation
from sercheck.serial.lag_law import forward
from sercheck.serial.matched_filter import Amplitude, matched_amplitude
from sercheck.serial.phase import SURE
from sercheck.serial.risk import t_quantile
from sercheck.serial.spectral import FEWEST_CYCLES, spectral_f, spectral_f_power
from sercheck.serial.window_t import FEWEST_WINDOWS, WindowT, count_windows, window_t, windows

FEWEST_EVOLVING = 2
"""Cycles that the autocorrelation at a season needs to be seen at all."""
PLAIN_SHARE = 0.5
"""Share of the variance that a season worth certifying has: its absence can be told where such a one would be seen."""
GAPPY = 0.25
"""Share of missing values above which the periodogram is theirs rather than the feed's (a plain quarter)."""


class SeasonalLagFields(BaseModel):
    """``season``: a name from ``seasons`` or steps; ``multiple``: cycles taken together."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    season: str | Annotated[int, Field(ge=2, strict=True)]
    multiple: Annotated[int, Field(ge=1, strict=True)] = 1


class SeasonalLag(Measure):
    """Strength of a season."""

    kinds: ClassVar[frozenset[str]] = frozenset({"below", "above", "between", "like_history", "present"})
    span: ClassVar[tuple[float, float]] = (-1.0, 1.0)
    Fields: ClassVar[type[BaseModel]] = SeasonalLagFields

    def picture(self, fields: BaseModel, stays: Stays) -> Picture:
        return "stretch" if stays.kind == "like_history" else "correlogram"

    def run(self, panel: Panel, question: Question) -> Measurement:
        fields = question.fields
        assert isinstance(fields, SeasonalLagFields)
        season = named_season(panel, fields.season, fields.multiple)
        if question.stays.kind == "like_history":
            return combined(
                enough(panel) & has_profile(panel) & (fields.multiple == 1),
                lambda: recent_measurement(
                    panel,
                    recent_past(panel, logs=not question.together).amplitude(question.rests),
                    season=season.name,
                    lag=season.cycle.length,
                    idle=idle_amplitude(panel, question.risk),
                ),
                lambda: _like_history(panel, question, season),
            )
        if question.stays.kind == "present":
            return _present(panel, question, season)
        return bounded(panel, question, season, fields.multiple)


@dataclass(frozen=True)
class _Unit:
    """From a statistic's scale to the observed unit: tanh for the series judged by their autocorrelation."""

    evolving: Bools

    def __call__(self, x: Floats) -> Floats:
        return np.where(self.evolving, np.tanh(x), x)


def _like_history(panel: Panel, question: Question, season: Named) -> Measurement:
    reasons = Reasons((len(panel.values), 1))
    n, n_missing = window_counts(panel, (season.cycle.length,))
    enough = ask_history(reasons, panel, season)
    if not enough.any():
        return _nothing(panel, season, reasons)
    told = learned(panel, season)
    model = told.model
    amplitude = matched_amplitude(told.window, model, panel.start)
    evolving = model.evolving & enough
    lag = season.cycle.length
    old = _window_lags(told.history, told.window.shape[1], lag) if evolving.any() else np.full((len(n), 1), np.nan)
    new = forward(autocorrelation(told.window, [lag])[:, 0])
    by_windows = window_t(old, new)
    _ask_evolving(reasons, panel, season, evolving, count_windows(old), by_windows)
    ask_window(reasons, season, amplitude.points, amplitude.shrinkage, ~evolving)
    unsure = Reasons(n.shape)
    _ask_power(unsure, amplitude, evolving, question.risk, season)
    texts, unsure_at = told_reasons(reasons, unsure)
    pivot = _pivot(amplitude, by_windows, new, evolving)
    n_eff = np.where(evolving[:, None], np.nan, effective(n, amplitude.naive, amplitude.scale))
    return Measurement(
        observed=pivot.to_unit(pivot.statistic),
        n=n,
        n_missing=n_missing,
        n_eff=n_eff,
        upper=pivot,
        lower=pivot,
        undecided=reasons.index,
        reasons=texts,
        unsure=unsure_at,
        method="matched filter on history's seasonal profile, Student's t (errors in the profile allowed for)"
        + ("; where the season evolves, its autocorrelation against history's windows" if evolving.any() else ""),
        assumes="stationary history" + ("" if evolving.all() else ", a season that stays the same"),
        lags=(lag,),
        season=season.name,
    )


def _nothing(panel: Panel, season: Named, reasons: Reasons) -> Measurement:
    """Nothing can be learned from history; the autocorrelation is not the amplitude, so nothing is observed."""
    n, n_missing = window_counts(panel, (season.cycle.length,))
    unknown = np.full(n.shape, np.nan)
    pivot = Pivot(unknown, unknown, unknown, unknown, unknown, unknown)
    method = "matched filter on history's seasonal profile, Student's t"
    return Measurement(
        unknown, n, n_missing, unknown, pivot, pivot, reasons.index, tuple(reasons.texts), method,
        "stationary history", lags=(season.cycle.length,), season=season.name,
    )  # fmt: skip


def _window_lags(history: Floats, length: int, lag: int) -> Floats:
    """Statistic atanh r at the season in each of history's windows, shape (S, m)."""
    stretches = windows(history, length)
    series, m, _ = stretches.shape
    if not m:
        return np.full((series, 1), np.nan)
    r = autocorrelation(stretches.reshape(series * m, length), [lag]).reshape(series, m)
    return forward(r)


def _ask_evolving(reasons: Reasons, panel: Panel, season: Named, evolving: Bools, count: Ints, told: WindowT) -> None:
    length = season.cycle.length
    reasons.add(
        (evolving & (panel.window.shape[1] < FEWEST_EVOLVING * length))[:, None],
        f"history's season {season.name} evolves: a window of {FEWEST_EVOLVING * length} steps "
        f"({FEWEST_EVOLVING} cycles) is needed",
    )
    reasons.add(
        (evolving & (count < FEWEST_WINDOWS))[:, None],
        f"history's season {season.name} evolves and history holds fewer than {FEWEST_WINDOWS} stretches of the "
        f"window's {panel.window.shape[1]} steps: {FEWEST_WINDOWS * panel.window.shape[1]} steps are needed",
    )
    with np.errstate(invalid="ignore"):
        reasons.add(
            (evolving & ~(told.scale > 0))[:, None],
            "the autocorrelation at the season cannot be computed: the window is constant or too gappy",
        )


def _ask_power(unsure: Reasons, seen: Amplitude, evolving: Bools, risk: float, season: Named) -> None:
    """A pass says nothing where a season that is gone would be missed too often."""
    with np.errstate(invalid="ignore"):
        blind = (t_quantile(1 - risk / 2, seen.df) + SURE) * seen.foreseen > 1
    unsure.add(
        (blind & ~evolving)[:, None],
        f"season {season.name} is weak against its noise: even one that is gone would not be found with probability .8 "
        "in this window; a longer one is needed",
    )


def _pivot(seen: Amplitude, past: WindowT, new: Floats, evolving: Bools) -> Pivot:
    def either(windowed: Floats, matched: Floats) -> Floats:
        return np.where(evolving, windowed, matched)[:, None]

    one = np.where(np.isnan(seen.value), np.nan, 1.0)
    typical = np.tanh(past.centre)
    return Pivot(
        statistic=either(new, seen.value),
        centre=either(past.centre, one),
        scale=either(past.scale, seen.scale),
        df=either(past.df, seen.df),
        bound=either(typical, one),
        standard_error=either(past.scale * (1 - typical**2), seen.scale),
        to_unit=_Unit(evolving[:, None]),
        naive_scale=either(np.full_like(new, np.nan), seen.naive),
    )


def _present(panel: Panel, question: Question, season: Named) -> Measurement:
    length = season.cycle.length
    n, n_missing = window_counts(panel, (season.cycle.length,))
    seen = spectral_f(panel.window, length)
    reasons = Reasons(n.shape)
    reasons.add(
        seen.cycles < FEWEST_CYCLES,
        f"fewer than {FEWEST_CYCLES} cycles in the window: {FEWEST_CYCLES * length} steps are needed",
    )
    reasons.add(length < 3, "a season of 2 steps has no harmonic with neighbours on both sides")
    used = max(seen.cycles * length, 1)
    reasons.add((1 - seen.n / used > GAPPY)[:, None], "more than a quarter of the window is missing")
    reasons.add(np.isnan(seen.statistic)[:, None], "the window is constant or a straight line")
    weak = spectral_f_power(seen.cycles, length, PLAIN_SHARE, question.risk) < POWER
    unsure = Reasons(n.shape)
    unsure.add(
        weak,
        f"{seen.cycles} cycles cannot certify even a plain season at a risk of {question.risk:g}: a longer window is "
        "needed",
    )
    texts, unsure_at = told_reasons(reasons, unsure)
    reference = ChiSquare(seen.statistic[:, None], seen.df)
    return Measurement(
        observed=seen.statistic[:, None],
        n=n,
        n_missing=n_missing,
        n_eff=np.full(n.shape, np.nan),
        upper=reference,
        lower=None,
        undecided=reasons.index,
        reasons=texts,
        unsure=unsure_at,
        method=f"local spectral F over {seen.f.shape[1]} harmonics, combined by Fisher (1932)",
        assumes="a spectrum that is smooth around the season",
        lags=(length,),
        season=season.name,
        certify=True,
    )
