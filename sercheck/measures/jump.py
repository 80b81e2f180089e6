"""Does the level jump within the window?

Null hypothesis: one level throughout, rows depending on each other as those of history do (without history: as those of
the window itself do, memory being short).

Against history (``like: history``): K = max_k |S_k - (k/n) S_n|/√n, S_k the cumulative sums of the window's normal
scores in the series' own history (van der Waerden 1952), over ω, ω² = Σ w_jΛ_j² / Σ w_j from the cosine powers Λ_j² of
history's scores with the weights of cumulative sums, w_j = Σ_k |C_k(ω_j)|², C_k(t) = 1(t ≤ k) - k/n. p is the tail of
the largest deviation of a Brownian bridge (Ploberger and Krämer 1992), spread by χ² on (Σw)²/Σw² degrees of freedom.
A literal bound c asks whether a jump of c, put right at its most likely place, leaves another one: two witnesses of the
window alone, of whom the more careful counts: the self-normalized statistic (Shao and Zhang 2010) and K over the
long-run variance of an autoregression fitted after the best break is taken out (Burg 1975; Berk 1974).

Fixed cycles (``seasons``) are taken out first where history, or a window without history, holds at least four of them.

Unit: change of the mean at its most likely place, in the unit of the column (5 % of the rows at either end are left
out). Against history a change of scores is turned into the unit by history's quartile distance. A trend is found as a
jump too.
Missing values take no part and are never closed up.
Minimum: against history 24 rows and 8 stretches of history of the window's length (20 at a risk of .001 or less); a
literal bound 96 rows, 672 where the rows depend strongly on each other.

Example::

    name: no jump within a week
    measure: jump
    window: 7D
    stays: {like: history}
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from pydantic import BaseModel, ConfigDict

from sercheck.grid import Panel
from sercheck.measure import POWER, Measure, Measurement, Question, Reasons, Reference, Side
from sercheck.measures._past import (
    ask_history,
    ask_variety,
    cell,
    counts,
    measured,
    past,
    quartile_scale,
    score_spectrum,
    taken_out,
    variance,
    window_scores,
    without,
)
from sercheck.measures._witnesses import ask_alone, own_cycles_out, sides
from sercheck.reference import Larger
from sercheck.serial.arrays import Floats
from sercheck.serial.change_point import (
    bridge_quantile,
    bridge_tail,
    cusum,
    most_likely_break,
    self_normalized,
    self_normalized_quantile,
    self_normalized_tail,
)
from sercheck.serial.echoed_run import echoed_long_run
from sercheck.serial.long_run import bridge_weights
from sercheck.serial.own_models import OwnModels
from sercheck.serial.risk import t_quantile


class JumpFields(BaseModel):
    """No fields of its own."""

    model_config = ConfigDict(extra="forbid", frozen=True)


class Jump(Measure):
    """Change of level at its most likely place."""

    kinds: ClassVar[frozenset[str]] = frozenset({"below", "above", "between", "like_history"})
    Fields: ClassVar[type[BaseModel]] = JumpFields

    def run(self, panel: Panel, question: Question) -> Measurement:
        return _literal(panel, question) if question.stays.literal else _like_history(panel, question)


@dataclass(frozen=True)
class Excursion:
    """A statistic that is large for a jump of either sign beyond the bound; all arrays have shape (S, 1).

    The judge looks at one sign at a time: on the side of the jump's sign p is half the tail, on the other the rest.
    The limit is the excess over the bound, scaled as far as the statistic would have to change to reach its own.

    Attributes:
        statistic: not negative, in proportion to the excess of the observed change over the bound.
        excess: observed change less the bound, in the unit of the rows.
        bound: in the unit of the rows.
        tail: probability of a larger statistic.
        quantile: its inverse.
        noise: size of a change in the unit for one unit of the statistic, for a jump in the middle.
        spread: standard deviation of the statistic when there is a jump, beside its own size over √(2 df).
        df: degrees of freedom of the statistic's scale.
        naive: statistic had the rows been independent, or None.
    """

    statistic: Floats
    excess: Floats
    bound: Floats
    tail: Callable[[Floats], Floats]
    quantile: Callable[[Floats], Floats]
    noise: Floats
    spread: float
    df: Floats
    naive: Floats | None = None

    @property
    def standard_error(self) -> Floats:
        return np.full(self.statistic.shape, np.nan)

    def p_value(self, side: Side) -> Floats:
        half = self.tail(self.statistic) / 2
        return np.where((self.excess >= 0) == (side == "upper"), half, 1 - half)

    def _limit(self, side: Side, critical: Floats, statistic: Floats) -> Floats:
        with np.errstate(divide="ignore", invalid="ignore"):
            step = np.abs(self.excess) * critical / statistic
        return np.asarray(self.bound + (step if side == "upper" else -step), dtype=np.float64)

    def limit(self, side: Side, risk: Floats) -> Floats:
        return self._limit(side, self.quantile(np.minimum(2 * risk, 1.0)), self.statistic)

    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        if self.naive is None:
            return np.full(np.broadcast(self.statistic, risk).shape, np.nan)
        critical = bridge_quantile(np.minimum(2 * risk, 1.0), np.full(self.statistic.shape, np.inf))
        return self._limit(side, critical, self.naive)

    def detectable(self, side: Side, risk: Floats) -> Floats:
        """The jump in the middle of the window at which the statistic passes its critical value often enough."""
        del side
        critical = self.quantile(np.minimum(2 * risk, 1.0))
        scatter = np.sqrt(self.spread**2 + critical**2 / (2 * self.df))
        return np.asarray(self.noise * (critical + t_quantile(POWER, np.inf) * scatter), dtype=np.float64)


SELF = 0.3
"""√V of the self-normalizer that four of five windows with a jump in the middle stay below, in long-run deviations
(simulated for white noise and AR(1) at .6, 96 to 336 rows)."""
FEWEST_STRONG = 672
"""Rows that a literal bound needs where lag-one memory may reach .9: at 336 it fails at 7 times a risk of .001."""
STRONG = 0.7
"""Fitted memory from which it may; taking the best break out lowers the fit (.1 at 168 rows, simulated)."""
FARTHEST = 1e100
"""Jump, in units of the rows' scale, beyond which a bound is as good as endless and squares would overflow."""
MIDDLE = 0.5
"""Standard deviation of a Brownian bridge in its middle."""


def _like_history(panel: Panel, question: Question) -> Measurement:
    told, reasons = past(panel), Reasons((len(past(panel).n), 1))
    ask_history(reasons, told, question.risk, "a jump")
    ask_variety(reasons, told, question.risk)
    scores, spectrum = window_scores(panel), score_spectrum(panel)
    found, walk = most_likely_break(scores), cusum(scores)
    if spectrum.steps > 1 and told.steps > 1:
        weights = bridge_weights(told.steps, spectrum.steps)
        omega = np.sqrt(spectrum.weighted(weights))
        df = np.full((len(walk), 1), weights.sum() ** 2 / (weights**2).sum())
    else:
        omega, df = np.full(len(walk), np.nan), np.full((len(walk), 1), np.nan)
    reasons.add(~(cell(omega) > 0), "history does not vary: there is no sampling error to allow for")
    reasons.add(np.isnan(found.change)[:, None], "the window is too short to place a jump in it")
    unit = quartile_scale(panel)
    with np.errstate(divide="ignore", invalid="ignore"):
        reference = Excursion(
            statistic=cell(walk / omega),
            excess=cell(found.change * unit),
            bound=np.zeros(df.shape),
            tail=lambda k: bridge_tail(k, df),
            quantile=lambda risk: bridge_quantile(risk, df),
            noise=cell(4 * omega * unit / np.sqrt(told.n)),
            spread=MIDDLE,
            df=df,
            naive=cell(walk / np.sqrt(spectrum.variance)),
        )
        worth = spectrum.variance / omega**2
    return measured(
        panel,
        reasons,
        reference.excess,
        (reference, reference),
        n_eff=counts(panel)[0] * cell(worth),
        method="cumulative sums of normal scores (van der Waerden 1952; Ploberger and Krämer 1992)",
        assumes="stationary history" + without(told),
    )


def _literal(panel: Panel, question: Question) -> Measurement:
    """The window less a jump of the bound's size at the most likely place: is there another one?"""
    told, reasons = past(panel), Reasons((len(past(panel).n), 1))
    values, taken = own_cycles_out(panel)
    found = most_likely_break(values)
    after = np.arange(values.shape[1]) >= np.where(found.place < 0, values.shape[1], found.place)[:, None]
    left = values - np.where(after, found.change[:, None], 0.0)
    run = echoed_long_run(OwnModels(left))
    ask_alone(reasons, panel, question, run, "a jump", FEWEST_STRONG, STRONG)
    reasons.add(np.isnan(found.change)[:, None], "the window is too short to place a jump in it")
    n, scale = np.maximum(told.n, 1), told.scale
    endless = np.full((len(n), 1), np.inf)

    def against(bound: float) -> Reference:
        shift = np.clip(bound / scale, -FARTHEST, FARTHEST)[:, None]
        moved = values - np.where(after, shift, 0.0)
        walk = cusum(moved)
        excess, unit = cell(found.change * scale - bound), np.full(endless.shape, bound)
        with np.errstate(divide="ignore", invalid="ignore"):
            noise = 4 * np.sqrt(run.variance / n) * scale
            modelled = Excursion(
                cell(walk / np.sqrt(run.variance)), excess, unit,
                lambda k: bridge_tail(k, endless), lambda risk: bridge_quantile(risk, endless),
                cell(noise), MIDDLE, endless, cell(walk / np.sqrt(variance(left))),
            )  # fmt: skip
            free = Excursion(
                cell(np.sqrt(self_normalized(moved))), excess, unit,
                lambda g: self_normalized_tail(g**2, told.steps),
                lambda risk: np.sqrt(self_normalized_quantile(risk, told.steps)),
                cell(noise) * SELF, 0.0, endless,
            )  # fmt: skip
        return Larger(modelled, free)

    with np.errstate(divide="ignore", invalid="ignore"):
        worth = variance(left) / run.variance
    return measured(
        panel,
        reasons,
        cell(found.change * scale),
        sides(question, against),
        n_eff=counts(panel)[0] * cell(worth),
        method="self-normalized and modelled cumulative sums (Shao and Zhang 2010; Ploberger and Krämer 1992; Berk "
        "1974)",
        assumes="short memory" + taken_out(taken),
    )
