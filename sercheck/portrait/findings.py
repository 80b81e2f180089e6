"""One odd thing in a history and where it is; depends on ``grid``."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sercheck.grid import Axis
from sercheck.intake.zone import NOT_A_STAMP


@dataclass(frozen=True)
class Finding:
    """One odd thing.

    Attributes:
        what: its kind.
        where: first and last stamp, UTC, or the steps counted from 1 where a feed has no stamps; or how many rows.
        about: a sentence.
        size: how much of it there is, rows for most kinds; orders the findings.
    """

    what: str
    where: str
    about: str
    size: float = 0.0


def stretch_of(axis: Axis, first: int, last: int) -> str:
    """The stretch from step ``first`` to step ``last`` as text."""
    if last <= first:
        return stamp_text(axis, first)
    return f"{stamp_text(axis, first)} to {stamp_text(axis, last)}"


def stamp_text(axis: Axis, step: int) -> str:
    """One step's stamp in UTC, without what a whole day does not need."""
    stamp = int(axis.stamps[step])
    if stamp == NOT_A_STAMP:
        return f"row {step + 1}"
    text = str(np.datetime64(stamp, "ns").astype("datetime64[s]"))
    return f"{text}Z"
