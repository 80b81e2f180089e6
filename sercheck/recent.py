"""From a panel to the recent past of its window; depends on ``serial``, ``grid``, ``measure``, ``baseline``,
``looks`` and ``recent_past``.

A measure asks ``enough(panel)`` where this method applies, ``recent_past(panel)`` for the table of the last ninety
or so stretches, and calls the method of its name on it::

    recent_measurement(panel, recent_past(panel).level())
    told = recent_past(panel).phase(question.rests)
    recent_measurement(panel, told, season="day", idle=idle_phase(panel, question.risk))
"""

from __future__ import annotations

import numpy as np

from sercheck.baseline import chosen_seasons
from sercheck.grid import Axis, Panel
from sercheck.measure import POWER, Measurement, Reasons
from sercheck.recent_past import Comparison, RecentPast
from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.recent import studentised
from sercheck.serial.risk import t_quantile
from sercheck.serial.walk_forward import Profile, log_unit, on_scale, walk_forward

BATCHES = 90
"""Stretches of history that a new one is compared with: a quarter of days."""

FEWEST, FEWEST_WEEKS = 56, 26
"""Stretches that the method needs: of a day or so, and of up to seven rows (simulated)."""

FEWEST_TOLD = 16
"""Stretches of history that have the statistic, in any case: t with fewer degrees of freedom sees nothing."""

FIRST = 104
"""Stretches of history in which scale and gain are chosen: ninety, and two weeks of days that teach the profile."""

FARTHEST = 1e60
"""Values of a window are cut here, in units of history's largest: their fourth powers stay within doubles."""

DAY = 86_400_000_000_000
"""Nanoseconds of a day."""

METHOD = "one-step forecast from the statistics of the last batches, tails from its own misses"
ASSUMES = "the batch is to the week before it as the last batches were to theirs"


def enough(panel: Panel) -> Bools:
    """Series whose history holds enough stretches of the window's length, shape (S,).

    Sixteen of the last ninety must have half of their values: a feed that was silent or held for months has a history
    and no recent past. A window shorter than the feed's shortest cycle is not compared in this way: its forerunners lie
    at other places of the cycle.
    """
    n = panel.values.shape[1] - panel.start
    if not panel.start or n < min(panel.axis.lengths.values(), default=1) or not n:
        return np.zeros(len(panel.values), dtype=bool)
    fewest = FEWEST_WEEKS if n <= 7 else FEWEST
    seen = ~np.isnan(panel.history)
    batches = min(BATCHES, panel.start // n)
    near = seen[:, panel.start - batches * n :].reshape(len(seen), batches, n).sum(axis=2)
    alive = (2 * near >= n).sum(axis=1) >= FEWEST_TOLD
    return np.asarray((seen.sum(axis=1) >= n * fewest // 2) & alive & (panel.start // n >= fewest))


def has_profile(panel: Panel) -> bool:
    """History teaches a season's profile."""
    return season_of(panel.axis, panel.start) is not None


def ask_told(reasons: Reasons, told: Comparison) -> None:
    """Undecided where too few batches of history have the statistic, or the window itself has none."""
    reasons.add(np.isnan(told.observed), "too few values in the window, or a closed day")
    reasons.add(
        told.batches < FEWEST_TOLD - 7, f"fewer than {FEWEST_TOLD} earlier batches have enough values to compare with"
    )
    reasons.add(np.isnan(told.reference.p_value("upper")), "the earlier batches do not vary, so nothing can be unusual")


def recent_measurement(
    panel: Panel,
    told: Comparison,
    *,
    season: str | None = None,
    lag: int | None = None,
    idle: Bools | None = None,
) -> Measurement:
    """What a measure hands to the judge for ``like: history``.

    Args:
        panel: history and window.
        told: what one of the methods of ``RecentPast`` gave.
        season: name of the season looked at, or None.
        lag: the lag looked at, or None.
        idle: series in which the fault could hardly be seen, shape (S,): a pass of theirs says nothing.
    """
    reasons = Reasons(told.observed.shape)
    ask_told(reasons, told)
    index, texts = reasons.index, list(reasons.texts)
    unsure: Ints | None = None
    if idle is not None and idle.any():
        unsure = np.where(idle[:, None] & (index < 0), len(texts), -1)
        texts.append("the season is too weak beside the noise: neither its loss nor a slip of one step would be seen")
    return Measurement(
        observed=told.observed,
        n=told.n,
        n_missing=panel.values.shape[1] - panel.start - told.n,
        n_eff=told.n_eff,
        upper=told.reference,
        lower=told.reference,
        undecided=index,
        reasons=tuple(texts),
        method=METHOD,
        assumes=ASSUMES,
        lags=None if lag is None else (lag,),
        season=season,
        scores=studentised(told.t, told.misses, told.batches[:, 0]) if told.misses.shape[1] else None,
        unsure=unsure,
    )


def idle_amplitude(panel: Panel, risk: float) -> Bools:
    """Series in which a lost season would hardly be seen even over a week of batches, shape (S,)."""
    past = recent_past(panel)
    return idle(past.sight(past.amplitudes), past, risk)


def idle_phase(panel: Panel, risk: float) -> Bools:
    """Series in which a slip of one step would hardly be seen even over a week of batches, shape (S,)."""
    past = recent_past(panel)
    return idle(past.sight(past.slips), past, risk)


def idle(sight: Floats, past: RecentPast, risk: float) -> Bools:
    """Where √7 times the shift of T does not reach t_{1-α/4} + .84 (found with probability .8)."""
    needed = float(t_quantile(1 - risk / 4, max(past.held.shape[1] - 10.0, 1.0))) + float(t_quantile(POWER, np.inf))
    with np.errstate(invalid="ignore"):
        return np.asarray(~(np.sqrt(7) * sight > needed))


def recent_past(panel: Panel, *, logs: bool = True) -> RecentPast:
    """The window and the stretches of its length before it, with scale and profile chosen; computed once a panel.

    Batches that were held and then let in (``panel.axis.held``) stay in level and profile and leave the looks and the
    histories of autocorrelation, amplitude and phase.

    Args:
        panel: history and window.
        logs: choose ln(1 + x/c) where the scatter grows with the level; off for pooled statistics.
    """
    return panel.remember(("recent past", logs), lambda: _recent_past(panel, logs=logs))


def season_of(axis: Axis, history: int) -> str | None:
    """The season whose profile is learned: the longest within a week that history teaches, else the shortest."""
    names = chosen_seasons(axis, history)
    within = [name for name in names if axis.lengths[name] <= max(7 * day_steps(axis), 2)]
    return within[-1] if within else names[0] if names else None


def day_steps(axis: Axis) -> float:
    """Steps in a day by the stamps (0 for a single stamp, or stamps that do not go on)."""
    step = float(np.median(np.diff(axis.stamps))) if len(axis) > 1 else 0.0
    return DAY / step if step > 0 else 0.0


def _recent_past(panel: Panel, *, logs: bool) -> RecentPast:
    axis, start = panel.axis, panel.start
    n = panel.values.shape[1] - start
    week = round(7 * day_steps(axis))
    counts = _counts(panel.history)
    x, scale = _scaled(panel.values, start)
    taught = np.where(axis.closed, np.nan, x)
    season = season_of(axis, start)
    log = np.full(len(x), np.nan)
    profile: Profile | None = None
    y = taught
    if season is not None:
        phase, length, delay = axis.phases[season], axis.lengths[season], max(week, n, 1)
        first = min(start, FIRST * n)
        if logs:
            plain = np.zeros(len(x))  # a running mean will do to see how the scatter goes with the level
            early = walk_forward(taught[:, :first], phase[:first], length, delay, first=first, block=n, gain=plain)
            log = log_unit(taught[:, :first], early.here)
            y = on_scale(taught, log)
        profile = walk_forward(y, phase, length, delay, first=first, block=n)
    batches = min(BATCHES, start // n)
    steps = (batches + 1) * n
    return RecentPast(
        x=x[:, -steps:],
        y=y[:, -steps:],
        profile=None if profile is None else profile.last(steps),
        n=n,
        held=np.broadcast_to(_held(axis, start, batches, n), (len(x), batches)),
        log=log,
        counts=counts,
        scale=scale,
    )


def _held(axis: Axis, start: int, batches: int, n: int) -> Bools:
    """Batches of history with a held step."""
    if not len(axis.held):
        return np.zeros(batches, dtype=bool)
    return np.asarray(axis.held[start - batches * n : start].reshape(batches, n).any(axis=1))


def _counts(history: Floats) -> Bools:
    """Whole numbers from 0 on; doubles from 2^53 on are whole whatever they measure."""
    with np.errstate(invalid="ignore"):
        whole = (history >= 0) & (history < 2**53) & (history == np.floor(history))
    return np.asarray((whole | np.isnan(history)).all(axis=1))


def _scaled(values: Floats, start: int) -> tuple[Floats, Floats]:
    """Values in units of a power of two near history's largest: squares neither overflow nor vanish."""
    history = values[:, :start]
    peak = np.max(np.abs(history), axis=1, where=~np.isnan(history), initial=0.0)
    exponent: Ints = np.clip(np.frexp(peak)[1], -1021, 1022).astype(np.int64)
    with np.errstate(over="ignore"):
        scaled = np.ldexp(values, -exponent[:, None].astype(np.int32))
    return np.clip(scaled, -FARTHEST, FARTHEST), np.ldexp(1.0, exponent.astype(np.int32))
