"""Models of windows that are judged without a history, each fitted once however many statistics ask for it.

Depends on numpy and ``serial`` only.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from sercheck.serial.arrays import Bools, Floats, Ints
from sercheck.serial.autoregression import Autoregression, chosen, largest_order, root_beyond
from sercheck.serial.centre import Centred, centred
from sercheck.serial.far_lag import FOR_EVER, NEAR, ROOT, with_far_lag
from sercheck.serial.reflections import Reflected, reflected
from sercheck.serial.sampling_error import Residuals


@dataclass(frozen=True)
class Alone:
    """What a window tells of itself.

    Attributes:
        model: of order p + L where there is an echo at lag L.
        residuals: its innovations, prepared.
        wanders: no level that the series returns to: a root of the near model beyond ``ROOT``, or an echo that
            does not fade; shape (S,).
        far: lag of its echo, 0 where there is none, shape (S,).
        echo: Φ of the echo, 0 where there is none, shape (S,).
    """

    model: Autoregression
    residuals: Residuals
    wanders: Bools
    far: Ints
    echo: Floats


class OwnModels:
    """What the statistics of one block of windows share: Burg's recursion, and the models taken from it.

    Args:
        x: one series or (S, T); NaN is missing.
    """

    def __init__(self, x: Floats) -> None:
        self.x = x
        self._reflected: Reflected | None = None
        self._alone: dict[int, Alone] = {}
        self._like: OwnModels | None = None

    @cached_property
    def data(self) -> Centred:
        """The windows, centred."""
        return centred(self.x)

    def in_unit(self, unit: Floats) -> OwnModels:
        """The same of the windows divided by a power of two, shape (S,)."""
        other = OwnModels(self.x)
        data = replace(self.data, scale=self.data.scale / unit, mean=self.data.mean / unit)
        other.data = data
        other._like = self
        other._reflected = replace(self.reflected(largest_order(data.values.shape[1])), data=data)
        return other

    def reflected(self, width: int) -> Reflected:
        """Burg's recursion up to the order ``width`` at least."""
        width = min(width, self.data.values.shape[1] // 3)
        if self._reflected is None or self._reflected.k.shape[1] < width:
            self._reflected = reflected(self.data, max(width, largest_order(self.data.values.shape[1])))
        return self._reflected

    def burg(self, max_order: int) -> Autoregression:
        """``autoregression.burg`` of the windows."""
        return chosen(self.reflected(max_order), max_order)

    def alone(self, longest: int) -> Alone:
        """Models for statistics at lags up to ``longest``, echoes included."""
        order = min(largest_order(self.data.values.shape[1]), NEAR)
        wanted = order if longest == 1 else max(order, longest + 2)
        if wanted not in self._alone:
            self._alone[wanted] = self._made(wanted)
        return self._alone[wanted]

    def echoes(self, order: int) -> tuple[Ints, Floats]:
        """Lag and Φ of the echo beside models of at most ``order`` (see ``Alone``)."""
        if self._like is not None:  # neither depends on the unit
            return self._like.echoes(order)
        if order == min(largest_order(self.data.values.shape[1]), NEAR):
            own = self.alone(1)
            return own.far, own.echo
        near = self.burg(order)
        told, _, echo = with_far_lag(self.x, near)
        return told.order - near.order, echo

    def _made(self, wanted: int) -> Alone:
        near = self.burg(wanted)
        like = next(iter(self._alone), None)
        if like is None:
            return _told(self.x, near)
        known = self._alone[like]
        rows = np.flatnonzero(near.order != self.burg(like).order)
        if 2 * len(rows) > len(near.order):
            return _told(self.x, near)
        # a series of the same order has the same model, whatever the highest order tried
        model = replace(known.model, reached=near.reached)
        if not len(rows):
            return replace(known, model=model)
        other = _told(self.x[rows], near.rows(rows))
        wanders, far, echo = known.wanders.copy(), known.far.copy(), known.echo.copy()
        wanders[rows], far[rows], echo[rows] = other.wanders, other.far, other.echo
        residuals = known.residuals.changed(rows, other.residuals)
        return Alone(_with_rows(model, rows, other.model), residuals, wanders, far, echo)


def alone(x: Floats, longest: int) -> Alone:
    """Model each series of ``x``, shape (S, T), for statistics at lags up to ``longest``, echoes included."""
    return OwnModels(x).alone(longest)


def _told(x: Floats, near: Autoregression) -> Alone:
    model, e, echo = with_far_lag(x, near)
    residuals = Residuals(e, model.order, near.order + (echo > 0))
    wanders = root_beyond(near, ROOT) | (echo > FOR_EVER)
    return Alone(model, residuals, wanders, model.order - near.order, echo)


def _with_rows(model: Autoregression, rows: Ints, other: Autoregression) -> Autoregression:
    """The same models, those of ``rows`` replaced."""
    width = max(model.reflection.shape[1], other.reflection.shape[1])

    def put(whole: Floats, part: Floats) -> Floats:
        wide = np.zeros((len(whole), width))
        wide[:, : whole.shape[1]] = whole
        wide[rows] = 0.0
        wide[rows, : part.shape[1]] = part
        return wide

    order, variance = model.order.copy(), model.variance.copy()
    order[rows], variance[rows] = other.order, other.variance
    return replace(
        model,
        order=order,
        variance=variance,
        coefficients=put(model.coefficients, other.coefficients),
        reflection=put(model.reflection, other.reflection),
    )
