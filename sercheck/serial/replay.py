"""Stretches that were delivered before: exact by hashes, near by innovations; depends on numpy and ``serial``.

A stretch of ``length`` successive values is turned into one 64-bit number; equal stretches have equal numbers, and
one sort of a series brings them together. Stretches of one constant are skipped (a stuck value is no replay), as are
stretches with a missing value.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from sercheck.serial.arrays import Bools, Floats, Ints, as_series
from sercheck.serial.clusters import BLOCK
from sercheck.serial.risk import t_tail

Hashes = NDArray[np.uint64]

LENGTH = 3
"""Successive values that must agree where the author names no length."""

LENGTHS = (3, 4, 6, 8, 12, 24)
"""Lengths tried in turn for coarse values, whose short stretches come again by chance; each 1.3 to 2 times the last."""

OFTEN = 0.02
"""Share of history's rows that may recur by chance at the chosen length: a batch can stand out from that."""

FEWEST_PAIRS = 8
"""Complete pairs that a correlation of two stretches needs; with fewer a large one means nothing."""

_ODD = np.uint64(0x9E3779B97F4A7C15)  # 2^64 over the golden ratio, odd: spreads neighbouring numbers (Knuth 1973)
_MIX = np.uint64(0xD6E8FEB86659FD93)  # any odd number without pattern serves


class Seen(NamedTuple):
    """Which rows belong to a stretch that is also elsewhere.

    Attributes:
        history: 1 where a row of history lies in a stretch that history holds a second time (before or after), else
            0; NaN where no stretch of the row can be compared. Shape (S, N).
        batch: 1 where a row of the batch lies in a stretch of the batch that came before it, else 0, or NaN.
            Shape (S, n).
        length: successive values that were compared, shape (S,).
    """

    history: Floats
    batch: Floats
    length: Ints


def seen_before(x: object, start: int, length: int | None = None) -> Seen:
    """Mark the rows that were delivered before, for all series at once.

    A stretch of the batch counts as seen when the same values end earlier in history or in the batch without
    overlapping it. A row of history counts when its stretch is anywhere else in history: as many chances as a row of
    the batch has, so that history's share is what a healthy batch is expected to show.

    Args:
        x: history and batch, shape (S, T); NaN is missing and breaks a stretch.
        start: first column of the batch.
        length: successive values that must agree, at least 2; None takes for each series the first of ``LENGTHS`` at
            which at most ``OFTEN`` of history's rows recur (3 without history).

    Raises:
        ValueError: for a length under 2.
    """
    values = as_series(x)
    if length is not None:
        if length < 2:
            raise ValueError(f"a stretch has at least 2 values, got {length}")
        return _at(values, start, length)
    result = _at(values, start, LENGTH)
    for longer in LENGTHS[1:]:
        if longer > values.shape[1] - start:
            break
        rows = np.flatnonzero(_share(result.history) > OFTEN)
        if not len(rows):
            break
        more = _at(values[rows], start, longer)
        result.history[rows], result.batch[rows], result.length[rows] = more
    return result


def _share(marks: Floats) -> Floats:
    share: Floats = np.nansum(marks, axis=1) / np.maximum(1, np.count_nonzero(~np.isnan(marks), axis=1))
    return share


def _at(values: Floats, start: int, length: int) -> Seen:
    S, T = values.shape
    result = Seen(np.full((S, start), np.nan), np.full((S, T - start), np.nan), np.full(S, length, dtype=np.int64))
    if length <= T:
        block = max(1, BLOCK // T)
        for first in range(0, S, block):
            part = slice(first, first + block)
            result.history[part], result.batch[part] = _block(values[part], start, length)
    return result


def _block(values: Floats, start: int, length: int) -> tuple[Floats, Floats]:
    T = values.shape[1]
    hashes, able = _stretches(values, length)
    place = np.arange(hashes.shape[1])
    first, last, earliest = _places(hashes, able, start - length)
    again = able & ((first <= place - length) | (last >= place + length))
    before = able & (earliest <= place - length)
    inside = place <= start - length
    history = _rows(again & inside, able & inside, length, T)[:, :start]
    within = place >= start
    return history, _rows(before & within, able & within, length, T)[:, start:]


def _stretches(values: Floats, length: int) -> tuple[Hashes, Bools]:
    """Hash of the stretch that begins at each step, and whether it can be compared, shape (S, T − length + 1)."""
    bits = (values + 0.0).view(np.uint64)  # + 0.0 makes one zero of the two
    bits = (bits ^ (bits >> np.uint64(32))) * _MIX
    bits ^= bits >> np.uint64(29)
    count = values.shape[1] - length + 1
    hashes = np.zeros((len(values), count), dtype=np.uint64)
    for step in range(length):
        hashes = hashes * _ODD + bits[:, step : step + count]
    missing = np.zeros((len(values), values.shape[1] + 1), dtype=np.int64)
    np.cumsum(np.isnan(values), axis=1, out=missing[:, 1:])
    turns = np.zeros_like(missing)
    np.cumsum(values[:, 1:] != values[:, :-1], axis=1, out=turns[:, 2:])
    complete = missing[:, length:] == missing[:, :-length]
    varied = turns[:, length:] > turns[:, 1 : count + 1]
    return hashes, complete & varied


def _places(hashes: Hashes, able: Bools, newest: int) -> tuple[Ints, Ints, Ints]:
    """First and last place up to ``newest`` of the stretches equal to each one, and their first place at all."""
    S, count = hashes.shape
    hashes = np.where(able, hashes, np.uint64(0))  # what cannot be compared only meets its like
    order = np.argsort(hashes, axis=1)
    ordered = np.take_along_axis(hashes, order, axis=1)
    starts = np.ones((S, count), dtype=bool)
    starts[:, 1:] = ordered[:, 1:] != ordered[:, :-1]
    group = np.cumsum(starts.ravel()) - 1
    edges = np.flatnonzero(starts.ravel())
    flat = order.ravel()
    past = flat <= newest
    far = 2 * count + 2
    at = np.empty((S, count), dtype=np.int64)
    np.put_along_axis(at, order, group.reshape(S, count), axis=1)
    first = np.minimum.reduceat(np.where(past, flat, far), edges)
    last = np.maximum.reduceat(np.where(past, flat, -far), edges)
    earliest = np.minimum.reduceat(flat, edges)
    return first[at], last[at], earliest[at]


def _rows(found: Bools, able: Bools, length: int, T: int) -> Floats:
    """Spread marks of stretches to the rows that they cover: 1 in a found one, 0 in an able one, else NaN."""
    return np.where(_cover(found, length, T), 1.0, np.where(_cover(able, length, T), 0.0, np.nan))


def _cover(begins: Bools, length: int, T: int) -> Bools:
    change = np.zeros((len(begins), T + 1), dtype=np.int64)
    change[:, : begins.shape[1]] += begins
    change[:, length : length + begins.shape[1]] -= begins
    return np.asarray(np.cumsum(change, axis=1)[:, :T] > 0)


class NearReplay(NamedTuple):
    """The earlier stretch that the newest one resembles most; every array has shape (S,).

    Attributes:
        correlation: the largest correlation with an earlier stretch; NaN where none could be computed.
        steps_back: how many steps earlier it began; 0 where there is none.
        p_value: its upper t-tail times the number of stretches compared, at most 1.
    """

    correlation: Floats
    steps_back: Ints
    p_value: Floats


def near_replay(scores: object, length: int) -> NearReplay:
    """Look for a replay with noise added: correlate the newest stretch with every earlier one.

    Args:
        scores: normal scores of innovations, shape (S, T); whitening makes neighbouring rows independent, so that t =
            r √((m − 2)/(1 − r²)) with m complete pairs follows Student's t (Bonferroni over the stretches). Not for
            innovations far from normal before scoring: there only exact replay is told.
        length: steps of the stretch (one cycle), at least ``FEWEST_PAIRS``.

    Returns:
        NaN and p = NaN where no earlier stretch shares ``FEWEST_PAIRS`` complete pairs with the newest one.
    """
    values = as_series(scores)
    S, T = values.shape
    shifts = T - 2 * length + 1
    result = NearReplay(np.full(S, np.nan), np.zeros(S, dtype=np.int64), np.full(S, np.nan))
    if shifts < 1 or length < FEWEST_PAIRS:
        return result
    block = max(1, BLOCK // T)
    for first in range(0, S, block):
        part = slice(first, first + block)
        r, pairs = _correlations(values[part, : T - length], values[part, T - length :])
        result.correlation[part], result.steps_back[part], result.p_value[part] = _best(r, pairs, T - length)
    return result


def _best(r: Floats, pairs: Floats, newest: int) -> tuple[Floats, Ints, Floats]:
    with np.errstate(divide="ignore", invalid="ignore"):
        p = t_tail(r * np.sqrt((pairs - 2) / np.maximum(1 - r * r, 1e-300)), pairs - 2)
    compared = np.count_nonzero(~np.isnan(p), axis=1)
    best = np.argmin(np.where(np.isnan(p), np.inf, p), axis=1)[:, None]
    some = compared > 0
    least = np.take_along_axis(p, best, axis=1)[:, 0]
    return (
        np.where(some, np.take_along_axis(r, best, axis=1)[:, 0], np.nan),
        np.where(some, newest - best[:, 0], 0),
        np.where(some, np.minimum(1.0, least * compared), np.nan),
    )


def _correlations(past: Floats, newest: Floats) -> tuple[Floats, Floats]:
    """Pearson's r of the newest stretch with each earlier one over complete pairs, and the pairs, both (S, shifts)."""
    length, size = newest.shape[1], past.shape[1]
    shifts = size - length + 1

    def spectra(x: Floats) -> list[NDArray[np.complex128]]:
        seen = ~np.isnan(x)
        filled = np.where(seen, x, 0.0)
        return [np.fft.rfft(part, size, axis=1) for part in (seen.astype(np.float64), filled, filled**2)]

    p0, p1, p2 = spectra(past)
    q0, q1, q2 = (np.conj(part) for part in spectra(newest))

    def product(a: NDArray[np.complex128], b: NDArray[np.complex128]) -> Floats:
        return np.asarray(np.fft.irfft(a * b, size, axis=1)[:, :shifts])

    m = np.rint(product(p0, q0))
    with np.errstate(divide="ignore", invalid="ignore"):
        sx, sy = product(p1, q0), product(p0, q1)
        cxy = product(p1, q1) - sx * sy / m
        cxx = product(p2, q0) - sx * sx / m
        cyy = product(p0, q2) - sy * sy / m
        fit = (m >= FEWEST_PAIRS) & (cxx > 1e-9 * m) & (cyy > 1e-9 * m)  # scores have variance near 1
        r = np.where(fit, np.clip(cxy / np.sqrt(cxx * cyy), -1.0, 1.0), np.nan)
    return r, m
