"""One verdict for all series of a feed (``across: together``); depends on ``serial``, ``measure``, ``reference``.

Each series' statistic is put in standard deviations of its own recent past; their mean over the series is judged by
history's means of the same, so that correlation among the series is in the reference and a small change of all of them
is seen at once.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from sercheck.judge import Seen
from sercheck.measure import Measurement, Reasons
from sercheck.reference import Pivot
from sercheck.serial.recent import together

FEWEST = 16
"""Stretches of history with a mean, as for a single series."""

NOTHING = (
    "one verdict for all series needs a measure that is judged against the feed's recent past (like: history) and "
    "56 stretches of history of the window's length"
)


def pooled(parts: Sequence[Seen]) -> Seen:
    """The one measurement of all series that a rule was measured on (one value column).

    ``observed`` is the mean over the series in standard deviations of a single series' statistic; 0 is as usual.
    Undecided where no series has a recent past to be compared with.
    """
    first = parts[0]
    tables = [part.measurement.scores for part in parts if part.measurement.scores is not None]
    wide = max((table.shape[1] for table in tables), default=0)
    tables = [table for table in tables if table.shape[1] == wide]
    n, n_missing = (
        np.array([[sum(int(np.sum(getattr(part.measurement, name)[:, :1])) for part in parts)]], dtype=np.int64)
        for name in ("n", "n_missing")
    )
    reasons = Reasons((1, 1))
    nothing = np.full((1, 1), np.nan)
    pivot = Pivot(nothing, nothing, nothing, nothing, nothing, nothing)
    observed = nothing
    if tables:
        step = together(np.concatenate(tables))
        reasons.add(step.batches[:, None] < FEWEST - 7, f"fewer than {FEWEST} earlier batches to compare with")
        observed, centre = step.statistic[:, None], step.centre[:, None]
        scale = (step.scale / step.widen)[:, None]
        pivot = Pivot(observed, centre, scale, step.df[:, None], centre, step.scale[:, None])
        reasons.add(np.isnan(pivot.p_value("upper")), "too few series have a value, or the earlier batches do not vary")
    else:
        reasons.add(where=True, text=NOTHING)
    seen = first.measurement
    told = Measurement(
        observed=observed,
        n=n,
        n_missing=n_missing,
        n_eff=nothing,
        upper=None if tables and seen.upper is None else pivot,
        lower=None if tables and seen.lower is None else pivot,
        undecided=reasons.index,
        reasons=tuple(reasons.texts),
        method=f"mean over series, in standard deviations; {seen.method}",
        assumes=seen.assumes,
        lags=seen.lags[:1] if seen.lags else None,
        season=seen.season,
    )
    known = [part.whole for part in parts if part.whole is not None]
    best = max(known, key=lambda whole: whole[1]) if known else None
    return replace(
        first,
        keys=np.array([None], dtype=object),
        measurement=told,
        cause=None if best is None else np.array([best[0]], dtype=object),
        support=None if best is None else np.array([best[1]]),
    )
