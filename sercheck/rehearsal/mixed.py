"""One measurement put together from rows of several: a batch of which some series were broken and the others not.

Depends on ``judge``, ``measure`` and ``serial``. Only for measures that look at each series by itself.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace

import numpy as np

from sercheck.judge import Seen
from sercheck.measure import Measurement, Reference, Side
from sercheck.serial.arrays import Floats, Ints


@dataclass(frozen=True)
class Known:
    """A reference that gives its p-values once: many batches pick rows of the same one."""

    reference: Reference
    memo: dict[Side, Floats] = field(default_factory=dict, compare=False, repr=False)

    @property
    def bound(self) -> Floats:
        return self.reference.bound

    @property
    def standard_error(self) -> Floats:
        return self.reference.standard_error

    def p_value(self, side: Side) -> Floats:
        if side not in self.memo:
            self.memo[side] = self.reference.p_value(side)
        return self.memo[side]

    def limit(self, side: Side, risk: Floats) -> Floats:
        return self.reference.limit(side, risk)

    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        return self.reference.naive_limit(side, risk)

    def detectable(self, side: Side, risk: Floats) -> Floats:
        return self.reference.detectable(side, risk)


@dataclass(frozen=True)
class Unsaid:
    """A reference of which only p-values (and what could be found) are asked: whether the batch is held."""

    reference: Reference

    @property
    def bound(self) -> Floats:
        return np.full((1, 1), np.nan)

    @property
    def standard_error(self) -> Floats:
        return np.full((1, 1), np.nan)

    def p_value(self, side: Side) -> Floats:
        return self.reference.p_value(side)

    def limit(self, side: Side, risk: Floats) -> Floats:
        return np.full((1, 1), np.nan)

    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        return np.full((1, 1), np.nan)

    def detectable(self, side: Side, risk: Floats) -> Floats:
        return np.full((1, 1), np.nan)


def known(seen: Seen) -> Seen:
    """The same with p-values that are computed once."""
    return _wrapped(seen, Known)


def unsaid(seen: Seen) -> Seen:
    """The same without limits, for a first decision."""
    return _wrapped(seen, Unsaid)


def _wrapped(seen: Seen, wrap: Callable[[Reference], Reference]) -> Seen:
    one = seen.measurement
    upper, lower = (None if side is None else wrap(side) for side in (one.upper, one.lower))
    return replace(seen, measurement=replace(one, upper=upper, lower=lower))


@dataclass(frozen=True)
class Source:
    """Rows of one measurement and the places they take among the S series of the whole, both of shape (K,)."""

    seen: Seen
    rows: Ints
    places: Ints


@dataclass(frozen=True)
class Picked:
    """A reference whose rows come from several.

    Attributes:
        sources: where each row comes from.
        references: a reference for each source, or None where it has none.
        shape: (S, L).
    """

    sources: tuple[Source, ...]
    references: tuple[Reference | None, ...]
    shape: tuple[int, int]

    @property
    def bound(self) -> Floats:
        return self._picked(lambda reference, _: reference.bound)

    @property
    def standard_error(self) -> Floats:
        return self._picked(lambda reference, _: reference.standard_error)

    def p_value(self, side: Side) -> Floats:
        return self._picked(lambda reference, _: reference.p_value(side))

    def limit(self, side: Side, risk: Floats) -> Floats:
        return self._picked(lambda reference, own: reference.limit(side, own), risk)

    def naive_limit(self, side: Side, risk: Floats) -> Floats:
        return self._picked(lambda reference, own: reference.naive_limit(side, own), risk)

    def detectable(self, side: Side, risk: Floats) -> Floats:
        return self._picked(lambda reference, own: reference.detectable(side, own), risk)

    def _picked(self, read: Callable[[Reference, Floats], Floats], risk: Floats | float = 0.5) -> Floats:
        out = np.full(self.shape, np.nan)
        whole = np.broadcast_to(risk, self.shape)
        for source, reference in zip(self.sources, self.references, strict=True):
            if reference is None or not len(source.rows):
                continue
            shape = source.seen.measurement.observed.shape
            own = np.full(shape, 0.5)  # rows that are not asked for may have any risk
            own[source.rows] = whole[source.places]
            out[source.places] = np.broadcast_to(read(reference, own), shape)[source.rows]
        return out


def mixed(sources: Sequence[Source], keys: np.ndarray) -> Seen:
    """The whole: each source's rows at their places.

    Args:
        sources: cover all places, each once; all of one rule, column and window. ``method`` names what each of them
            was measured by.
        keys: names of all series, shape (S,).
    """
    able = tuple(source for source in sources if len(source.rows))
    first = able[0].seen
    seen = first.measurement
    shape = (len(keys), seen.observed.shape[1])

    def picked(read: Callable[[Measurement], np.ndarray]) -> np.ndarray:
        parts = [read(source.seen.measurement) for source in able]
        out = np.empty((len(keys), *parts[0].shape[1:]), dtype=np.result_type(*parts))
        for source, part in zip(able, parts, strict=True):
            out[source.places] = part[source.rows]
        return out

    starts = np.cumsum([0, *(len(source.seen.measurement.reasons) for source in able)]).tolist()
    start_of = {id(source.seen.measurement): start for source, start in zip(able, starts, strict=False)}

    def moved(index: Ints, measurement: Measurement) -> Ints:
        return np.where(index < 0, index, index + start_of[id(measurement)])

    def unsure(one: Measurement) -> Ints:
        none = np.full(one.observed.shape, -1, dtype=np.int64)
        return none if one.unsure is None else moved(np.broadcast_to(one.unsure, one.observed.shape), one)

    told = [source.seen.measurement for source in able]
    references = [tuple(getattr(one, side) for one in told) for side in ("upper", "lower")]
    upper, lower = (
        Picked(able, both, shape) if any(each is not None for each in both) else None for both in references
    )
    widths = {one.scores.shape[1] for one in told if one.scores is not None}
    measurement = replace(
        seen,
        observed=picked(lambda one: one.observed),
        n=picked(lambda one: np.broadcast_to(one.n, one.observed.shape)),
        n_missing=picked(lambda one: np.broadcast_to(one.n_missing, one.observed.shape)),
        n_eff=picked(lambda one: np.broadcast_to(one.n_eff, one.observed.shape)),
        upper=upper,
        lower=lower,
        undecided=picked(lambda one: moved(one.undecided, one)),
        reasons=tuple(reason for one in told for reason in one.reasons),
        scores=None if len(widths) != 1 else picked(lambda one: _scores(one, *widths)),
        unsure=picked(unsure) if any(one.unsure is not None for one in told) else None,
        method=_said([one.method for one in told]),
        assumes=_said([one.assumes for one in told]),
    )
    return replace(first, keys=keys, measurement=measurement, cause=None, support=None, whole=None)


def _scores(one: Measurement, width: int) -> Floats:
    return np.full((len(one.observed), width), np.nan) if one.scores is None else one.scores


def _said(texts: Sequence[str]) -> str:
    """What is said of the whole: each of the texts that no other one holds, once."""
    apart = [text for text in dict.fromkeys(texts) if not any(text != other and text in other for other in texts)]
    return "; ".join(apart)
