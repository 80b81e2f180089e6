"""Does a cycle of a given length stand out as lines in the periodogram.

``spectral_f`` asks whether a season that somebody names is there. This asks the same for the lines that only a cycle
of this very length has, strictly enough that hundreds of lengths can be asked about. Depends on numpy,
``scipy.special`` and ``serial`` only.
"""

from __future__ import annotations

from functools import cache
from typing import NamedTuple

import numpy as np
from scipy import special

from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.autoregression import burg

MOST_NEIGHBOURS = 20
"""Neighbours on either side of a line; more would reach beyond where the spectrum is nearly flat (ours)."""
SHARP = 2.0
"""Times that a season's lines exceed the ordinates right beside them; those of a cycle that wanders are as high (ours:
a pseudo-cycle passes once in six, and must be significant as well)."""
SLACK = 1.5
"""Times the root of a line's height that an ordinate half a step away may be higher: a cycle whose true length is no
whole number of steps lies between (ours: a true line of height 15 fails once in two hundred)."""
WITHIN = 4
"""Repeats within a cycle up to which a line is a harmonic: halves, thirds and quarters (ours)."""
FIRST = (1, 3)
"""Harmonics combined: the first, the first three, all. Sums over few find smooth shapes, those over all find any."""


def first_order(x: Floats) -> Floats:
    """Coefficient of each series' first-order autoregression, shape (S,): it tilts the spectrum and has no peak."""
    model = burg(x, max_order=1, min_order=1)
    return np.asarray(model.coefficients[:, 0] if model.coefficients.shape[1] else np.zeros(len(x)))


class Lines(NamedTuple):
    """The lines of a cycle in each series, every array of shape (S,).

    Attributes:
        log_p: logarithm of the chance of such lines without the cycle; 0 where nothing can be said.
        sharp: the lines stand out from what is right beside them.
        log_all: the same chance for all lines of the cycle, those of shorter cycles within it too.
        share: share of the sum of squares that all lines of the cycle hold beyond their neighbours.
    """

    log_p: Floats
    sharp: Bools
    log_all: Floats
    share: Floats


def lines(x: Floats, length: int, phi: Floats) -> Lines:
    """Test whether a series has lines that a cycle of ``length`` steps has and no shorter one.

    The periodogram of the last c whole cycles is tilted flat by the series' first-order autoregression. F_h is the
    ordinate at h/length over the mean of its 2m neighbours, m = min(c - 1, 20), none of which is a line of the cycle.
    Where the spectrum is smooth, F_h follows F(2, 4m) (at the highest frequency F(1, 2m), with neighbours on one side
    only). The p-values of the first, of the first three and of all harmonics are combined by Fisher (1932), and the
    smallest of the three counts, times three (Bonferroni).

    That is asked for every prime factor q of the length, each time of the harmonics that a cycle of length/q lacks
    (h not a multiple of q), and the largest p-value counts: a multiple of a season has none of its own for some q. A
    harmonic that repeats more than ``WITHIN`` times in the cycle speaks for a season of its own and is left out, so
    that the common multiple of two seasons has none either.

    Args:
        x: series less their trend, missing values 0, shape (S, T).
        length: steps in the cycle, 2 to T/2.
        phi: first-order autoregression of each series, shape (S,).
    """
    steps = x.shape[1]
    cycles = steps // length
    used = x[:, steps - cycles * length :]
    place = _places(length, cycles)
    n = used.shape[1]
    turn = np.exp(-1j * np.pi * np.arange(n + 1) / n)
    spectrum = np.fft.rfft(used, 2 * n, axis=1)  # every second ordinate lies half-way between two of the series' own
    fine = (spectrum.real**2 + spectrum.imag**2) * np.abs(1 - phi[:, None] * turn) ** 2
    flat = fine[:, ::2]
    total = flat[:, 1:].sum(axis=1, keepdims=True)
    floor = np.maximum(_beside(flat, place), 1e-28 * total)
    lit = total[:, 0] > 0
    at = 2 * place.at
    with np.errstate(divide="ignore", invalid="ignore"):
        f, before, behind, lower, higher = (
            fine[:, np.minimum(at + off, 2 * n - at - off)] / floor for off in (0, -2, 2, -1, 1)
        )
    y = -_log_tail(f, place)
    log_p, sharp = np.full(len(x), -np.inf), np.zeros(len(x), dtype=bool)
    for sets in place.asked:
        log_set, clear = np.zeros(len(x)), np.zeros(len(x), dtype=bool)
        for chosen in sets:
            log_one = _fisher(y[:, chosen].sum(axis=1), int(chosen.sum())) + np.log(len(sets))
            height, *beside = (part[:, chosen].sum(axis=1) for part in (f, before, behind, lower, higher))
            narrow = height > SHARP * np.maximum(beside[0], beside[1])
            narrow &= height + SLACK * np.sqrt(height) > np.maximum(beside[2], beside[3])
            clear = np.where(log_one < log_set, narrow, clear)
            log_set = np.minimum(log_one, log_set)
        sharp = np.where(log_set > log_p, clear, sharp)
        log_p = np.maximum(log_p, log_set)
    log_all = np.zeros(len(x))
    for chosen in place.family:
        log_all = np.minimum(log_all, _fisher(y[:, chosen].sum(axis=1), int(chosen.sum())))
    share = _share(fine, floor, turn, phi, at)
    return Lines(np.where(lit, log_p, 0.0), sharp & lit, np.where(lit, log_all, 0.0), share)


def _share(fine: Floats, floor: Floats, turn: np.ndarray, phi: Floats, at: Ints) -> Floats:
    """Share of the sum of squares on all lines beyond their neighbours, the tilt taken back."""
    tilt = np.maximum(np.abs(1 - phi[:, None] * turn) ** 2, 1e-300)
    n = fine.shape[1] - 1
    power = fine[:, ::2] / tilt[:, ::2]
    whole = 2 * power[:, 1:].sum(axis=1) - (power[:, -1] if n % 2 == 0 else 0.0)
    weight = np.where(at == n, 1.0, 2.0)
    beyond = ((fine[:, at] - floor) / tilt[:, at] * weight).sum(axis=1)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(whole > 0, np.maximum(beyond / whole, 0.0), 0.0)


class _Places(NamedTuple):
    """Where the lines of a cycle are: ordinates, neighbours on either side, and the sets of harmonics asked about."""

    at: Ints
    last: Bools
    m: int
    nyquist: Bools
    asked: tuple[tuple[Bools, ...], ...]
    family: tuple[Bools, ...]


@cache
def _places(length: int, cycles: int) -> _Places:
    h = np.arange(1, length // 2 + 1)
    at = h * cycles
    m = max(min(cycles - 1, MOST_NEIGHBOURS), 1)
    own = np.gcd(h, length) <= WITHIN
    asked = tuple(_sets(h, own & (h % q > 0)) for q in _primes(length))
    return _Places(at, 2 * (at + m) > length * cycles, m, 2 * h == length, asked, _sets(h, h > 0))


def _sets(h: Ints, among: Bools) -> tuple[Bools, ...]:
    """The first, the first three and all of some harmonics, each set once."""
    sets: list[Bools] = []
    for most in (*FIRST, len(h)):
        chosen = among & (h <= most)
        if chosen.any() and not any(np.array_equal(chosen, other) for other in sets):
            sets.append(chosen)
    return tuple(sets)


def _primes(n: int) -> list[int]:
    """The prime factors, each once."""
    found, q = [], 2
    while q * q <= n:
        if n % q == 0:
            found.append(q)
        while n % q == 0:
            n //= q
        q += 1
    return [*found, n] if n > 1 else found


def _beside(power: Floats, place: _Places) -> Floats:
    """Mean of the neighbours of each line, on the lower side alone where the higher one is cut short."""
    running = np.concatenate([np.zeros((len(power), 1)), np.cumsum(power, axis=1)], axis=1)
    at, m = place.at, place.m
    low = running[:, at] - running[:, at - m]
    end = np.minimum(at + 1 + m, power.shape[1])
    high = running[:, end] - running[:, np.minimum(at + 1, power.shape[1])]
    return np.asarray(np.where(place.last, low / m, (low + high) / (2 * m)))


def _log_tail(f: Floats, place: _Places) -> Floats:
    """Logarithm of the upper tail of F(2, 4m), of F(2, 2m) with one side, of F(1, 2m) at the highest frequency."""
    half = np.where(place.last, place.m, 2 * place.m).astype(np.float64)
    log_p = -half * np.log1p(f / half)
    if place.nyquist.any():
        a, one = float(place.m), f[:, place.nyquist]
        inside = 1 / (1 + one / (2 * a))
        tail = special.betainc(a, 0.5, inside)
        rough = a * np.log(inside) - np.log(a) - special.betaln(a, 0.5)
        with np.errstate(divide="ignore"):
            log_p[:, place.nyquist] = np.where(tail > 1e-290, np.log(tail), rough)
    return log_p


def _fisher(y: Floats, count: int) -> Floats:
    """Logarithm of the upper tail of χ² with 2·count degrees of freedom at 2y, far out by its leading terms."""
    tail = special.gammaincc(count, y)
    with np.errstate(divide="ignore", invalid="ignore"):
        far = (count - 1) * np.log(y) - y - special.gammaln(count) - np.log1p(-np.minimum((count - 1) / y, 0.99))
        return np.asarray(np.where(tail > 1e-290, np.log(tail), far))
