"""How much a window's mean and autocorrelations scatter by what history teaches, for all series of a block at once.

Depends on ``serial``, ``grid``, ``baseline``, ``transforms`` and the compiled rules.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np

from sercheck.baseline import residual
from sercheck.grid import Axis, Panel
from sercheck.rulebook.compiled import Length, Rule, Transform
from sercheck.serial.arrays import Floats
from sercheck.serial.lag_law import history_law
from sercheck.serial.long_run import contrast_variance, cosine_spectrum, mean_contrast
from sercheck.serial.window_t import FEWEST_WINDOWS, windows
from sercheck.transforms import apply

FEWEST_ROWS = 24
"""Rows of a window, and four times the lag, below which no autocorrelation is compared with history (found by
simulation; as the measure autocorrelation asks)."""
TRULY = 0.5
"""Share of its steps that a stretch of history must hold to count as one of the window's length (ours)."""
OF_STRETCHES = ("detrended", "ranks")
"""Transforms that are fitted to stretches of the window's length."""


def lags_of(rule: Rule, axis: Axis) -> set[int]:
    """Lags that a rule looks at, in steps; a season counts as the lag of its length."""
    fields = rule.fields
    lags = {*(getattr(fields, "lags", None) or ())} if not isinstance(getattr(fields, "lags", None), int) else set()
    lag, season = getattr(fields, "lag", None), getattr(fields, "season", None)
    lags |= {lag} if isinstance(lag, int) else set()
    if season is not None:
        lags |= {int(axis.lengths[season]) if isinstance(season, str) else int(season)}
    return {int(each) for each in lags if int(each) > 0}


def after(chain: Sequence[Transform]) -> str:
    """How the name of a fact ends that was had after transforms."""
    return f" after {', '.join(map(str, chain))}" if chain else ""


def mean_laws(rest: Floats, lengths: Sequence[int]) -> dict[str, Floats]:
    """Variance of the mean of a complete window of each length, its degrees of freedom, and n_eff = s²/V.

    V and its degrees of freedom are those of ``contrast_variance`` (Meketon and Schmeiser 1984; Welch 1987), s² is
    history's variance with divisor n.

    Args:
        rest: history, shape (S, N), profile taken out, NaN is missing.
        lengths: steps of the windows.

    Returns:
        Facts of shape (S,); NaN where history holds fewer than ``FEWEST_WINDOWS`` stretches of that length at least
        half of whose rows are there. n_eff is NaN too where history does not vary.
    """
    found: dict[str, Floats] = {}
    spectrum = cosine_spectrum(rest)
    for n in lengths:
        variance, df = np.full(len(rest), np.nan), np.full(len(rest), np.nan)
        stretches = windows(~np.isnan(rest), n) if n <= rest.shape[1] else np.zeros((len(rest), 0, n))
        able = (stretches.sum(axis=2) >= TRULY * n).sum(axis=1) >= FEWEST_WINDOWS
        if able.any():
            told, freedom = contrast_variance(spectrum, mean_contrast(np.ones((1, n), dtype=bool)))
            variance, df = np.where(able, told, np.nan), np.where(able, freedom, np.nan)
        with np.errstate(divide="ignore", invalid="ignore"):
            n_eff = np.where(variance > 0, spectrum.variance / variance, np.nan)
        found |= {
            f"mean variance over {n} steps": variance,
            f"mean df over {n} steps": df,
            f"mean n_eff over {n} steps": n_eff,
        }
    return found


def autocorrelation_laws(panel: Panel, rules: Sequence[Rule], steps: Mapping[Length, int]) -> dict[str, Floats]:
    """Standard error and degrees of freedom of the autocorrelations that rules ask for, after their transforms.

    Those of ``history_law`` for a complete window of the rule's length; infinite degrees of freedom: the normal law.

    Args:
        panel: history alone (``start`` at its end).
        rules: the rules.
        steps: steps of each window that rules name; of those that are not there nothing is told.

    Returns:
        Facts of shape (S,); NaN where the window has under max(24, 4k) steps, and where history's windows alone would
        give the law and there are fewer than ``FEWEST_WINDOWS`` of them.
    """
    asked: dict[tuple[tuple[Transform, ...], int], set[int]] = {}
    for rule in rules:
        lags = lags_of(rule, panel.axis)
        if lags and panel.column in rule.columns and rule.window in steps:
            asked.setdefault((rule.after, steps[rule.window]), set()).update(lags)
    found: dict[str, Floats] = {}
    for (chain, window), lags in asked.items():
        history, n = _changed(panel, chain, window)
        for name, values in _laws(history, n, sorted(lags)).items():
            found[f"autocorrelation {name} over {window} steps{after(chain)}"] = values
    return found


def _changed(panel: Panel, chain: tuple[Transform, ...], window: int) -> tuple[Floats, int]:
    """History after the transforms, its profile taken out, and the steps that a window then has; none if unable."""
    nothing = np.full((len(panel.values), 0), np.nan)
    start = panel.values.shape[1] - window
    if start <= 0:
        return nothing, window
    one = apply(chain, replace(panel, values=panel.values[:1], delivered=panel.delivered[:1], start=start, shared={}))
    n = one.values.shape[1] - one.start
    fitted = any(transform.kind in OF_STRETCHES for transform in chain)
    changed = apply(chain, replace(panel, start=start, shared={}) if fitted else panel)
    if changed.unable or n < 1:
        return nothing, n
    return residual(changed.changed(changed.values, start=changed.values.shape[1])).values, n


def _laws(history: Floats, n: int, lags: list[int]) -> dict[str, Floats]:
    series = len(history)
    error, df = np.full((series, len(lags)), np.nan), np.full((series, len(lags)), np.nan)
    able = [place for place, lag in enumerate(lags) if n >= max(FEWEST_ROWS, 4 * lag) and history.shape[1] > n]
    if able:
        # the law does not depend on the window's values, only on how many there are
        complete = np.broadcast_to(np.arange(n, dtype=np.float64), (series, n))
        past = history_law(history, complete, np.array([lags[place] for place in able], dtype=np.int64))
        told = ~(past.by_windows & (past.windows < FEWEST_WINDOWS)) & (past.law.error > 0)
        error[:, able] = np.where(told, past.law.error, np.nan)
        df[:, able] = np.where(told, past.law.df, np.nan)
    found = {f"error lag {lag}": error[:, place] for place, lag in enumerate(lags)}
    return found | {f"df lag {lag}": df[:, place] for place, lag in enumerate(lags)}
