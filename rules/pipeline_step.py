"""A step of a Python pipeline: it hands the rows on when the batch is released and stops the run when it is held.

Any pipeline that stops when a step raises can call `gated`; it needs nothing but a path and gives it back.
"""

from pathlib import Path

import sercheck


def gated(rules: str, batch: Path, store: Path) -> Path:
    """The batch, once it may be loaded.

    Raises `sercheck.BatchHeld` for a held batch and another `sercheck.SercheckError` in trouble; both stop the run.
    """
    verdict = sercheck.gate(rules, batch, store=store)
    verdict.raise_if_held()
    return batch
