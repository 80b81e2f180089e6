"""Simulated feeds in which nothing is wrong, and what is true of them; for ``cells`` and ``calibration``.

Truths are closed forms; ``test_false_alarms`` holds them to the series. Depends on numpy, scipy and ``processes`` only.
"""

from __future__ import annotations

from collections.abc import Callable, Collection, Mapping
from dataclasses import dataclass, field, replace

import numpy as np
from scipy import special, stats

if __package__:
    from tests.processes import CYCLIC, LOST, MIXED, SLOW
else:
    from processes import CYCLIC, LOST, MIXED, SLOW

DAY, WEEK = 24, 168
TENTH = float(special.ndtri(0.9))


@dataclass(frozen=True)
class Process:
    """A simulated feed in which nothing is wrong, and what is true of it (of its noise where it has a fixed cycle).

    Attributes:
        kind: what ``processes.make`` calls it.
        rho: autocorrelation at a lag.
        deviation: standard deviation.
        mean: expectation.
        location: value whose normal score is 0; None where ties leave it open.
        tenth: value that a share of the rows is above; None where it is not known.
        share: that share, a tenth unless values are whole numbers.
        light: no value is far out.
        season: the cycle of a day is ``fixed``, or ``evolves`` (both are declared in the rule file), or None.
        cycles: steps of the fixed cycles, by name.
        gaps: how rows are lost, a key of ``processes.LOST``, or "".
        ties: values repeat.
        short: correlations fade within a window of a hundred rows or so.
        only: the questions that have an answer; all where it is empty.
    """

    kind: str
    rho: Callable[[int], float]
    deviation: float = 1.0
    mean: float = 0.0
    location: float | None = 0.0
    tenth: float | None = None
    share: float = 0.1
    light: bool = True
    season: str | None = None
    cycles: Mapping[str, int] = field(default_factory=dict)
    gaps: str = ""
    ties: bool = False
    short: bool = True
    only: Collection[str] = ()

    @property
    def lost(self) -> float:
        """Share of rows that do not come."""
        return LOST[self.gaps][1] if self.gaps else 0.0


def _autoregression(phi: float) -> Process:
    deviation = (1 - phi**2) ** -0.5
    return Process(f"ar{phi}", lambda lag: phi**lag, deviation, tenth=deviation * TENTH)


def _linear(kind: str, phi: tuple[float, ...], thetas: tuple[float, ...] = (), season: str | None = None) -> Process:
    """An ARMA process; autocovariances from the weights that an innovation has later on."""
    psi = np.zeros(4000)
    psi[: len(thetas) + 1] = [1.0, *thetas]
    for t in range(1, len(psi)):
        psi[t] += sum(a * psi[t - j] for j, a in enumerate(phi, start=1) if a and t >= j)
    deviation = float(np.sqrt(psi @ psi))
    rho = lambda lag: float(psi[lag:] @ psi[: len(psi) - lag] / (psi @ psi))
    return Process(kind, rho, deviation, tenth=deviation * TENTH, season=season)


def _seasonal(season: str | None) -> Process:
    """(1 - .4 B)(1 - .6 B^24) x = e."""
    made = _linear("seasonal_ar", (0.4, *[0.0] * 22, 0.6, -0.24), season=season)
    return replace(made, cycles={"day": DAY} if season else {})


def _tenth_of_cycle() -> float:
    """The value that a tenth of the rows of ``seasonal`` is above, all hours taken together."""
    hours, values = np.arange(DAY), np.linspace(0, 15, 150_001)
    cycle = 4 * np.sin(2 * np.pi * hours / DAY) + 2 * (hours < 6)
    below = np.mean([special.ndtr((values - hour) / 1.25) for hour in cycle], axis=0)
    return float(np.interp(0.9, below, values))


def _counts() -> Process:
    """INAR(1), α = .6, negative binomial arrivals of mean 1 and variance 2: the stationary law of its chain."""
    most = 80
    arrivals = stats.nbinom.pmf(np.arange(most), 1, 0.5)
    kept = stats.binom.pmf(np.arange(most), np.arange(most)[:, None], 0.6)
    law = np.full(most, 1 / most)
    for _ in range(200):
        law = np.convolve(law @ kept, arrivals)[:most]
    above = 1 - np.cumsum(law)
    at = int(np.argmin(np.abs(above - 0.1)))
    return Process(
        "inar", lambda lag: 0.6**lag, (2.6 / 0.64) ** 0.5, mean=2.5, location=None, tenth=at + 0.5,
        share=float(above[at]), light=False, ties=True,
    )  # fmt: skip


def _fractional(d: float = 0.3) -> Process:
    def rho(lag: int) -> float:
        lags = np.arange(1, lag + 1)
        return float(np.prod((lags - 1 + d) / (lags - d)))

    deviation = float(np.sqrt(special.gamma(1 - 2 * d)) / special.gamma(1 - d))
    return Process("fractional", rho, deviation, tenth=deviation * TENTH, short=False)


def _rounded() -> Process:
    """AR .6 rounded to whole numbers: a twelfth more variance (Sheppard 1898; exact to .0001 here)."""
    variance = 1.5625 + 1 / 12
    return Process(
        "rounded", lambda lag: 1.0 if lag == 0 else 1.5625 * 0.6**lag / variance, variance**0.5, tenth=1.5,
        share=float(special.ndtr(-1.5 / 1.25)), ties=True,
    )  # fmt: skip


_SIX = _autoregression(0.6)

PROCESSES = {
    "white": Process("white", lambda lag: float(lag == 0), tenth=TENTH),
    "AR -.5": _autoregression(-0.5),
    "AR .6": _SIX,
    "AR .9": _autoregression(0.9),
    "cyclic AR(2)": _linear("cyclic", CYCLIC),
    "MA(1)": Process(
        "ma", lambda lag: 1.0 if lag == 0 else 0.6 / 1.36 * (lag == 1), 1.36**0.5, tenth=1.36**0.5 * TENTH
    ),
    "MA -.8": _linear("ma-0.8", (), MIXED["ma-0.8"][0]),
    "ARMA(1,1)": _linear("arma11", (0.8,), (-0.4,)),
    "ARMA(2,1)": _linear("arma21", (1.1, -0.3), (0.4,)),
    "profile + AR .6": Process(
        "seasonal", lambda lag: 0.6**lag, 1.25, mean=0.5, location=0.5, tenth=_tenth_of_cycle(), season="fixed",
        cycles={"day": DAY},
    ),
    "two seasons + AR .6": Process(
        "two seasons", lambda lag: 0.6**lag, 1.25, mean=0.5 - 4 / 7, location=0.5 - 4 / 7, season="fixed",
        cycles={"day": DAY, "week": WEEK},
    ),
    "seasonal AR": _seasonal(None),
    "seasonal AR, declared": _seasonal("evolves"),
    "t3": Process("t3", lambda lag: float(lag == 0), 3**0.5, tenth=float(stats.t.ppf(0.9, 3)), light=False),
    "GARCH, AR .6": Process("garch", lambda lag: 0.6**lag, 1.25, light=False),
    "regimes, AR .6": Process("regimes", lambda lag: 0.6**lag, 1.25, light=False),
    "lognormal of AR .6": Process(  # the logarithm has variance .8² · 1.25² = 1
        "lognormal", lambda lag: float(np.expm1(0.6**lag) / np.expm1(1.0)), (np.expm1(1.0) * np.e) ** 0.5,
        mean=np.e**0.5, location=1.0, tenth=float(np.exp(TENTH)), light=False,
    ),
    "counts, INAR .6": _counts(),
    "rounded AR .6": _rounded(),
    "AR .6, clusters lost": replace(_SIX, kind="ar0.6; lost clusters", gaps="clusters"),
    "fractional .3": _fractional(),
    "wandering + AR .6": Process(
        "wandering", lambda lag: (0.6**lag + SLOW**lag) / 2, 1.25 * 2**0.5, tenth=1.25 * 2**0.5 * TENTH, short=False
    ),
    "trend + AR .6": replace(
        _SIX, kind="trend", tenth=None, only=("trend", "steps", "autocorrelation 1, detrended")
    ),
    "random walk": Process("walk", lambda lag: 1.0, only=("steps",)),
}  # fmt: skip
"""By the name that tables tell."""

LOSING = {
    f"{name}, {how} lost": replace(PROCESSES[name], kind=f"{PROCESSES[name].kind}; lost {how}", gaps=how)
    for how in LOST
    for name in ("white", "AR .6", "AR .9", "profile + AR .6")
}
"""The same with rows taken out, for ``--gaps``."""
PROCESSES |= {name: process for name, process in LOSING.items() if name not in PROCESSES}
NAMED = tuple(name for name in PROCESSES if name not in LOSING or name == "AR .6, clusters lost")
"""Those of the whole table."""
