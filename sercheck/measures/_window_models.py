"""The models of a panel's window that all rules judging it by itself share; depends on ``grid`` and ``serial``."""

from __future__ import annotations

from sercheck.grid import Panel
from sercheck.serial.own_models import OwnModels


def own_models(panel: Panel) -> OwnModels:
    """The models of the window, fitted once for all rules."""
    return panel.remember("own models", lambda: OwnModels(panel.window))
