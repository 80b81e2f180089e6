"""Panels of simulated feeds and false-alarm rates, for the tests of the measures and for ``calibration``."""

from __future__ import annotations

import math

import numpy as np

from sercheck.grid import Axis, Panel
from sercheck.measure import Measure, Measurement, Question, Stays

HOUR = 3_600_000_000_000
LIKE = Stays("like_history")
CYCLIC = (1.3, -0.7)
"""AR(2) with a pseudo-cycle of nine rows."""
MIXED = {"ma-0.8": ((-0.8,), ()), "arma11": ((-0.4,), (0.8,)), "arma21": ((0.4,), (1.1, -0.3))}
SLOPE, SLOW = 0.01, 0.995


def axis(steps, lengths=None, closed=None):
    """An hourly axis whose seasons begin at step 0."""
    index = np.arange(steps)
    lengths = lengths or {}
    return Axis(
        stamps=index * HOUR,
        index=index,
        lengths=lengths,
        phases={name: index % length for name, length in lengths.items()},
        closed=np.zeros(steps, dtype=bool) if closed is None else closed,
        expected=np.ones(steps, dtype=bool),
    )


def panel(values, start, lengths=None):
    """A panel of complete rows."""
    values = np.atleast_2d(np.asarray(values, dtype=np.float64))
    return Panel(values, start, axis(values.shape[1], lengths), ~np.isnan(values), "kwh")


def autoregressive(seed, series, steps, phi, warm=400):
    """Σφ x_{t-j} + e_t with standard normal innovations, after a run-in."""
    noise = np.random.default_rng(seed).normal(size=(series, steps + warm))
    x = np.zeros_like(noise)
    coefficients = np.atleast_1d(phi)
    for t in range(len(coefficients), steps + warm):
        x[:, t] = noise[:, t]
        for j, a in enumerate(coefficients, start=1):
            if a:
                x[:, t] += a * x[:, t - j]
    return x[:, warm:]


def garch(seed, series, steps, phi=0.6, warm=400):
    """AR(1) whose innovations have variance 1 on average, σ_t² = .05 + .15 e_{t-1}² + .8 σ_{t-1}² (GARCH)."""
    shocks = np.random.default_rng(seed).normal(size=(steps + warm, series))
    x, variance = np.zeros_like(shocks), np.ones(series)
    for t in range(1, steps + warm):
        shocks[t] *= np.sqrt(variance)
        variance = 0.05 + 0.15 * shocks[t] ** 2 + 0.8 * variance
        x[t] = phi * x[t - 1] + shocks[t]
    return x[warm:].T


def fractional(seed, series, steps, d=0.3):
    """Fractional noise (1 - B)^d x = e, exactly, by embedding its autocovariances in a circle (Davies and Harte 1987).

    γ_0 = Γ(1 - 2d)/Γ(1 - d)², γ_k = γ_{k-1} (k - 1 + d)/(k - d) (Hosking 1981).
    """
    lags = np.arange(1, steps + 1)
    gamma = math.gamma(1 - 2 * d) / math.gamma(1 - d) ** 2
    covariances = np.concatenate([[gamma], gamma * np.cumprod((lags - 1 + d) / (lags - d))])
    circle = np.concatenate([covariances, covariances[-2:0:-1]])
    spectrum = np.fft.fft(circle).real
    assert spectrum.min() > -1e-9
    seeded = np.random.default_rng(seed)
    both = seeded.normal(size=(series, 2, len(circle)))
    turned = np.fft.fft(np.sqrt(np.maximum(spectrum, 0)) * (both[:, 0] + 1j * both[:, 1]), axis=1)
    return turned.real[:, :steps] / np.sqrt(len(circle))


def counts_with_memory(seed, series, steps, alpha=0.6, warm=100):
    """INAR(1): of the last row's x items each stays with chance α, and a negative binomial number comes (mean 1)."""
    seeded = np.random.default_rng(seed)
    x = np.zeros((steps + warm, series), dtype=np.int64)
    fresh = seeded.negative_binomial(1, 0.5, size=x.shape)
    for t in range(1, len(x)):
        x[t] = seeded.binomial(x[t - 1], alpha) + fresh[t]
    return x[warm:].T.astype(float)


def states(seeded, series, steps, stay, share):
    """A chain of two states: True for a share of the steps, each stretch of True lasting 1/(1 - stay) on average."""
    begin = (1 - stay) * share / (1 - share)
    chance = seeded.random((steps, series))
    on = np.zeros((steps, series), dtype=bool)
    on[0] = chance[0] < share
    for t in range(1, steps):
        on[t] = np.where(on[t - 1], chance[t] < stay, chance[t] < begin)
    return on.T


def regimes(seed, series, steps, phi=0.6, warm=400):
    """AR(1) whose innovations have variance 1 on average: 2.5 in a state that holds for 50 rows, else .5."""
    seeded = np.random.default_rng(seed)
    wild = states(seeded, series, steps + warm, 0.98, 0.25)
    shocks = seeded.normal(size=wild.shape) * np.sqrt(np.where(wild, 2.5, 0.5))
    for t in range(1, shocks.shape[1]):
        shocks[:, t] += phi * shocks[:, t - 1]
    return shocks[:, warm:]


LOST = {"clusters": (5 / 6, 0.15), "5 %": (0.05, 0.05), "20 %": (0.2, 0.2)}
"""How rows get lost: the chance that one is after a lost one, and the share of them."""


def with_gaps(x, seed, how):
    """Rows taken out, at random or in clusters of six."""
    seeded = np.random.default_rng([9, *np.atleast_1d(seed)])
    return np.where(states(seeded, *x.shape, *LOST[how]), np.nan, x)


def moving(seed, series, steps, thetas, phi=()):
    """ARMA: Σφ x_{t-j} + e_t + Σθ e_{t-j} with standard normal innovations."""
    e = autoregressive(seed, series, steps + len(thetas), phi) if len(phi) else (
        np.random.default_rng(seed).normal(size=(series, steps + len(thetas)))
    )
    first = len(thetas)
    return e[:, first:] + sum(theta * e[:, first - j : -j] for j, theta in enumerate(thetas, start=1))


def make(kind, seed, series, steps):
    """One of the processes that the measures are held against."""
    seeded = np.random.default_rng(seed)
    if "; lost " in kind:
        kind, how = kind.split("; lost ")
        return with_gaps(make(kind, seed, series, steps), seed, how)
    if kind == "cyclic":
        return autoregressive(seed, series, steps, CYCLIC)
    if kind in MIXED:
        return moving(seed, series, steps, *MIXED[kind])
    if kind == "fractional":
        return fractional(seed, series, steps)
    if kind == "inar":
        return counts_with_memory(seed, series, steps)
    if kind == "regimes":
        return regimes(seed, series, steps)
    if kind == "rounded":
        return np.round(autoregressive(seed, series, steps, 0.6))
    if kind == "walk":
        return np.cumsum(seeded.normal(size=(series, steps)), axis=1)
    if kind == "trend":
        return autoregressive(seed, series, steps, 0.6) + SLOPE * np.arange(steps)
    if kind == "wandering":  # a second, slow part: of the same variance as the first, with a memory of 200 rows
        slow = autoregressive([7, *np.atleast_1d(seed)], series, steps, SLOW, warm=1500)
        return autoregressive(seed, series, steps, 0.6) + 1.25 * np.sqrt(1 - SLOW**2) * slow
    if kind == "two seasons":
        hour = np.arange(steps)
        weekend = hour % 168 >= 120
        return make("seasonal", seed, series, steps) - weekend * (2 + np.sin(2 * np.pi * hour / 24))
    if kind == "white":
        return seeded.normal(size=(series, steps))
    if kind.startswith("ar"):
        return autoregressive(seed, series, steps, float(kind[2:]))
    if kind == "ma":
        noise = seeded.normal(size=(series, steps + 1))
        return noise[:, 1:] + 0.6 * noise[:, :-1]
    if kind == "garch":
        return garch(seed, series, steps)
    if kind == "seasonal_ar":  # (1 - .4 B)(1 - .6 B^24) x = e, multiplied out
        return autoregressive(seed, series, steps, [0.4, *[0.0] * 22, 0.6, -0.24], warm=960)
    if kind == "t3":
        return seeded.standard_t(3, size=(series, steps))
    if kind == "lognormal":
        return np.exp(0.8 * autoregressive(seed, series, steps, 0.6))
    if kind == "counts":
        return seeded.negative_binomial(3, 0.3, size=(series, steps)).astype(float)
    if kind == "seasonal":
        cycle = 4 * np.sin(2 * np.pi * np.arange(steps) / 24) + 2 * (np.arange(steps) % 24 < 6)
        return autoregressive(seed, series, steps, 0.6) + cycle
    raise ValueError(kind)


SEASONAL = {"day": 24}


def look(measure: Measure, values, start, stays=LIKE, risk=0.01, lengths=None, **fields) -> Measurement:
    """Run a measure on a panel."""
    question = Question(measure.Fields(**fields), stays, risk, lengths or {})
    return measure.run(panel(values, start, lengths), question)


def p_values(seen: Measurement):
    """The p-value of each series as the judge takes it; NaN where undecided."""
    tails = [
        reference.p_value(side) for side, reference in (("upper", seen.upper), ("lower", seen.lower)) if reference
    ]
    p = tails[0] if len(tails) == 1 else np.minimum(1, 2 * np.minimum(*tails))
    return np.where(seen.undecided >= 0, np.nan, p)[:, 0]


def alarms(measure, kind, n, past, risks=(0.05, 0.01, 0.001), series=2000, blocks=1, seed=1, stays=LIKE, **fields):
    """False-alarm rates of the measure, and of the limits for independent rows, at the risks."""
    lengths = SEASONAL if kind == "seasonal" else {}
    honest, naive = np.zeros(len(risks)), np.zeros(len(risks))
    for block in range(blocks):
        values = make(kind, [seed, block], series, past + n)
        seen = look(measure, values, past, stays, 0.01, lengths, **fields)
        p = p_values(seen)
        sides = (seen.upper is not None) + (seen.lower is not None)
        for place, risk in enumerate(risks):
            honest[place] += np.sum(p <= risk)
            share = np.full(seen.observed.shape, risk / sides)
            beyond = np.zeros(seen.observed.shape, dtype=bool)
            if seen.upper is not None:
                beyond |= seen.observed > seen.upper.naive_limit("upper", share)
            if seen.lower is not None:
                beyond |= seen.observed < seen.lower.naive_limit("lower", share)
            naive[place] += beyond.sum()
    return honest / (series * blocks), naive / (series * blocks)


def agrees(seen: Measurement, risks=(0.2, 0.01, 0.0001)):
    """Whether p-value and limit tell the same, for every series, side and risk."""
    for side, reference in (("upper", seen.upper), ("lower", seen.lower)):
        if reference is None:
            continue
        for risk in risks:
            limit = reference.limit(side, np.full(seen.observed.shape, risk))
            p = reference.p_value(side)
            beyond = seen.observed >= limit if side == "upper" else seen.observed <= limit
            told = (seen.undecided < 0) & (np.abs(p / risk - 1) > 1e-6)
            np.testing.assert_array_equal((p <= risk)[told], beyond[told])


def power_at_detectable(measure, kind, n, past, change, risk=0.01, series=2000, **fields):
    """How often a window changed by its own ``detectable`` is found; ``change`` puts the change in."""
    lengths = SEASONAL if kind == "seasonal" else {}
    values = make(kind, 77, series, past + n)
    seen = look(measure, values, past, LIKE, risk, lengths, **fields)
    size = seen.upper.detectable("upper", np.full(seen.observed.shape, risk / 2))
    changed = values.copy()
    changed[:, past:] = change(values[:, past:], np.median(size), seen)
    return np.nanmean(p_values(look(measure, changed, past, LIKE, risk, lengths, **fields)) <= risk)
