"""Array types shared by the numerics, and the split of a series into observed and missing; depends only on numpy."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]


def as_series(x: object) -> Floats:
    """Give ``x`` as a float64 array of shape (series, time); a single series becomes one row.

    NaN and infinite values mean missing and come back as NaN.

    Raises:
        ValueError: if ``x`` has more than two dimensions.
    """
    array = np.asarray(x, dtype=np.float64)
    if array.ndim > 2:
        raise ValueError(f"expected one series or a (series, time) array, got {array.ndim} dimensions")
    array = np.atleast_2d(array)
    finite = np.isfinite(array)
    return array if finite.all() else np.where(finite, array, np.nan)
