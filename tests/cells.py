"""What is asked of the simulated feeds, and how often healthy ones may fail; for ``calibration``.

Cells are data: a further measure is a further ``Question``. Depends on numpy and ``simulated`` only.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field

import numpy as np

if __package__:
    from tests.processes import SLOPE
    from tests.simulated import DAY, NAMED, PROCESSES, WEEK, Process
else:
    from processes import SLOPE
    from simulated import DAY, NAMED, PROCESSES, WEEK, Process

__all__ = ["DAY", "NAMED", "PROCESSES", "WEEK", "Process"]

PAST = 90
RISKS = (0.05, 0.01, 0.001)
ALONE, BESIDE, LIKE = "bound, no history", "bound, history", "like history"


@dataclass(frozen=True)
class Question:
    """A rule, and the true value that its bound is set to.

    Attributes:
        rule: the keys of the rule beside name, risk and ``stays``.
        truth: true value; the second argument is the form, the third the rows of the window.
        forms: of ``ALONE``, ``BESIDE``, ``LIKE``.
        fits: whether the question is to be asked of this process in this form with windows of n rows.
        target: for each form the largest share of failures in multiples of the risk, for each risk, and the fewest
            rows from which that holds.
        least: for each form the smallest share likewise, where one is asked.
        sides: which literal bounds are asked.
        significance: the literal bound is a significance, so that it is the risk.
        known: the risks that can be asked for.
        size: true effective size from mean and variance of what is observed, where records tell one.
    """

    rule: Callable[[Process], dict[str, object]]
    truth: Callable[[Process, str, int], float] = lambda process, form, n: float("nan")
    forms: tuple[str, ...] = (ALONE, LIKE)
    fits: Callable[[Process, str, int], bool] = lambda process, form, n: True
    target: Mapping[str, tuple[Mapping[float, float], int]] = field(default_factory=dict)
    least: Mapping[float, float] = field(default_factory=dict)
    sides: tuple[str, ...] = ("below", "above")
    significance: bool = False
    known: tuple[float, ...] = RISKS
    size: Callable[[Process, float, float], float] = lambda process, mean, variance: float("nan")

    @property
    def across(self) -> bool:
        """It looks at a second column."""
        return "with" in self.rule(PROCESSES["white"])


def _times(five: float, one: float, tenth: float) -> dict[float, float]:
    return dict(zip(RISKS, (five, one, tenth), strict=True))


SHORT, LONG = (_times(2.0, 2.2, 2.7), 24), (_times(1.2, 1.6, 2.0), 96)
LAGS = (_times(1.3, 1.7, 3.0), 168)
SPREADS = (_times(1.5, 1.5, 2.6), 96)
RATES = (_times(1.6, 1.6, 1.6), 24)
ALIKE = (_times(1.5, 1.7, 1.1), 96)
OTHERS = (_times(1.3, 1.7, 3.0), 96)
"""Largest shares of false alarms that count as healthy, in multiples of the risk, and the fewest rows.

``OTHERS`` is for measures that nobody set a target for: as careful as a correlation has to be.
"""


def _of_rows(process: Process, form: str, n: int) -> bool:
    """A literal bound on what has no fixed cycle or, with history, its noise."""
    return form == LIKE or process.season != "fixed"


def _of_noise(process: Process, form: str, n: int) -> bool:
    """A literal bound without history is about the noise where the window itself can show the cycle: four times."""
    return form != ALONE or all(length * 4 <= n for length in process.cycles.values())


def _lag(measure: str, lag: int, truth: Callable[[Process], float]) -> Question:
    def fits(process: Process, form: str, n: int) -> bool:
        # history matters to a bound only by its profile
        return _of_noise(process, form, n) and (form != BESIDE or process.season == "fixed")

    targets = dict.fromkeys((ALONE, BESIDE, LIKE), LAGS)
    return Question(
        lambda process: {"measure": measure, "lag": lag}, lambda process, form, n: truth(process),
        (ALONE, BESIDE, LIKE), fits, targets, size=lambda process, mean, variance: 1 / variance,
    )  # fmt: skip


def _partial(process: Process, lag: int) -> float:
    one, two = process.rho(1), process.rho(2)
    return one if lag == 1 else (two - one**2) / (1 - one**2)


def _of_season(measure: str, *, form: str, target: tuple[Mapping[float, float], int]) -> Question:
    def fits(process: Process, form: str, n: int) -> bool:
        if form == ALONE:
            return process.season is None
        return process.season is not None and len(process.cycles) == 1

    return Question(
        lambda process: {"measure": measure, "season": "day" if process.season else DAY},
        lambda process, form, n: process.rho(DAY), (form,), fits, {form: target},
        size=(lambda process, mean, variance: 1 / variance) if form == ALONE else Question.size,
    )  # fmt: skip


def _same(measure: str, target: tuple[Mapping[float, float], int] = OTHERS, **keys: object) -> Question:
    """A measure that is asked ``like: history`` only."""
    return Question(lambda process: {"measure": measure, **keys}, forms=(LIKE,), target={LIKE: target})


def _worth(process: Process, form: str, n: int) -> float:
    """N over 1 + 2Σρ, for short memory."""
    return n / (1 + 2 * sum(process.rho(lag) for lag in range(1, 400)))


def _differenced(process: Process) -> float:
    """Autocorrelation of the differences at lag 1."""
    if process.kind == "walk":
        return 0.0
    one, two = process.rho(1), process.rho(2)
    return (2 * one - 1 - two) / (2 * (1 - one))


def _three(target: tuple[Mapping[float, float], int]) -> dict[str, tuple[Mapping[float, float], int]]:
    return dict.fromkeys((ALONE, BESIDE, LIKE), target)


QUESTIONS = {
    "level": Question(
        lambda process: {"measure": "level"},
        lambda process, form, n: process.mean if form == ALONE or process.location is None else process.location,
        (ALONE, BESIDE, LIKE),
        lambda process, form, n: _of_noise(process, form, n) and not (form == BESIDE and process.location is None),
        target={ALONE: (_times(1.3, 1.3, 2.0), 336), BESIDE: LONG, LIKE: LONG},
        least=_times(0.7, 0.5, 0.0),
        size=lambda process, mean, variance: process.deviation**2 / variance,
    ),
    "spread": Question(
        lambda process: {"measure": "spread", "tails": "light" if process.light else "unknown"},
        lambda process, form, n: process.deviation,
        (ALONE, BESIDE, LIKE),
        lambda process, form, n: form == LIKE or (process.light and (form == BESIDE or n >= 336)),
        _three(SPREADS),
        size=lambda process, mean, variance: mean**2 / (2 * variance),
    ),
    "rate": Question(
        lambda process: {"measure": "rate", "of_rows": {"above": process.tenth}},
        lambda process, form, n: process.share,
        (ALONE, BESIDE, LIKE),
        lambda process, form, n: process.tenth is not None,
        _three(RATES),
        size=lambda process, mean, variance: process.share * (1 - process.share) / variance,
    ),
    "quantile": Question(
        lambda process: {"measure": "quantile", "q": 0.9},
        lambda process, form, n: float(process.tenth or 0),
        (ALONE, BESIDE, LIKE),
        lambda process, form, n: form == LIKE or (process.tenth is not None and not process.ties),
        {ALONE: RATES, BESIDE: RATES, LIKE: OTHERS},
    ),
    "autocorrelation 1": _lag("autocorrelation", 1, lambda process: process.rho(1)),
    "autocorrelation 6": _lag("autocorrelation", 6, lambda process: process.rho(6)),
    "partial_autocorrelation 1": _lag("partial_autocorrelation", 1, lambda process: _partial(process, 1)),
    "partial_autocorrelation 2": _lag("partial_autocorrelation", 2, lambda process: _partial(process, 2)),
    "seasonal_lag": _of_season("seasonal_lag", form=ALONE, target=LAGS),
    "seasonal_lag, amplitude": _of_season("seasonal_lag", form=LIKE, target=(_times(1.6, 2.0, 3.0), 24)),
    "season_phase": _of_season("season_phase", form=LIKE, target=LAGS),
    "steps": Question(
        lambda process: {"measure": "autocorrelation", "lag": 1, "after": "difference"},
        lambda process, form, n: _differenced(process),
        fits=lambda process, form, n: form == LIKE or process.season != "fixed",
        target=_three(LAGS),
    ),
    "autocorrelation 1, detrended": Question(
        lambda process: {"measure": "autocorrelation", "lag": 1, "after": "detrended"},
        lambda process, form, n: process.rho(1),
        (ALONE,),
        lambda process, form, n: process.kind == "trend",
        _three(LAGS),
    ),
    "trend": Question(
        lambda process: {"measure": "trend"},
        lambda process, form, n: SLOPE if process.kind == "trend" else 0.0,
        fits=lambda process, form, n: _of_noise(process, form, n) and (form == ALONE or process.kind != "trend"),
        target=_three(OTHERS),
    ),
    "jump": Question(
        lambda process: {"measure": "jump"}, lambda process, form, n: 0.0, fits=_of_noise, target=_three(OTHERS)
    ),
    "distribution": _same("distribution", ALIKE),
    "cross_correlation": Question(
        lambda process: {"measure": "cross_correlation", "with": "y", "lag": 0},
        lambda process, form, n: 0.0,
        fits=lambda process, form, n: form == ALONE and _of_noise(process, form, n),
        target=_three(OTHERS),
    ),
    "cross_correlation of a part": Question(
        lambda process: {"measure": "cross_correlation", "with": "z", "lag": 0},
        lambda process, form, n: 0.5**0.5,
        (BESIDE, LIKE),
        lambda process, form, n: form == LIKE or process.light,
        _three(OTHERS),
    ),
    "effective_size": Question(
        lambda process: {"measure": "effective_size"}, _worth,
        fits=lambda process, form, n: _of_noise(process, form, n) and (
            form == LIKE or (process.short and 0 < _worth(process, form, n) <= n + 1e-9)
        ),
        target=_three(LAGS),
    ),
    "stationarity": Question(
        lambda process: {"measure": "stationarity"}, fits=_of_rows, sides=("below",), significance=True,
        known=RISKS, target={LIKE: OTHERS, ALONE: (_times(1.0, 1.0, 1.0), 336)},
    ),
    "whiteness": Question(
        lambda process: {"measure": "innovations", "look": "whiteness"},
        fits=lambda process, form, n: form == LIKE or process.kind in ("white", "t3"),
        sides=("above",), significance=True, target=_three(LAGS),
    ),
    "innovations' variance": Question(
        lambda process: {"measure": "innovations", "look": "variance"}, lambda process, form, n: 1.0, (BESIDE, LIKE),
        target=_three(OTHERS),
    ),
    "roughness": _same("roughness"),
    "repeats, run": _same("repeats", look="run"),
    "repeats, share": _same("repeats", look="share"),
    "replay": _same("replay"),
    "count": Question(
        lambda process: {"measure": "count", "per": "6h"}, lambda process, form, n: 6 * (1 - process.lost),
        (BESIDE, LIKE), lambda process, form, n: bool(process.gaps), _three(OTHERS),
    ),
    "count, often": Question(
        lambda process: {"measure": "count", "per": "3h"}, lambda process, form, n: 3 * (1 - process.lost),
        (ALONE,), lambda process, form, n: bool(process.gaps) and n >= 288, _three(OTHERS),
    ),
    "completeness": Question(
        lambda process: {"measure": "completeness"}, forms=(LIKE,),
        fits=lambda process, form, n: bool(process.gaps), target=_three(RATES),
    ),
}  # fmt: skip
"""What is asked of windows of many rows. One more measure is one more entry here."""

UNASKED = {
    "identity": "compares the series of a panel with each other: tests/test_identity.py",
    "freshness": "an age is no estimate and gives no false alarm by chance",
    "spacing": "counts that are no estimates give no false alarm by chance",
}
"""Measures that no cell asks for, and why."""

RECENT = {
    "level": Question(lambda process: {"measure": "level"}, forms=(LIKE,), target={LIKE: SHORT}),
    "spread": Question(lambda process: {"measure": "spread"}, forms=(LIKE,), target={LIKE: SHORT}),
    "steps": Question(
        lambda process: {"measure": "autocorrelation", "lag": 1, "after": "difference"},
        forms=(LIKE,), target={LIKE: SHORT},
    ),
    "rate": Question(
        lambda process: {"measure": "rate", "of_rows": {"above": process.tenth}}, forms=(LIKE,),
        fits=lambda process, form, n: process.tenth is not None, target={LIKE: RATES},
    ),
    "amplitude": _of_season("seasonal_lag", form=LIKE, target=(_times(1.6, 2.0, 3.0), 24)),
    "phase": _of_season("season_phase", form=LIKE, target=SHORT),
    "innovations' variance": _same("innovations", SHORT, look="variance"),
    "roughness": _same("roughness", SHORT),
    "repeats, run": _same("repeats", SHORT, look="run"),
    "repeats, share": _same("repeats", SHORT, look="share"),
    "replay": _same("replay", SHORT),
    "distribution": _same("distribution", SHORT),
    "jump": _same("jump", SHORT),
    "trend": _same("trend", SHORT),
    "cross_correlation of a part": _same("cross_correlation", SHORT, **{"with": "z", "lag": 0}),
}  # fmt: skip
"""What is asked of one day against the last ninety."""


@dataclass(frozen=True)
class Group:
    """Cells that look at the same simulated series: one run of the gate for each block of series."""

    process: str
    n: int
    windows: int

    @property
    def questions(self) -> dict[str, Question]:
        """What is asked of it."""
        some = RECENT if (self.n, self.windows) == (DAY, PAST) else QUESTIONS
        only = PROCESSES[self.process].only
        return {name: question for name, question in some.items() if not only or name in only}

    @property
    def forms(self) -> tuple[str, ...]:
        """Forms that this much history allows."""
        return (BESIDE, LIKE) if self.windows else (ALONE,)


def true_size(question: Question, process: Process, mean: np.ndarray, variance: np.ndarray) -> np.ndarray:
    """Effective sizes as the observations of all simulated windows scatter; NaN where there is none."""
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.array([question.size(process, *each) for each in zip(mean, variance, strict=True)], dtype=float)
