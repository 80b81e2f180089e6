"""``sercheck.rehearse``: how often the rules hold healthy batches, and which faults they catch, before they go live."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Sequence
from contextlib import ExitStack
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from sercheck.errors import OutputError, UsageError
from sercheck.outputs import check_place
from sercheck.rehearsal.advice import advice
from sercheck.rehearsal.feed import read_feed
from sercheck.rehearsal.replay import Plan, Tell, replay, wanted
from sercheck.rehearsal.verdicts import Rehearsal, conclude
from sercheck.rulebook import load_rules
from sercheck.rulebook.compiled import Rulebook

if TYPE_CHECKING:
    from sercheck.verdict import Rows


def rehearse(
    rules: Rulebook | str | Path,
    history: Rows,
    *,
    begins: str | None = None,
    faults: Sequence[str] | None = None,
    sizes: Sequence[float] | None = None,
    tries: int = 4,
    batches: int = 7,
    seed: int = 1,
    workers: int = 1,
    records: str | Path | None = None,
    tell: Tell | None = None,
) -> Rehearsal:
    """Replay a history batch by batch, healthy and with faults put in.

    Every batch is judged against the rows before it alone, as ``gate`` would have judged it.

    Args:
        rules: a compiled rule file (``load_rules``) or its path.
        history: rows that were let in: a DataFrame, a path, several, or a glob.
        begins: local date (2026-01-12) from which batches are judged; by default the first ninety batches only teach,
            or 56 (26 of seven rows or fewer) where fewer than four weeks of them would be left.
        faults: names of the faults to try; default all, those of installed packages among them.
        sizes: sizes to try them at; default those of the catalogue.
        tries: batches, drawn from the healthy ones, that each fault begins in; 0 tries no fault.
        batches: for how many batches a fault is let go on until one is held.
        seed: of all that is drawn: the same seed gives the same rehearsal.
        workers: processes; more than 1 want the caller's program guarded by ``if __name__ == "__main__"``.
        records: a Parquet file for all records, with the columns ``batch``, ``fault``, ``size``, ``try``,
            ``series_hit`` and ``began`` before those of a record.
        tell: is told the share of the work that is done, and what is being done.

    An interrupt (Ctrl-C) ends it early: what is finished is returned, and ``replayed.finished`` is False.

    Raises:
        SercheckError: rule file or history cannot be used, or a fault is unknown.
    """
    if tries < 0 or batches < 1 or workers < 1:
        raise UsageError("rehearse", f"{tries} tries over {batches} batches in {workers} processes", "positive numbers")
    if sizes is not None and not (len(sizes) and all(np.isfinite(sizes))):
        raise UsageError("--sizes", f"{list(sizes)}", "numbers")
    wanted(faults)
    if records is not None:
        if Path(records).suffix.lower() != ".parquet":
            raise OutputError(str(records), "records of a rehearsal are Parquet", "a name that ends in .parquet")
        check_place(records)
    book = rules if isinstance(rules, Rulebook) else load_rules(rules)
    feed = read_feed(book, history, begins)
    plan = Plan(
        None if faults is None else tuple(faults), None if sizes is None else tuple(sizes), tries, batches, seed
    )
    with ExitStack() as stack:
        folder = None
        if records is not None:
            folder = Path(stack.enter_context(tempfile.TemporaryDirectory(prefix="sercheck-")))
        replayed = replay(feed, plan, workers, tell or _quiet, folder)
        if records is not None and folder is not None:
            from sercheck.rehearsal.parts import join

            join(folder, records)
    told = conclude(feed, replayed, batches)
    return replace(told, advice=advice(told))


def cores() -> int:
    """Processors that this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return max(1, len(os.sched_getaffinity(0)))
    return os.cpu_count() or 1


def _quiet(_: float, __: str) -> None:
    pass
