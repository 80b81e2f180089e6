"""Which seasons a series has, found without being told: lines of the periodogram and peaks of the autocorrelation.

Depends on numpy, ``scipy.special`` and ``serial`` only. The loops run over candidate lengths and rounds, never over
series.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from sercheck.serial.arrays import Bools, Floats, Ints, as_series
from sercheck.serial.autocovariances import autocorrelation, good_length
from sercheck.serial.harmonics import Seasons, sorted_out
from sercheck.serial.lines import first_order, lines
from sercheck.serial.season import detrended, median, phase_means

FEWEST_CYCLES = 4
"""Cycles below which a line has too few neighbours to stand out from."""
RISK = 0.002
"""Chance of a season that is none, for each series (ours: one in five hundred)."""
LONGEST = 1 << 17
"""Newest steps looked at: fifteen years of hours or thirteen weeks of minutes, in milliseconds (ours)."""
MOST_SEASONS = 6
"""Seasons and harmonics looked for, one after the other."""
PEAKS, TONES = 6, 4
"""Peaks of the autocorrelation and of the periodogram that name candidates in each round."""
USUAL = (4, 5, 7, 12, 14, 24, 30, 48, 52, 60, 96, 144, 168, 288, 336, 365, 672, 720, 1440, 2016, 8760)
"""Lengths that half of the risk is kept for: steps of hours, days, weeks and years at the common cadences."""
CUT = 5.0
"""Robust standard deviations at which a value is cut, so that a few broken ones make no line (common practice)."""
BLOCK_VALUES = 1 << 21
"""Values worked on at a time (16 MB)."""


def find_seasons(x: object, natural: Sequence[int] = (), risk: float = RISK) -> Seasons:
    """Find the seasons of each series.

    In each round the candidates are the usual lengths, the peaks of the autocorrelation, and the periods of the highest
    peaks of the periodogram with their doubles and trebles, all of at least four cycles. A candidate is tested by the
    lines that no shorter cycle has (``lines``), so that neither a multiple of a season nor the common multiple of two
    takes its place; half of the risk is for the lengths of the calendar, the rest for usual ones and all others
    (weighted Bonferroni, Holm 1979). Its autocorrelation must be positive. The clearest one is taken out by its phase
    means, and the next round looks at what is left. In the end cycles within a longer season are told from its
    harmonics (``harmonics.sorted_out``).

    Args:
        x: one series or (S, T); NaN is missing and counts as lying on the trend.
        natural: lengths that the calendar names for the feed's cadence (24 and 168 for hours).
        risk: chance of any season where there is none, for each series.

    Returns:
        No season for a series that is constant, or has fewer than four cycles of anything.
    """
    x = as_series(x)[:, -LONGEST:]
    if x.shape[1] < 2 * FEWEST_CYCLES:
        empty = np.zeros((len(x), 0))
        return Seasons(empty.astype(np.int64), empty, empty, empty, tuple({} for _ in x))
    block = max(1, BLOCK_VALUES // max(x.shape[1], 1))
    parts = [_find(x[first : first + block], tuple(natural), risk) for first in range(0, len(x), block)]
    return _joined(parts)


def _joined(parts: list[Seasons]) -> Seasons:
    width = max((part.steps.shape[1] for part in parts), default=0)

    def one(name: str, empty: float) -> np.ndarray:
        arrays = [getattr(part, name) for part in parts]
        wide = [np.pad(a, ((0, 0), (0, width - a.shape[1])), constant_values=empty) for a in arrays]
        return np.concatenate(wide) if wide else np.zeros((0, 0))

    harmonics = tuple(told for part in parts for told in part.harmonics)
    return Seasons(
        one("steps", 0).astype(np.int64), one("p_value", np.nan), one("share", np.nan), one("r", np.nan), harmonics
    )


class _Found(NamedTuple):
    """One round's clearest candidate of each series: its length (0 for none), log p after the search, and its lines."""

    steps: Ints
    log_p: Floats
    r: Floats


def _find(x: Floats, natural: tuple[int, ...], risk: float) -> Seasons:
    series, steps = x.shape
    search = _Search.over(steps, natural, risk)
    rest = _clipped(detrended(x))
    rest = np.where(_flat(x, rest)[:, None], np.nan, rest)
    active = np.flatnonzero((~np.isnan(rest)).any(axis=1)) if search.longest >= 2 else np.zeros(0, dtype=np.int64)
    found = np.zeros((series, MOST_SEASONS), dtype=np.int64)
    log_p, r = np.full(found.shape, np.nan), np.full(found.shape, np.nan)
    left = rest.copy()
    for turn in range(MOST_SEASONS):
        if not len(active):
            break
        clearest = _clearest(left[active], search, turn)
        some = clearest.steps > 0
        active = active[some]
        found[active, turn] = clearest.steps[some]
        log_p[active, turn], r[active, turn] = clearest.log_p[some], clearest.r[some]
        for s in np.unique(found[active, turn]).tolist():
            rows = active[found[active, turn] == s]
            left[rows] -= _profile(left[rows], s)
    return sorted_out(rest, found, log_p, r, natural)


@dataclass(frozen=True)
class _Search:
    """The lengths that are looked at, and what looking at so many costs.

    Attributes:
        natural: lengths that the calendar names, of at least four cycles.
        usual: further usual lengths.
        longest: the longest length.
        log_risk: logarithm of the risk.
    """

    natural: tuple[int, ...]
    usual: tuple[int, ...]
    longest: int
    log_risk: float

    @classmethod
    def over(cls, steps: int, natural: tuple[int, ...], risk: float) -> _Search:
        longest = steps // FEWEST_CYCLES
        named = tuple(sorted({s for s in natural if 2 <= s <= longest}))
        usual = tuple(sorted({s for s in USUAL if 2 <= s <= longest} - set(named)))
        return cls(named, usual, longest, float(np.log(risk)))

    @property
    def favoured(self) -> tuple[int, ...]:
        return self.natural + self.usual

    def price(self, s: int, turn: int) -> float:
        """What is added to a log p-value: the logarithm of the number of such lengths over their share of the risk.

        Half is for those of the calendar, a quarter each for the usual ones and for all others; later rounds, which
        look at what the earlier ones left, have a tenth.
        """
        if s in self.natural:
            count = 2 * len(self.natural)
        else:
            count = (4 if self.natural else 2) * (len(self.usual) if s in self.usual else self.longest)
        return float(np.log(count * (10 if turn else 1)))


def _flat(x: Floats, rest: Floats) -> Bools:
    """Nothing but a line in time, to rounding."""
    size = np.nanmax(np.abs(np.where(np.isnan(x), 0.0, x)), axis=1, initial=0.0)
    return np.asarray(np.nanmax(np.abs(np.where(np.isnan(rest), 0.0, rest)), axis=1, initial=0.0) <= 1e-12 * size)


def _clipped(rest: Floats) -> Floats:
    """The series in units of its largest value, cut at ``CUT`` robust standard deviations or three plain ones."""
    top = np.max(np.abs(rest), axis=1, where=~np.isnan(rest), initial=0.0)[:, None]
    unit = rest / np.where(top > 0, top, 1.0)
    middle = median(unit)[:, None]
    robust = 1.4826 * median(np.abs(unit - middle))[:, None]
    count = np.maximum((~np.isnan(unit)).sum(axis=1, keepdims=True), 1)
    plain = np.sqrt(np.nansum(unit**2, axis=1, keepdims=True) / count)
    reach = np.maximum(CUT * robust, 3 * plain)
    return np.asarray(np.clip(unit, middle - reach, middle + reach))


def _profile(x: Floats, s: int) -> Floats:
    phase = np.arange(x.shape[1]) % s
    return np.nan_to_num(phase_means(x, phase, s)[0])[:, phase]


def _clearest(x: Floats, search: _Search, turn: int) -> _Found:
    """The clearest candidate of each series, shape (R,)."""
    phi = first_order(x)
    named = _named(x, phi, search.longest)
    favoured = np.array(search.favoured, dtype=np.int64)
    wide = np.concatenate([np.broadcast_to(favoured, (len(x), len(favoured))), named], axis=1)
    filled = np.nan_to_num(x)
    log_p, log_all = np.full(wide.shape, np.inf), np.zeros(wide.shape)
    for s in np.unique(wide[wide > 0]).tolist():
        at = wide == s
        rows = np.flatnonzero(at.any(axis=1))
        test = lines(filled[rows], s, phi[rows])
        told = np.where(test.sharp, np.minimum(test.log_p + search.price(s, turn), 0.0), np.inf)
        log_p[rows] = np.where(at[rows], told[:, None], log_p[rows])
        log_all[rows] = np.where(at[rows], test.log_all[:, None], log_all[rows])
    return _best(x, wide, np.where(log_p <= search.log_risk, log_p, np.inf), log_all, np.isin(wide, favoured))


def _best(x: Floats, wide: Ints, log_p: Floats, log_all: Floats, usual: Bools) -> _Found:
    """The one whose lines are clearest; a usual length within a step of frequency takes over when nearly as clear."""
    steps, every = x.shape[1], np.arange(len(x))
    if not wide.shape[1]:
        nothing = np.full(len(x), np.nan)
        return _Found(np.zeros(len(x), dtype=np.int64), nothing, nothing)
    r = _at_lags(x, wide, np.isfinite(log_p))
    able = np.isfinite(log_p) & (r > 0)
    rank = np.where(able, log_all, np.inf)
    first = rank.argmin(axis=1)
    with np.errstate(divide="ignore", invalid="ignore"):
        apart = np.abs(1 / wide - 1 / wide[every, first][:, None]) * steps
        as_clear = (rank <= NEARLY * rank[every, first][:, None]) | (log_p <= NEARLY * log_p[every, first][:, None])
        beside = usual & able & (apart < NEAR) & as_clear
    better = np.where(beside, rank, np.inf).argmin(axis=1)
    chosen = np.where(beside.any(axis=1), better, first)
    told = able[every, chosen]
    return _Found(
        np.where(told, wide[every, chosen], 0),
        np.where(told, log_p[every, chosen], np.nan),
        np.where(told, r[every, chosen], np.nan),
    )


NEAR, NEARLY = 1.0, 0.6
"""Steps of frequency within which two lengths cannot be told apart, and the share of the clearer one's log p-value that
lets a usual length stand for both (ours: four cycles of a week give 160 to 177 hours much the same line)."""


def _at_lags(x: Floats, wide: Ints, asked: Bools) -> Floats:
    """Autocorrelation at each candidate that is asked for, NaN elsewhere."""
    r = np.full(wide.shape, np.nan)
    for s in np.unique(wide[asked]).tolist():
        at = (wide == s) & asked
        rows = np.flatnonzero(at.any(axis=1))
        r[rows] = np.where(at[rows], autocorrelation(x[rows], [s]), r[rows])
    return r


def _named(x: Floats, phi: Floats, longest: int) -> Ints:
    """Candidates that the series name themselves, 0 for none, shape (R, K)."""
    steps = x.shape[1]
    size = good_length(2 * steps)
    turn = np.exp(-2j * np.pi * np.arange(size // 2 + 1) / size)
    power = np.abs(np.fft.rfft(np.nan_to_num(x), size, axis=1) * (1 - phi[:, None] * turn)) ** 2
    r = np.fft.irfft(power, size, axis=1)[:, : longest + 2]
    lags = _peaks(r, PEAKS, 1)
    tones = _peaks(power, TONES, 3)
    with np.errstate(divide="ignore"):
        period = np.where(tones > 0, size / np.maximum(tones, 1), 0.0)
    candidates = np.concatenate(
        [lags, np.floor(period), np.ceil(period), np.rint(2 * period), np.rint(3 * period)], axis=1
    ).astype(np.int64)
    return np.where((candidates >= 2) & (candidates <= longest), candidates, 0)


def _peaks(values: Floats, count: int, reach: int) -> Ints:
    """Places of the highest local maxima, those within ``reach`` places of a higher one left out; 0 for none."""
    middle = values[:, 1:-1]
    if not middle.shape[1]:
        return np.zeros((len(values), 0), dtype=np.int64)
    able = (middle > values[:, :-2]) & (middle >= values[:, 2:])
    height = np.where(able, middle, -np.inf)
    places = np.zeros((len(values), count), dtype=np.int64)
    every = np.arange(len(values))
    for n in range(count):
        best = height.argmax(axis=1)
        places[:, n] = np.where(np.isfinite(height[every, best]), best + 1, 0)
        for beside in range(-reach, reach + 1):
            height[every, np.clip(best + beside, 0, height.shape[1] - 1)] = -np.inf
    return places
