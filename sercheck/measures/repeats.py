"""Values that stick: the longest run of equal values, or the share of rows equal to the last.

Question: do values repeat more than the author allows, or more than they did in history?

Null hypothesis (like history): rows repeat as often, and for as long, as they did in history.

Formula: a literal bound is held against the observation itself, which has no sampling error. Like history, one-sided
(only too many is a fault), with r the repeats in the longest run, k of n rows equal to the last, K of N in history:

- at least 56 stretches of the window's length in history (26 for windows of up to 7 rows). Share: π = (K + ½)/(N + 1),
  τ the variance of the stretches' counts over the binomial variance (at least 1; 4 with 20 stretches or fewer),
  M = (n − τ)/(τ − 1) between ½ and N + 1, p = P(BetaBin(n, πM, (1 − π)M) ≥ k). Run: that a row repeats after one that
  did not has the chance e_s at place s of the window (the hour of a day), after one that did (or after three, where
  that is larger) q_s, drawn to the chance over all places unless places differ; a run of r from s on weighs
  w(s, r) = e_s q_{s+1} … q_{s+r−1}, and that of least weight w is judged: p = 1 − exp(−Σ_s w(s, r_s)), r_s the
  shortest from s on that weighs no more. What stands still at noon is odder than what stands still at night.
- 8 stretches or more (assumes a stationary history). Share: the larger p of Student's t on asin √share of
  the stretches and of the beta-binomial law above, which is right where repeats are rare. Run: a geometric tail beyond
  the longest length that ten of history's runs reach.

Source: runs of a two-state chain by Poisson clumping (Aldous 1989); empirical Bayes (Morris 1983); beta-binomial law
(Skellam 1948); variance-stabilised shares (Anscombe 1948).

Unit: `look: run` (default) counts equal values, 1 when nothing repeats; `look: share` is a share of rows, 0 to 1. The
row before the window counts as the start of its first run.

Missing values: break a run; a row counts for the share when it and the row before have values.

Resting values: like history, the commonest value, where it is an end of the range and more than 5 % of history (zero
at night), is not counted. With a literal bound everything is.

Minimum size: none with a literal bound; 8 stretches of the window's length in history otherwise. Coarse rounding hides
filling: `limit` tells the shortest run (or smallest share) that would be seen.

Example::

    - name: no reading sticks
      measure: repeats
      look: run
      stays: {below: 6}
"""

from __future__ import annotations

from typing import Literal

import numpy as np
from pydantic import BaseModel, ConfigDict

from sercheck.grid import Panel
from sercheck.measure import POWER, Measure, Measurement, Question, Reasons, Reference
from sercheck.measures._exact import exact
from sercheck.reference import Larger, Pivot
from sercheck.serial.arrays import Floats, Ints
from sercheck.serial.recurrence import beta_binomial_share
from sercheck.serial.repeats import equal_to_earlier, longest_equal_run, resting_value, share_of
from sercheck.serial.runs import RunLaw, chain_runs, past_runs
from sercheck.serial.window_t import FEWEST_WINDOWS, window_t, windows

RECENT_STRETCHES = 56
"""Stretches of history from which the spread between them is part of the law (measured on real feeds)."""

RECENT_WEEKS = 26
"""The same for windows of up to 7 rows (measured on real feeds)."""


class Fields(BaseModel):
    """What is looked at."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    look: Literal["run", "share"] = "run"


class Repeats(Measure):
    """Longest run of equal values, or share of rows equal to the last."""

    kinds = frozenset({"below", "above", "between", "like_history"})
    span = (0.0, np.inf)
    Fields = Fields

    def run(self, panel: Panel, question: Question) -> Measurement:
        assert isinstance(question.fields, Fields)
        if question.stays.literal:
            return _literal(panel, question, question.fields.look)
        return _like_history(panel, question, question.fields.look)


def _literal(panel: Panel, question: Question, look: str) -> Measurement:
    before = max(panel.start - 1, 0)
    window = panel.values[:, before:]
    marks = equal_to_earlier(window)[:, panel.start - before :]
    held = np.count_nonzero(~np.isnan(panel.window), axis=1)
    n = held if look == "run" else np.count_nonzero(~np.isnan(marks), axis=1)
    reasons = Reasons((len(n), 1))
    if look == "run":
        reasons.add((n == 0)[:, None], "no row of the window has a value: at least one is needed")
        observed = np.where(n > 0, longest_equal_run(window), np.nan)
    else:
        reasons.add((n == 0)[:, None], "no two neighbouring rows have values: at least two are needed")
        observed = share_of(marks)
    return exact(
        question.stays, observed, n, _missing(panel), reasons,
        span=Repeats.span, method=f"{look} of equal values, counted", integer=look == "run",
    )  # fmt: skip


def _missing(panel: Panel) -> Ints:
    return np.asarray(np.count_nonzero(np.isnan(panel.window), axis=1))


def _like_history(panel: Panel, question: Question, look: str) -> Measurement:
    rest = resting_value(panel.history)
    marks = np.where(panel.values == rest[:, None], np.nan, equal_to_earlier(panel.values))
    past, batch = marks[:, : panel.start], marks[:, panel.start :]
    n = np.count_nonzero(~np.isnan(batch), axis=1)[:, None]
    stretches = panel.start // batch.shape[1]
    recent = stretches >= (RECENT_WEEKS if batch.shape[1] <= 7 else RECENT_STRETCHES)
    reasons = Reasons(n.shape)
    reasons.add(panel.start == 0, "no history: pass --history or learn a baseline")
    reasons.add(
        stretches < FEWEST_WINDOWS,
        f"history holds {stretches} stretches of the window's length, {FEWEST_WINDOWS} are needed",
    )
    reasons.add(n == 0, "no row of the window can be compared: all are missing or hold the feed's resting value")
    unlearnt = np.count_nonzero(~np.isnan(past), axis=1) == 0
    reasons.add(unlearnt[:, None], "history has no two neighbouring rows with values: pass a longer --history")
    observed, law, n_eff, method = (_run if look == "run" else _share)(past, batch, recent=recent)
    reasons.add(
        np.isnan(law.limit("upper", np.asarray(question.risk))),
        f"history repeats itself so much that no {look} would stand out at a risk of {question.risk:g}",
    )
    return Measurement(
        observed=np.where(n > 0, observed, np.nan),
        n=n,
        n_missing=_missing(panel)[:, None],
        n_eff=n_eff,
        upper=law,
        lower=None,
        undecided=reasons.index,
        reasons=tuple(reasons.texts),
        method=method,
        assumes="batches scatter as those of the recent past did" if recent else "stationary history",
        integer=look == "run",
    )


def _run(past: Floats, batch: Floats, *, recent: bool) -> tuple[Floats, Reference, Floats, str]:
    law: RunLaw = chain_runs(past, batch) if recent else past_runs(past, batch)
    method = (
        "most telling run of a two-state chain, by its place (Poisson clumping, Aldous 1989)"
        if recent
        else "longest run against history's runs with a geometric tail (Poisson clumping, Aldous 1989)"
    )
    return law.longest + 1.0, law, np.full(law.rows.shape, np.nan), method


def _share(past: Floats, batch: Floats, *, recent: bool) -> tuple[Floats, Reference, Floats, str]:
    if recent:
        law = beta_binomial_share(past, batch, POWER)
        return (
            share_of(batch)[:, None],
            law,
            law.rows / law.tau,
            "beta-binomial share of rows equal to the last (Skellam 1948)",
        )
    return _share_by_windows(past, batch)


def _share_by_windows(past: Floats, batch: Floats) -> tuple[Floats, Reference, Floats, str]:
    share = share_of(batch)
    n = np.count_nonzero(~np.isnan(batch), axis=1)
    cut = windows(past, batch.shape[1])
    S, m, length = cut.shape
    of_windows = share_of(cut.reshape(S * m, length)).reshape(S, m)
    of_history = share_of(past)
    law = window_t(np.arcsin(np.sqrt(of_windows)), np.arcsin(np.sqrt(share)))
    with np.errstate(divide="ignore", invalid="ignore"):
        naive = np.where(n > 0, 0.5 / np.sqrt(n), np.nan)
        scale = np.maximum(law.scale, naive * np.sqrt((law.df + 2) / (law.df + 1)))
        error = np.sqrt(of_history * (1 - of_history) / n) * scale / naive
        n_eff = n * (naive / scale) ** 2
    pivot = Pivot(
        statistic=np.arcsin(np.sqrt(share))[:, None],
        centre=law.centre[:, None],
        scale=scale[:, None],
        df=law.df[:, None],
        bound=_to_share(law.centre)[:, None],
        standard_error=error[:, None],
        to_unit=_to_share,
        naive_scale=naive[:, None],
    )
    method = "larger p of window-t on asin √share (Anscombe 1948) and of the beta-binomial share (Skellam 1948)"
    return share[:, None], Larger(pivot, beta_binomial_share(past, batch, POWER)), n_eff[:, None], method


def _to_share(angle: Floats) -> Floats:
    """Sin² on 0 .. π/2, 0 below and NaN above, where no share is."""
    return np.where(angle <= np.pi / 2, np.sin(np.maximum(angle, 0.0)) ** 2, np.nan)
