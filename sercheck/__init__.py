"""sercheck decides for every batch of a scheduled feed whether it may be loaded. This file hands on the public names.

They are imported when first used, so that ``import sercheck`` costs nothing.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from sercheck import serial
    from sercheck.drafting.run import Draft, draft
    from sercheck.errors import BatchHeld, SercheckError
    from sercheck.intake.databases import rows
    from sercheck.portrait.whole import Study, study
    from sercheck.rehearsal.run import rehearse
    from sercheck.rulebook import load_rules
    from sercheck.verdict import Verdict, gate

__all__ = [
    "BatchHeld", "Draft", "SercheckError", "Study", "Verdict", "__version__", "draft", "gate", "load_rules", "rehearse",
    "rows", "serial", "study",
]  # fmt: skip

__version__ = "0.1.0"

_PLACES = {
    "BatchHeld": "sercheck.errors",
    "Draft": "sercheck.drafting.run",
    "SercheckError": "sercheck.errors",
    "Study": "sercheck.portrait.whole",
    "Verdict": "sercheck.verdict",
    "draft": "sercheck.drafting.run",
    "gate": "sercheck.verdict",
    "load_rules": "sercheck.rulebook",
    "rehearse": "sercheck.rehearsal.run",
    "rows": "sercheck.intake.databases",
    "study": "sercheck.portrait.whole",
}


def __getattr__(name: str) -> object:
    if name == "serial":
        return importlib.import_module("sercheck.serial")
    if name in _PLACES:
        return getattr(importlib.import_module(_PLACES[name]), name)
    raise AttributeError(f"module 'sercheck' has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted(__all__)
