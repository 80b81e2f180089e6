"""Simulated feeds in which nothing is wrong, what is asked of them, and how often they may fail; for ``calibration``.

Cells are data: a further measure is a further ``Question``. Depends on numpy and scipy only.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field

import numpy as np
from scipy import special, stats

DAY, PAST = 24, 90
RISKS = (0.05, 0.01, 0.001)
TENTH = float(special.ndtri(0.9))


@dataclass(frozen=True)
class Process:
    """A simulated feed in which nothing is wrong, and what is true of it (of its noise where it has a fixed cycle).

    Attributes:
        kind: what ``processes.make`` calls it.
        rho: autocorrelation at a lag.
        deviation: standard deviation.
        mean: expectation.
        location: value whose normal score is 0.
        tenth: value that a tenth of the rows is above; None where it is not known.
        light: no value is far out.
        season: the cycle of a day is ``fixed``, or ``evolves`` (both are declared in the rule file), or None.
    """

    kind: str
    rho: Callable[[int], float]
    deviation: float = 1.0
    mean: float = 0.0
    location: float = 0.0
    tenth: float | None = None
    light: bool = True
    season: str | None = None


def _autoregression(phi: float) -> Process:
    deviation = (1 - phi**2) ** -0.5
    return Process(f"ar{phi}", lambda lag: phi**lag, deviation, tenth=deviation * TENTH)


def _seasonal(season: str | None) -> Process:
    """(1 - .4 B)(1 - .6 B^24) x = e; autocovariances from the weights that an innovation has later on."""
    psi = np.where(np.arange(4000) % DAY == 0, 0.6 ** (np.arange(4000) / DAY), 0.0)
    for t in range(1, len(psi)):
        psi[t] += 0.4 * psi[t - 1]
    deviation = float(np.sqrt(psi @ psi))
    return Process(
        "seasonal_ar",
        lambda lag: float(psi[lag:] @ psi[: len(psi) - lag] / (psi @ psi)),
        deviation,
        tenth=deviation * TENTH,
        season=season,
    )


def _tenth_of_cycle() -> float:
    """The value that a tenth of the rows of ``seasonal`` is above, all hours taken together."""
    hours, values = np.arange(DAY), np.linspace(0, 15, 150_001)
    cycle = 4 * np.sin(2 * np.pi * hours / DAY) + 2 * (hours < 6)
    below = np.mean([special.ndtr((values - hour) / 1.25) for hour in cycle], axis=0)
    return float(np.interp(0.9, below, values))


PROCESSES = {
    "white": Process("white", lambda lag: 0.0, tenth=TENTH),
    "AR .6": _autoregression(0.6),
    "AR .9": _autoregression(0.9),
    "MA(1)": Process("ma", lambda lag: 0.6 / 1.36 * (lag == 1), 1.36**0.5, tenth=1.36**0.5 * TENTH),
    "profile + AR .6": Process(
        "seasonal", lambda lag: 0.6**lag, 1.25, mean=0.5, location=0.5, tenth=_tenth_of_cycle(), season="fixed"
    ),
    "seasonal AR": _seasonal(None),
    "seasonal AR, declared": _seasonal("evolves"),
    "t3": Process("t3", lambda lag: 0.0, 3**0.5, tenth=float(stats.t.ppf(0.9, 3)), light=False),
    "GARCH, AR .6": Process("garch", lambda lag: 0.6**lag, 1.25, light=False),
    "lognormal of AR .6": Process(  # the logarithm has variance .8² · 1.25² = 1
        "lognormal", lambda lag: float(np.expm1(0.6**lag) / np.expm1(1.0)), (np.expm1(1.0) * np.e) ** 0.5,
        mean=np.e**0.5, location=1.0, tenth=float(np.exp(TENTH)), light=False,
    ),
}  # fmt: skip

ALONE, BESIDE, LIKE = "bound, no history", "bound, history", "like history"


@dataclass(frozen=True)
class Question:
    """A rule, and the true value that its bound is set to.

    Attributes:
        rule: the keys of the rule beside name, risk and ``stays``.
        truth: true value; the second argument is the form.
        forms: of ``ALONE``, ``BESIDE``, ``LIKE``.
        fits: whether the question is to be asked of this process in this form with windows of n rows.
        target: for each form the largest share of failures in multiples of the risk, for each risk, and the fewest
            rows from which that holds.
        least: for each form the smallest share likewise, where one is asked.
    """

    rule: Callable[[Process], dict[str, object]]
    truth: Callable[[Process, str], float] = lambda process, form: float("nan")
    forms: tuple[str, ...] = (ALONE, LIKE)
    fits: Callable[[Process, str, int], bool] = lambda process, form, n: True
    target: Mapping[str, tuple[Mapping[float, float], int]] = field(default_factory=dict)
    least: Mapping[float, float] = field(default_factory=dict)


def _times(five: float, one: float, tenth: float) -> dict[float, float]:
    return dict(zip(RISKS, (five, one, tenth), strict=True))


SHORT, LONG = (_times(2.0, 2.2, 2.7), 24), (_times(1.2, 1.6, 2.0), 96)
LAGS = (_times(1.3, 1.7, 3.0), 168)
SPREADS = (_times(1.5, 1.5, 2.6), 96)
RATES = (_times(1.6, 1.6, 1.6), 24)
"""Largest shares of false alarms that count as healthy, in multiples of the risk, and the fewest rows."""


def _lag(measure: str, lag: int, truth: Callable[[Process], float]) -> Question:
    def rule(process: Process) -> dict[str, object]:
        return {"measure": measure, "lag": lag}

    def fits(process: Process, form: str, n: int) -> bool:
        return form != BESIDE or process.season == "fixed"  # history matters to a bound only by its profile

    targets = dict.fromkeys((ALONE, BESIDE, LIKE), LAGS)
    return Question(rule, lambda process, form: truth(process), (ALONE, BESIDE, LIKE), fits, targets)


def _partial(process: Process, lag: int) -> float:
    one, two = process.rho(1), process.rho(2)
    return one if lag == 1 else (two - one**2) / (1 - one**2)


def _of_season(measure: str, *, form: str, target: tuple[Mapping[float, float], int]) -> Question:
    def fits(process: Process, form: str, n: int) -> bool:
        return process.season is None if form == ALONE else process.season is not None

    return Question(
        lambda process: {"measure": measure, "season": "day" if process.season else DAY},
        lambda process, form: process.rho(DAY), (form,), fits, {form: target},
    )  # fmt: skip


QUESTIONS = {
    "level": Question(
        lambda process: {"measure": "level"},
        lambda process, form: process.mean if form == ALONE else process.location,
        (ALONE, BESIDE, LIKE),
        target={ALONE: (_times(1.3, 1.3, 2.0), 336), BESIDE: LONG, LIKE: LONG},
        least=_times(0.7, 0.5, 0.0),
    ),
    "spread": Question(
        lambda process: {"measure": "spread", "tails": "light" if process.light else "unknown"},
        lambda process, form: process.deviation,
        (ALONE, BESIDE, LIKE),
        lambda process, form, n: form == LIKE or (process.light and (form == BESIDE or n >= 336)),
        dict.fromkeys((ALONE, BESIDE, LIKE), SPREADS),
    ),
    "rate": Question(
        lambda process: {"measure": "rate", "of_rows": {"above": process.tenth}},
        lambda process, form: 0.1,
        (ALONE, BESIDE, LIKE),
        lambda process, form, n: process.tenth is not None,
        dict.fromkeys((ALONE, BESIDE, LIKE), RATES),
    ),
    "autocorrelation 1": _lag("autocorrelation", 1, lambda process: process.rho(1)),
    "autocorrelation 6": _lag("autocorrelation", 6, lambda process: process.rho(6)),
    "partial_autocorrelation 1": _lag("partial_autocorrelation", 1, lambda process: _partial(process, 1)),
    "partial_autocorrelation 2": _lag("partial_autocorrelation", 2, lambda process: _partial(process, 2)),
    "seasonal_lag": _of_season("seasonal_lag", form=ALONE, target=LAGS),
    "seasonal_lag, amplitude": _of_season("seasonal_lag", form=LIKE, target=(_times(1.6, 2.0, 3.0), 24)),
    "season_phase": _of_season("season_phase", form=LIKE, target=LAGS),
}
"""What is asked of windows of many rows. One more measure is one more entry here."""

RECENT = {
    "level": Question(lambda process: {"measure": "level"}, forms=(LIKE,), target={LIKE: SHORT}),
    "spread": Question(lambda process: {"measure": "spread"}, forms=(LIKE,), target={LIKE: SHORT}),
    "steps": Question(
        lambda process: {"measure": "autocorrelation", "lag": 1, "after": "difference"},
        forms=(LIKE,), target={LIKE: SHORT},
    ),
    "rate": Question(
        lambda process: {"measure": "rate", "of_rows": {"above": process.tenth}}, forms=(LIKE,), target={LIKE: RATES}
    ),
    "amplitude": _of_season("seasonal_lag", form=LIKE, target=(_times(1.6, 2.0, 3.0), 24)),
    "phase": _of_season("season_phase", form=LIKE, target=SHORT),
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
        return RECENT if (self.n, self.windows) == (DAY, PAST) else QUESTIONS

    @property
    def forms(self) -> tuple[str, ...]:
        """Forms that this much history allows."""
        return (BESIDE, LIKE) if self.windows else (ALONE,)
