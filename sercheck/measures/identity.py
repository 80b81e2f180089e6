"""Is each series still nearest to its own past, or were keys swapped?

Null hypothesis: the window of a series lies as much nearer to its own profile, compared with that of the most similar
other series, as history's stretches did.

D = ln(S_own/S_other), both sums of squared residuals whitened by the series' own autoregression (Burg 1975, order at
most 6): about the seasonal profile that the series had a week before, and about that of the other series that fits
best. D is far below 0 for a healthy series and above 0 for one that was delivered under another key. It is compared
with D of the last ninety or so stretches: Student's t on m - 1 degrees of freedom, one-sided; a D up to 0 never fails.
Every series is judged by itself, so that ``across: batch`` (Holm 1979) shares the risk.

Compared are the series that are judged together: those that ``only`` leaves, and of a feed so large that it is read in
blocks (more than 4,000,000 cells of history and window), those of the same block. A swap between two blocks is told
only where another series of the block resembles the one that was delivered.

Unit: none; D is 0 where a window lies as near to another series as to its own.
Missing values: a value takes part where those before it that the model needs are there; nothing is closed up.
Minimum: two series, one cycle of the shortest season and 12 whitened values in the window, 8 stretches of history of
the window's length (20 at a risk of .001 or less) after the three cycles that a profile needs. A pass is undecided
where the profile of another series is so similar that a swap with it would not be found with probability .8. Of 2,000
series of twelve weeks of hours a day is compared in 12 s beside 3 s for the profiles; the time grows with the square.

Example::

    name: every meter is itself
    measure: identity
    stays: {like: history}
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from pydantic import BaseModel, ConfigDict

from sercheck.grid import Panel
from sercheck.measure import Measure, Measurement, Question, Reasons, Side, told_reasons
from sercheck.measures._past import NO_HISTORY, cell, counts
from sercheck.recent import has_profile, recent_past
from sercheck.reference import Pivot, detectable_reach
from sercheck.serial.arrays import Floats
from sercheck.serial.batch_statistics import batches
from sercheck.serial.identity import own_or_other, swap_size
from sercheck.serial.matched_filter import HIGHEST_ORDER
from sercheck.serial.window_t import count_windows, fewest_windows, window_t

FEWEST = 12
"""Whitened values that a sum of squares needs (as for a slip of the season)."""
ORDER_SHARE = 4
"""A window has at least so many values for each order of the model: each order costs one at its start."""
OBSERVED = 0.5
"""Share of a stretch's values that must be there for it to count (a plain half)."""


class IdentityFields(BaseModel):
    """No fields of its own."""

    model_config = ConfigDict(extra="forbid", frozen=True)


@dataclass(frozen=True)
class Above(Pivot):
    """A pivot that fails only above 0: there the window is nearer to another series."""

    def p_value(self, side: Side) -> Floats:
        p = super().p_value(side)
        return np.where((self.statistic <= 0) & ~np.isnan(p), 1.0, p) if side == "upper" else p

    def limit(self, side: Side, risk: Floats) -> Floats:
        limit = super().limit(side, risk)
        return np.maximum(limit, 0.0) if side == "upper" else limit


class Identity(Measure):
    """Keys swapped."""

    kinds: ClassVar[frozenset[str]] = frozenset({"like_history"})
    compares_series: ClassVar[bool] = True
    Fields: ClassVar[type[BaseModel]] = IdentityFields

    def run(self, panel: Panel, question: Question) -> Measurement:
        series, n = panel.window.shape
        reasons = Reasons((series, 1))
        known = (~np.isnan(panel.history)).sum(axis=1)
        fewest = fewest_windows(question.risk)
        reasons.add(cell(known) == 0, NO_HISTORY)
        reasons.add(series < 2, "one series only: there is none that it could be swapped with")
        short = n < max(min(panel.axis.lengths.values(), default=1), FEWEST)
        reasons.add(short, "the window is shorter than a cycle or 12 values: a longer one is needed")
        reasons.add(not has_profile(panel), "no season of which history holds 4 cycles: there is no profile to compare")
        reasons.add(panel.start < fewest * n, f"history holds fewer than {fewest} stretches of the window's {n} steps")
        if not series or (reasons.undecided).all():
            return _nothing(panel, reasons)
        return _compared(panel, question, reasons, fewest)


def _nothing(panel: Panel, reasons: Reasons) -> Measurement:
    unknown = np.full(reasons.index.shape, np.nan)
    return _told(panel, reasons, unknown, Above(unknown, unknown, unknown, unknown, unknown, unknown), None)


def _compared(panel: Panel, question: Question, reasons: Reasons, fewest: int) -> Measurement:
    recent = recent_past(panel, logs=False)
    n = recent.n
    model = recent.model(min(HIGHEST_ORDER, n // ORDER_SHARE))
    x, expected = _in_one_unit(recent.y, recent.expected, recent.scale)
    seen = own_or_other(batches(x, n), batches(expected, n), model)
    enough = seen.values >= max(FEWEST, OBSERVED * (n - int(model.order.max(initial=0))))
    d = np.where(enough, seen.d, np.nan)
    then, now = d[:, :-1], d[:, -1]
    centre, scale, df = window_t(then, now)
    m = count_windows(then)
    reasons.add(cell(~enough[:, -1]) > 0, f"gaps or a closed day leave fewer than {FEWEST} whitened values, or half")
    reasons.add(cell(m) < fewest, f"fewer than {fewest} of history's stretches can be compared: {fewest} are needed")
    with np.errstate(invalid="ignore"):
        reasons.add(~(cell(scale) > 0) | np.isnan(cell(now)), "the series, or history's profile of it, does not vary")
        usual = np.where(enough, seen.power, np.nan)[:, :-1]
        told = ~np.isnan(usual)
        usual = np.where(told, usual, 0.0).sum(axis=1) / np.maximum(told.sum(axis=1), 1)
        least = np.maximum(centre + detectable_reach(np.asarray(question.risk / len(x)), df) * scale, 0.0)
        alike = ~(swap_size(expected[:, -n:], model, usual) > least)
    unsure = Reasons(reasons.index.shape)
    unsure.add(
        cell(alike) > 0, "another series has so similar a profile that a swap with it would not be found in this window"
    )
    zero = np.where(np.isnan(cell(centre)), np.nan, 0.0)
    law = Above(cell(now), cell(centre), cell(scale), cell(df), np.maximum(cell(centre), zero), cell(scale))
    return _told(panel, reasons, cell(now), law, unsure)


def _in_one_unit(y: Floats, expected: Floats, scale: Floats) -> tuple[Floats, Floats]:
    """Both in one unit for all series, about one level: products of like values keep their digits."""
    exponent = np.frexp(scale)[1] - 1
    shift = (exponent - exponent.max(initial=-1100))[:, None].astype(np.int32)
    x, usual = np.ldexp(y, shift), np.ldexp(expected, shift)
    known = usual[~np.isnan(usual)]
    level = float(np.median(known)) if known.size else 0.0
    return x - level, usual - level


def _told(panel: Panel, reasons: Reasons, observed: Floats, law: Above, unsure: Reasons | None) -> Measurement:
    n, n_missing = counts(panel)
    texts, unsure_at = told_reasons(reasons, unsure)
    return Measurement(
        observed=observed,
        n=n,
        n_missing=n_missing,
        n_eff=np.full(n.shape, np.nan),
        upper=law,
        lower=None,
        undecided=reasons.index,
        reasons=texts,
        method="whitened sums of squares about the own and the nearest other profile, Student's t over history's",
        assumes=f"a swap among the {len(panel.values)} series that are judged together",
        unsure=unsure_at,
    )
