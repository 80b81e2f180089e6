"""The numerics for users: pure functions on one series or a (series, time) array, NaN is missing; numpy and scipy only.

The names are handed on when first used, so that a command imports only what it needs.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from sercheck.serial.autocovariances import autocorrelation, autocovariance, differences, partial_autocorrelation
    from sercheck.serial.autoregression import burg, innovations, model_autocorrelation
    from sercheck.serial.effective_sizes import effective_size
    from sercheck.serial.periods import find_seasons
    from sercheck.serial.portmanteau import box_pierce, ljung_box
    from sercheck.serial.repeats import equal_share, longest_equal_run, runs_test
    from sercheck.serial.risk import benjamini_yekutieli, holm
    from sercheck.serial.sampling_error import (
        autocorrelation_bias,
        bartlett_error,
        moving_average_band,
        white_noise_band,
    )
    from sercheck.serial.season import phase_means
    from sercheck.serial.spectral import spectral_f

_PLACES = {
    "autocorrelation": "autocovariances",
    "autocovariance": "autocovariances",
    "differences": "autocovariances",
    "partial_autocorrelation": "autocovariances",
    "burg": "autoregression",
    "innovations": "autoregression",
    "model_autocorrelation": "autoregression",
    "effective_size": "effective_sizes",
    "find_seasons": "periods",
    "box_pierce": "portmanteau",
    "ljung_box": "portmanteau",
    "equal_share": "repeats",
    "longest_equal_run": "repeats",
    "runs_test": "repeats",
    "benjamini_yekutieli": "risk",
    "holm": "risk",
    "autocorrelation_bias": "sampling_error",
    "bartlett_error": "sampling_error",
    "moving_average_band": "sampling_error",
    "white_noise_band": "sampling_error",
    "phase_means": "season",
    "spectral_f": "spectral",
}

__all__ = [
    "autocorrelation",
    "autocorrelation_bias",
    "autocovariance",
    "bartlett_error",
    "benjamini_yekutieli",
    "box_pierce",
    "burg",
    "differences",
    "effective_size",
    "equal_share",
    "find_seasons",
    "holm",
    "innovations",
    "ljung_box",
    "longest_equal_run",
    "model_autocorrelation",
    "moving_average_band",
    "partial_autocorrelation",
    "phase_means",
    "runs_test",
    "spectral_f",
    "white_noise_band",
]


def __getattr__(name: str) -> object:
    if name in _PLACES:
        return getattr(importlib.import_module(f"sercheck.serial.{_PLACES[name]}"), name)
    raise AttributeError(f"module 'sercheck.serial' has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted(__all__)
