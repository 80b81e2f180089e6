"""Is the level of the series where it should be?

Null hypothesis: the window's level is the bound, and rows depend on each other as those of history do (with a literal
bound and no history: as those of the window itself do, memory being short).

Against history (``like: history``) every value is replaced by its normal score in the series' own history (van der
Waerden 1952), which takes away the power of heavy tails. T = (mean score of the window - mean score of history) / SE on
df degrees of freedom, SE² = V (1 + n/N), V = (1/n) Σ w_j Λ_j² / Σ w_j from the cosine powers Λ_j² of history's scores,
w_j = [sin(nω_j/2) / (n sin(ω_j/2))]², df = (Σ w)²/Σ w²: overlapping batch means (Meketon and Schmeiser 1984; Welch
1987). ``of_the: mean`` uses the values themselves and is about the arithmetic mean; heavy tails then cost its accuracy.

A literal bound with history: SE² = V; a bound outside all of history's values is compared with the mean. A literal
bound without history is about the mean and asks two witnesses, of whom the more careful counts: an autoregressive
long-run variance (Burg 1975; Berk 1974; degrees of freedom after Satterthwaite 1946), and the mean of the first
.41 n^(2/3) cosine powers (Lazarus, Lewis, Stock and Watson 2018). Short memory and values without a long tail on one
side are then taken for granted: of 336 rows of the exponential of an autoregression .10/.035/.009 fail for too low a
mean at a risk of .05/.01/.001 (with history, or after a logarithm, they do not).
A cycle that evolves is allowed for by its echo in the innovations: with one of 24 rows that nobody declared,
.05/.013/.002 fail in 168 and in 336 rows; one that is declared is taken out as if it stayed the same, and .09/.03 fail.
A level that wanders more slowly than the window is long is not: where half of the variance has a memory of 200 rows,
.32/.24/.17 of 168 rows fail. Only history shows that.

Fixed cycles (``seasons``) are taken out first where history, or a window without history, holds at least four of them.

Unit: the unit of the column. ``location`` tells the value in history whose score is the window's mean score (for a
symmetric feed the mean, for a skewed one nearer to the median).
Missing values take no part and are never closed up; the gaps of the window enter the variance.
Minimum: 24 rows and 8 stretches of history of the window's length (20 at a risk of .001 or less); a literal bound
without history 96 rows, 336 where the rows depend strongly on each other. Undecided when one value makes up more than
80 % of the rows (50 % at a risk of .001 or less).

Example::

    name: level as usual
    measure: level
    stays: {like: history}
"""

from __future__ import annotations

from typing import ClassVar, Literal

import numpy as np
from pydantic import BaseModel, ConfigDict

from sercheck.grid import Panel
from sercheck.measure import Measure, Measurement, Question
from sercheck.measures._location import location_with_history
from sercheck.measures._past import combined, mostly_beyond, past, varied
from sercheck.measures._witnesses import mean_alone
from sercheck.recent import enough as recent_enough
from sercheck.recent import recent_measurement, recent_past
from sercheck.serial.window_t import fewest_windows


class LevelFields(BaseModel):
    """``of_the``: the robust location (default) or the arithmetic mean."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    of_the: Literal["location", "mean"] = "location"


class Level(Measure):
    """Location or mean of the window."""

    kinds: ClassVar[frozenset[str]] = frozenset({"below", "above", "between", "like_history"})
    weight: ClassVar[float] = 0.25  # measured on real feeds: events and weather move a level 3 to 4.5 times as often
    Fields: ClassVar[type[BaseModel]] = LevelFields

    def run(self, panel: Panel, question: Question) -> Measurement:
        fields = question.fields
        assert isinstance(fields, LevelFields)
        enough = past(panel).stretches >= fewest_windows(question.risk)
        if not question.stays.literal:
            enough = np.ones_like(enough)
        raw = fields.of_the == "mean"
        if question.stays.kind == "like_history" and not raw:
            return combined(
                mostly_beyond(panel),
                lambda: location_with_history(panel, question, raw=True),
                lambda: _like_history(panel, question),
            )
        return combined(
            enough,
            lambda: location_with_history(panel, question, raw=raw),
            lambda: mean_alone(panel, question),
        )


def _like_history(panel: Panel, question: Question) -> Measurement:
    """By the recent past where there is enough of it, else by history at large."""
    return combined(
        recent_enough(panel),
        lambda: varied(
            recent_measurement(panel, recent_past(panel, logs=not question.together).level()), panel, question.risk
        ),
        lambda: location_with_history(panel, question, raw=False),
    )
