"""Signatures of a failing window to its likely cause; depends on ``serial``, ``grid``, ``baseline`` and ``causes``.

Exact evidence is told first: equal values, midpoints, order, stretches seen before, rounding. Then every fault that
can be undone is undone, and the one whose mended window history finds most likely is told, if it is likelier than the
window as it came and than any autoregression of the window's own.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from sercheck import causes
from sercheck.baseline import FEWEST_CYCLES
from sercheck.grid import Panel
from sercheck.serial.arrays import Bools, Floats
from sercheck.serial.disorder import any_order
from sercheck.serial.exact_signs import Sign, exact_signs
from sercheck.serial.foreseen import Foreseen, foresee
from sercheck.serial.identity import likeliest_other
from sercheck.serial.matched_filter import Cycle
from sercheck.serial.mixture import responsibilities, shared_odds
from sercheck.serial.signature import Look, Looker

LIKELIER = 3.0
"""Log-likelihood by which the mended window must beat the one as it came (e^5 = 150 to 1): on healthy windows a cause
is then named in less than 2 % (simulated by ``python -m tests.causes``)."""

PLAIN = 2.0
"""Log-likelihood a row that is plain without a comparison with history's windows: e^2 = 7 to 1 in every single row."""

TAIL = 2.43
"""ln(.5/.01)/ln(.5/.1): from the median and the upper tenth of an exponential tail to its upper hundredth."""

MOST_WINDOWS, FEWEST_WINDOWS, ROWS = 16, 6, 2000
"""Windows of history that are mended for comparison: sixteen, fewer where many series fail (2,000 in all)."""

FALSE_ORDER = 1.5
"""Log-likelihood that disorder must have over noise: in a day of hours the one is then taken for the other as often as
the other for the one (simulated); without it noise was taken for disorder three times as often."""

MORE_MISSING = 0.05
"""Share of rows by which the missing ones must exceed history's to be a cause by themselves: a row of a day."""

FARTHEST = 1e60
"""Values are cut here, in units of history's largest: their fourth powers stay within doubles."""

FAR_APART = 100
"""Powers of two between series that share a unit."""

WEAK, TURNED = 0.25, -0.5
"""Strength of a season below which it is gone, and below which it is turned over."""

NAMES = {
    "sorted": causes.WRONG_ORDER, "reversed": causes.WRONG_ORDER, "shuffled": causes.WRONG_ORDER,
    "noise": causes.NOISE, "filled": causes.FILLED, "interpolated": causes.INTERPOLATED, "smoothed": causes.SMOOTHED,
    "stuck": causes.STUCK, "repeated": causes.REPEATED, "again": causes.AGAIN, "slipped": causes.SLIPPED,
    "interleaved": causes.INTERLEAVED, "total": causes.TOTAL, "differenced": causes.DIFFERENCED, "twice": causes.TWICE,
    "unit": causes.UNIT, "spread": causes.SPREAD, "sign": causes.SIGN, "mirrored": causes.MIRRORED,
    "swapped": causes.SWAPPED, "shifted": causes.SHIFTED, "rounded": causes.ROUNDED,
    "gone": causes.GONE, "flattened": causes.FLATTENED, "grown": causes.GROWN,
}  # fmt: skip
"""The looks and signs by the names that ``serial`` gives them."""

EVIDENCE = {
    "sorted": "rows ordered by value", "reversed": "history goes on when the newest row is put first",
    "shuffled": "history's values without its order", "noise": "independent values without history's distribution",
    "filled": "%.0f %% of the rows equal the one before", "interpolated": "%.0f %% of the rows are midpoints",
    "smoothed": "history as it looks when smoothed", "stuck": "%.0f rows at one value",
    "repeated": "%.0f %% of the rows equal the one before, in pairs",
    "again": "%.0f %% of the rows were delivered before, in the same order",
    "slipped": "history's season %+.0f steps late",
    "interleaved": "odd rows lie %.4g apart from even ones", "total": "their differences go on as history did",
    "differenced": "their running total goes on as history did",
    "twice": "the total of their total goes on as history did",
    "unit": "history goes on when divided by %.4g", "spread": "all runs of equal values are %.0f rows long",
    "sign": "history goes on with the other sign", "mirrored": "history goes on when mirrored at the mean",
    "swapped": "it goes on the history of another series", "shifted": "history goes on %+.4g away",
    "rounded": "all values are multiples of %.4g", "gone": "season at %.2f of its strength",
    "flattened": "season at %.2f of its strength", "grown": "season at %.2f of its strength",
}  # fmt: skip
"""What is told for each, with its number."""

IN_UNIT = {"shifted", "interleaved"}
"""Those whose number is in the feed's unit."""

PERCENT = {"filled", "interpolated", "repeated", "again"}


@dataclass(frozen=True)
class Causes:
    """The likely cause of each failing series.

    Attributes:
        cause: what is told, with its details, object array of str, shape (S,).
        support: from 0 to 1, how far the evidence is for it alone, shape (S,); 0 where none is known.
        evidence: what speaks for it, object array of str, shape (S,).
        kind: the cause without details, one of ``sercheck.causes``, object array of str, shape (S,).
        ranked: for each series its causes by falling support, object array of str, shape (S, 3); empty where there
            are fewer.
    """

    cause: np.ndarray
    support: Floats
    evidence: np.ndarray
    kind: np.ndarray
    ranked: np.ndarray

    def of_the_batch(self) -> tuple[str, float]:
        """The cause that is most supported over all series, and its mean support over them."""
        named = self.kind != causes.UNKNOWN
        if not named.any():
            return causes.UNKNOWN, 0.0
        kinds, place = np.unique(self.kind[named].astype(str), return_inverse=True)
        total = np.bincount(place, self.support[named])
        best = int(np.argmax(total))
        same = self.kind == kinds[best]
        details, place = np.unique(self.cause[same].astype(str), return_inverse=True)
        parts = np.bincount(place, self.support[same])
        most = int(np.argmax(parts))
        told = details[most] if parts[most] > total[best] / 2 else kinds[best]
        return str(told), float(total[best] / len(self.kind))


def likely_causes(
    panel: Panel, season: str | None = None, keys: Sequence[str] | None = None, *, shared: bool = False
) -> Causes:
    """Name the likely cause for every series of a panel.

    Args:
        panel: history and window of the series that fail, not transformed (the values as they were delivered).
        season: name of the shortest season whose profile may be meant; by default the shortest of the feed.
        keys: names of the series, for "keys swapped with".
        shared: the series failed in one batch, and what the others say counts: where a series cannot tell two causes
            apart, it follows those that can (``serial.mixture``). Otherwise each is judged by itself.

    Returns:
        A cause for each, or "no known signature": where nothing explains the window much better than the window as it
        came, where the window's own autoregression explains it better, and where history is too short to tell.
    """
    values = panel.values
    names = np.array([str(k) for k in range(len(values))] if keys is None else list(keys), dtype=object)
    told = _Told(len(values))
    if not values.size or panel.start == values.shape[1]:
        return told.causes()
    signs = exact_signs(values, panel.start)
    scaled, unit = _scaled(values, panel.start)
    law = foresee(scaled, panel.start, _cycles(panel, season)) if panel.start else None
    if law is not None:
        _weigh(told, law, names, unit, signs, shared)
    for sign in reversed(signs):
        told.exact(sign.name, sign.found, sign.value)
    _missing(told, panel)
    return told.causes()


def _scaled(values: Floats, start: int) -> tuple[Floats, Floats]:
    """Values in units of a power of two near history's largest, and that unit: squares neither overflow nor vanish.

    One unit for all series, which are compared with each other, but for those that would vanish in it.
    """
    history = values[:, :start]
    peak = np.where(np.isnan(history), 0.0, np.abs(history)).max(axis=1, initial=0.0)
    own = np.clip(np.frexp(peak)[1], -1021, 1022)
    largest = own.max(initial=-1021)
    exponent = np.where(largest - own > FAR_APART, own, largest)
    with np.errstate(over="ignore", under="ignore"):
        scaled = np.ldexp(values, -exponent[:, None])
    return np.clip(scaled, -FARTHEST, FARTHEST), np.ldexp(1.0, exponent)


def _cycles(panel: Panel, season: str | None) -> list[Cycle]:
    """The season asked for, and longer ones of which it is a part, as far as history teaches them."""
    lengths = panel.axis.lengths
    able = sorted((name for name in lengths if lengths[name] * FEWEST_CYCLES <= panel.start), key=lengths.__getitem__)
    if season is None:
        season = able[0] if able else None
    if season not in able:
        return []
    return [Cycle(lengths[name], panel.phase(name)) for name in able if lengths[name] % lengths[season] == 0][:2]


class _Told:
    """Causes as they are found; later findings of exact evidence go before earlier ones."""

    def __init__(self, series: int) -> None:
        self.name = np.full(series, "", dtype=object)
        self.kind = np.full(series, causes.UNKNOWN, dtype=object)
        self.cause = self.kind.copy()
        self.evidence = np.full(series, "", dtype=object)
        self.support = np.zeros(series)
        self.ranked = np.full((series, 3), "", dtype=object)

    def tell(self, name: str, where: Bools, value: Floats, support: Floats, detail: np.ndarray | None = None) -> None:
        """Put a finding in front of what was told so far."""
        rows = np.flatnonzero(where)
        if not len(rows):
            return
        kind = NAMES[name]
        text = EVIDENCE[name]
        number = value[rows] * (100 if name in PERCENT else 1)
        self.kind[rows] = kind
        self.cause[rows] = kind if detail is None else detail[rows]
        self.evidence[rows] = np.char.mod(text, number) if "%" in text else text
        self.support[rows] = support[rows]

    def exact(self, name: str, where: Bools, value: Floats) -> None:
        """Evidence that leaves no doubt: what was told before moves back."""
        rows = np.flatnonzero(where & (self.kind != NAMES[name]))
        self.ranked[rows] = np.roll(self.ranked[rows], 1, axis=1)
        self.ranked[np.flatnonzero(where), 0] = NAMES[name]
        self.tell(name, where, value, np.ones(len(value)))

    def causes(self) -> Causes:
        """What was told."""
        return Causes(self.cause, self.support, self.evidence, self.kind, self.ranked)


def _weigh(told: _Told, law: Foreseen, names: np.ndarray, unit: Floats, signs: Sequence[Sign], shared: bool) -> None:
    """Compare the mended windows: posterior odds by kind, at prior odds that are equal or the other series'."""
    looks = _looks(law)
    other, score = likeliest_other(law)
    looks.append(Look("swapped", score, other.astype(np.float64)))
    scores = np.stack([np.nan_to_num(look.score, nan=-np.inf, posinf=-np.inf, neginf=-np.inf) for look in looks])
    kinds = np.array([NAMES.get(look.name, look.name) for look in looks], dtype=object)
    exact = [NAMES[sign.name] for sign in signs]
    rows = {kind: row for row, kind in enumerate(dict.fromkeys([*kinds.tolist(), *exact]))}
    of_look = np.array([rows[kind] for kind in kinds])
    by_kind = np.full((len(rows), scores.shape[1]), -np.inf)
    np.logaddexp.at(by_kind, of_look, scores)
    sure = np.any([sign.found for sign in signs], axis=0)
    odds = shared_odds(_with_signs(by_kind, signs, rows)) if shared else np.zeros(by_kind.shape)
    share = responsibilities(by_kind, odds)
    _rank(told, {kind: share[row] for kind, row in rows.items()})
    weighed = scores + odds[of_look]
    best = np.argmax(weighed, axis=0)
    every = np.arange(scores.shape[1])
    top, healthy = scores[best, every], scores[0]
    gain = np.where(np.isfinite(healthy), top - np.where(np.isfinite(healthy), healthy, 0.0), -np.inf)
    named = gain >= LIKELIER
    unsure = np.flatnonzero(named & ~sure & (gain < PLAIN * law.n))
    if len(unsure):
        named[unsure] = gain[unsure] > _by_chance(law.rows(unsure))
    for place, look in enumerate(looks):
        if look.name not in NAMES:
            continue
        where = named & (best == place)
        value = look.value * unit if look.name in IN_UNIT else look.value
        told.tell(look.name, where, value, share[of_look[place]], _detail(look, names))


def _with_signs(by_kind: Floats, signs: Sequence[Sign], rows: dict[str, int]) -> Floats:
    """Log-likelihoods with exact evidence, which leaves room for one kind only, that of the first sign."""
    out = by_kind.copy()
    for sign in reversed(signs):
        where = np.flatnonzero(sign.found)
        out[:, where] = -np.inf
        out[rows[NAMES[sign.name]], where] = 0.0
    return out


def _looks(law: Foreseen) -> list[Look]:
    """All looks but that at other series, the unbroken window first."""
    looks = [look for one in Looker(law).all() for look in _by_strength(one)]
    looks.append(Look("shuffled", any_order(law) - FALSE_ORDER, np.full(len(law.window), np.nan)))
    return looks


def _by_chance(law: Foreseen) -> Floats:
    """How much likelier history's own windows look when mended: what a mended window must beat, shape (S,).

    The median over the last windows of history plus ``TAIL`` times the distance from it to the upper tenth: where the
    law fits history the windows gain next to nothing, and where it does not (counts, wild tails) they show it.
    """
    series = len(law.window)
    count = min(max(ROWS // series, FEWEST_WINDOWS), MOST_WINDOWS)
    while (past := law.earlier(count)) is None and count > FEWEST_WINDOWS:
        count -= 1
    if past is None:
        return np.zeros(series)
    scores = np.stack([np.nan_to_num(look.score, nan=-np.inf, posinf=-np.inf, neginf=-np.inf) for look in _looks(past)])
    with np.errstate(invalid="ignore"):
        gain = np.where(np.isfinite(scores[0]), scores.max(axis=0) - scores[0], 0.0).reshape(count, series)
    usual, high = np.quantile(gain, (0.5, 0.9), axis=0)
    return np.asarray(usual + TAIL * (high - usual))


def _by_strength(look: Look) -> list[Look]:
    """A season at another strength is gone, flattened, exaggerated or turned over.

    One that is weaker together with its noise can be made out at any strength, and so is not gone.
    """
    if look.name == "weaker":
        return [look._replace(name="flattened")]
    if look.name != "season":
        return [look]
    a = look.value
    with np.errstate(invalid="ignore"):
        bins = {
            "mirrored": a < TURNED, "gone": (a >= TURNED) & (a < WEAK), "flattened": (a >= WEAK) & (a < 1),
            "grown": a >= 1,
        }  # fmt: skip
    return [Look(name, np.where(where, look.score, -np.inf), a) for name, where in bins.items()]


def _rank(told: _Told, shares: dict[str, Floats]) -> None:
    kinds = [kind for kind in shares if kind in causes.CAUSES]
    share = np.stack([shares[kind] for kind in kinds])
    order = np.argsort(-share, axis=0, kind="stable")[: told.ranked.shape[1]]
    best = np.take_along_axis(share, order, axis=0)
    words = np.array(kinds, dtype=object)[order]
    told.ranked[:] = np.where(best > 0.01, words, "").T  # under one in a hundred is not worth a line


def _detail(look: Look, names: np.ndarray) -> np.ndarray | None:
    """Which key, how many steps."""
    value = np.nan_to_num(look.value)
    if look.name == "slipped":
        steps = np.abs(value).astype(np.int64)
        unit = np.where(steps == 1, " step", " steps")
        way = np.where(value > 0, " late", " early")
        text = np.char.add(np.char.mod(f"{causes.SLIPPED} by %d", steps), np.char.add(unit, way))
        return text.astype(object)
    if look.name == "swapped" and len(names):
        other = np.clip(value.astype(np.int64), 0, len(names) - 1)
        return np.char.add(f"{causes.SWAPPED} with ", names[other].astype(str)).astype(object)
    return None


def _missing(told: _Told, panel: Panel) -> None:
    """Rows that are missing, where nothing else explains the failure."""
    due = panel.axis.expected & ~panel.axis.closed
    gone = np.isnan(panel.values) & due
    now = gone[:, panel.start :].sum(axis=1) / max(int(due[panel.start :].sum()), 1)
    past = gone[:, : panel.start].sum(axis=1) / max(int(due[: panel.start].sum()), 1)
    rows = np.flatnonzero((told.kind == causes.UNKNOWN) & (now > past + MORE_MISSING))
    told.kind[rows] = told.cause[rows] = causes.MISSING
    told.evidence[rows] = np.char.mod("%.0f %% of the rows are missing", 100 * now[rows])
    told.support[rows] = now[rows]
    told.ranked[rows, 0] = causes.MISSING
