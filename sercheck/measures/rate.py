"""Share of rows that are missing, zero, equal to the last, or outside a range.

Question: is the share of such rows what the author allows, or what it was in history?

Null hypothesis: the share is the bound (or history's), and such rows come in clusters as history and batch together
show.

Formula: with k of n rows marked and τ the rows that weigh as one independent row, from history and batch together
(Geyer's initial monotone sequence, lags below a quarter; or what the sums over cycles show, from 8 cycles on, where
that is larger; the cycle is the shortest declared season, or a day where none is declared), k_e = k/τ and n_e = n/τ.
Against a share p0: p = I_{p0}(k_e, n_e − k_e + 1), the exact binomial tail. Against history with K of N: mid-p of the
conditional binomial, ½ [I_w(k_e, K_e + 1) + I_w(k_e + 1, K_e)] with w = n/(n + N). `missing` and `outside` look only
for more of them when they stay like history; the others look both ways.

Source: Clopper and Pearson 1934; Korn and Graubard 1998; Geyer 1992; Burg 1975; Przyborowski and Wilenski 1940.

Unit: share of rows, 0 to 1.

Missing values: `missing` is the share of the delivered rows that have no usable value (rows that did not come are for
`completeness`). All others: share of the rows that have a value; `equal_to_last` needs a value in the row before too.

Minimum size: none for a failure. A pass against a literal share is undecided when fewer than 3 effective rows of the
rarer kind are expected at it (a bound of 0 or 1 is exact). With less history than 8 times the window the law is
widened, since τ comes from little more than the window itself: an autoregression of the marks is a second witness, the
correlation of neighbouring cycles is taken one standard error stronger than it looks, and a failure on the side where a
rare kind of row would be too rare needs ten runs of it. Taken for granted: no cycle but the shortest declared one (a
day where none is) ties such rows together; .05 to .18 fail at a risk of .05 where a much longer one does.

One long burst cannot be seen by a rate (p is not much below n/(n + N)): put a rule on the longest run (`repeats`)
beside it.

None at all: `below: 0` asks for no such row. It is exact, takes any number of rows and holds at the first one: a range
check, as in the second example. A small bound such as `below: 0.01` says instead that a few are healthy, and needs
300 independent rows to tell.

Example::

    - name: few readings are empty
      measure: rate
      of_rows: missing
      window: 7D
      stays: {below: 0.05}
    - name: no reading outside what the meter can show
      measure: rate
      of_rows: {outside: [0, 500]}
      stays: {below: 0}
"""

from __future__ import annotations

from typing import Literal

import numpy as np
from pydantic import BaseModel, ConfigDict, FiniteFloat, model_validator

from sercheck.grid import Panel
from sercheck.measure import POWER, Measure, Measurement, Question, Reasons, Reference, Side, told_reasons
from sercheck.measures._cycle import clusters_assumed, shortest_cycle
from sercheck.measures._exact import sides
from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.rates import AgainstPast, AgainstShare, ShareLaw, against_past, against_share, quotient
from sercheck.serial.repeats import equal_to_earlier

STRICT = ConfigDict(extra="forbid", frozen=True)


class Outside(BaseModel):
    """Rows under the first or over the second number."""

    model_config = STRICT
    outside: tuple[FiniteFloat, FiniteFloat]

    @model_validator(mode="after")
    def _ordered(self) -> Outside:
        if self.outside[0] > self.outside[1]:
            raise ValueError("the smaller number first in 'outside'")
        return self


class Above(BaseModel):
    """Rows over a number."""

    model_config = STRICT
    above: FiniteFloat


class Below(BaseModel):
    """Rows under a number."""

    model_config = STRICT
    below: FiniteFloat


class Fields(BaseModel):
    """Which rows are counted."""

    model_config = STRICT
    of_rows: Literal["missing", "zero", "equal_to_last"] | Outside | Above | Below


class Rate(Measure):
    """Share of rows of a kind."""

    of_missing = True
    kinds = frozenset({"below", "above", "between", "like_history"})
    span = (0.0, 1.0)
    Fields = Fields

    def run(self, panel: Panel, question: Question) -> Measurement:
        assert isinstance(question.fields, Fields)
        marks = marked(panel, question.fields)
        if question.stays.literal:
            return _literal(panel, question, marks)
        return _like_history(panel, question, marks)


def marked(panel: Panel, fields: Fields) -> Floats:
    """Mark the rows of the kind: 1, 0, or NaN where a row takes no part, shape (S, T)."""
    values, kind = panel.values, fields.of_rows
    empty = np.isnan(values)
    if kind == "missing":
        return np.where(panel.delivered, empty, np.nan)
    if kind == "equal_to_last":
        return equal_to_earlier(values)
    return np.where(empty, np.nan, _of_kind(values, kind))


def _of_kind(values: Floats, kind: str | Outside | Above | Below) -> Bools:
    if isinstance(kind, Outside):
        return np.asarray((values < kind.outside[0]) | (values > kind.outside[1]))
    if isinstance(kind, Above):
        return np.asarray(values > kind.above)
    if isinstance(kind, Below):
        return np.asarray(values < kind.below)
    return np.asarray(values == 0)


def _literal(panel: Panel, question: Question, marks: Floats) -> Measurement:
    low, high = question.stays.low, question.stays.high
    season = shortest_cycle(panel)
    laws: dict[Side, AgainstShare] = {}
    if high is not None:
        laws["upper"] = against_share(marks, panel.start, high, POWER, season=season)
    if low is not None:
        laws["lower"] = against_share(marks, panel.start, low, POWER, season=season)
    law = laws.get("upper") or laws["lower"]
    reasons, unsure = _no_rows(law, question), Reasons(law.rows.shape)
    for side, told in laws.items():
        share = float(low if side == "lower" else high)  # type: ignore[arg-type]  # the side is there: it has a number
        unsure.add(
            told.blind.get(side, np.zeros(law.rows.shape, dtype=bool)),
            "the rarer kind of rows came in fewer than 10 runs, which do not tell how it clusters: pass --history",
        )
        unsure.add(
            told.too_few & (0 < share < 1),
            _says_nothing(share, side),
        )
        unsure.add(
            np.isnan(told.limit(side, np.asarray(question.risk / len(laws)))) & (0 < share < 1),
            f"no share of these rows would be beyond chance at a risk of {question.risk:g}: judge a longer window",
        )
    upper, lower = sides(question.stays, laws.get("upper", law), laws.get("lower", law))
    return _measurement(
        panel, law, (reasons, unsure), upper, lower,
        "exact binomial on effective sizes (Clopper and Pearson 1934; Korn and Graubard 1998; Geyer 1992)",
        clusters_assumed(panel, "clusters of such rows", "history and batch"),
    )  # fmt: skip


def _says_nothing(share: float, side: Side) -> str:
    """Why a pass is undecided, and what to do; the share seen and what its rows count for are in the record."""
    rows = 3 / max(min(share, 1 - share), 1e-9)
    none = "`below: 0` asks for none at all" if side == "upper" else "`above: 1` asks for nothing else"
    return (
        f"such rows come in so few clusters that fewer than 3 effective rows of the rarer kind are expected at a share "
        f"of {share:g}, so that a pass says nothing (`observed` is the share seen, `n_eff` the observations that it "
        f"counts for): judge a longer window ({rows:.0f} rows if they did not cluster); {none} and is exact; `repeats` "
        f"bounds the longest run"
    )


def _like_history(panel: Panel, question: Question, marks: Floats) -> Measurement:
    law = against_past(marks, panel.start, POWER, season=shortest_cycle(panel))
    reasons = _no_rows(law, question)
    reasons.add(panel.start == 0, "no history: pass --history or learn a baseline")
    reasons.add(law.past_rows == 0, "history has no row to compare with: pass a longer --history")
    both = _looks_both_ways(question)
    reasons.add(
        ~_reachable(law, question.risk, both=both),
        f"no share of these rows would be beyond chance at a risk of {question.risk:g}: judge a longer window",
    )
    return _measurement(
        panel, law, (reasons, Reasons(law.rows.shape)), law, law if both else None,
        "mid-p of the conditional binomial on effective sizes (Przyborowski and Wilenski 1940; Geyer 1992)",
        "stationary history; " + clusters_assumed(panel, "clusters of such rows", "history and batch"),
    )  # fmt: skip


def _looks_both_ways(question: Question) -> bool:
    assert isinstance(question.fields, Fields)
    kind = question.fields.of_rows
    return kind != "missing" and not isinstance(kind, Outside)


def _reachable(law: AgainstPast, risk: float, *, both: bool) -> Bools:
    level = np.asarray(risk / 2 if both else risk)
    within = ~np.isnan(law.limit("upper", level))
    return within | ~np.isnan(law.limit("lower", level)) if both else within


def _no_rows(law: ShareLaw, question: Question) -> Reasons:
    assert isinstance(question.fields, Fields)
    reasons = Reasons(law.rows.shape)
    missing = question.fields.of_rows == "missing"
    reasons.add(
        law.rows == 0,
        "no row of the window was delivered: at least one is needed"
        if missing
        else "no row of the window has a usable value: at least one is needed",
    )
    return reasons


def _measurement(
    panel: Panel,
    law: ShareLaw,
    reasons: tuple[Reasons, Reasons],
    upper: Reference | None,
    lower: Reference | None,
    method: str,
    assumes: str,
) -> Measurement:
    texts, unsure_at = told_reasons(*reasons)
    missing: Ints = np.count_nonzero(np.isnan(panel.window), axis=1)[:, None]
    return Measurement(
        observed=quotient(law.hits, law.rows),
        n=law.rows.astype(np.int64),
        n_missing=missing,
        n_eff=law.rows / law.tau,
        upper=upper,
        lower=lower,
        undecided=reasons[0].index,
        reasons=texts,
        method=method,
        assumes=assumes,
        unsure=unsure_at,
    )
