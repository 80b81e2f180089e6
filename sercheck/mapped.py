"""Records of Arrow batches of whole series, for the map of whatever engine has them; depends on ``blocks``.

Each batch is judged by itself, which is right for rules whose risk is not shared among series. Where it is shared, map
``blocks.look`` over the blocks, bring what it returns together in one place and decide there once, as ``scale`` does.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from sercheck import __version__
from sercheck.as_of import clock
from sercheck.blocks import look
from sercheck.collect import Common, records
from sercheck.engine import Run, decide
from sercheck.errors import UsageError
from sercheck.formats import arrow_table
from sercheck.history import Past
from sercheck.intake.assemble import planned_grids
from sercheck.intake.build import to_rows
from sercheck.intake.calendar import Cadence
from sercheck.intake.parquet import table_chunk
from sercheck.intake.since import compact
from sercheck.intake.stretch import Extent, plan
from sercheck.measures import get
from sercheck.record import INTEGERS, utc_text
from sercheck.rulebook import load_rules
from sercheck.rulebook.compiled import Rulebook
from sercheck.verdict import layout_of

if TYPE_CHECKING:
    import pyarrow as pa


def judge_batches(
    rules: Rulebook | str | Path,
    batches: Iterable[pa.RecordBatch],
    *,
    batch: str,
    first: str,
    last: str,
    since: str | None = None,
    as_of: str | None = None,
) -> Iterator[pa.Table]:
    """Judge Arrow batches one by one; pure, so any engine may call it anywhere and again.

    Args:
        rules: a compiled rule file or its path. Every rule is ``across: series`` or has no sampling error, and none
            compares series with each other: only of these is a record right without the other series.
        batches: all rows of some series each, no series in two; rows before ``first`` are history. Any order of rows.
        batch: what the records call the batch (``batch_id`` and ``batch_fingerprint``): no call knows all of its rows.
        first: the first step of the batch that is judged, RFC 3339 or ISO 8601 (UTC when it has no offset).
        last: its last step. Both are the same for all series, so that a series that ends early has rows missing.
        since: the first step of history; default there is none.
        as_of: the clock to judge by; default now.

    Yields:
        A table of records (the columns of the record schema) for each batch. Nothing is decided about the feed and
        nothing is stored: it may be loaded when no record's ``action`` is hold.

    Raises:
        UsageError: a rule needs all series, or the feed is irregular.
        BatchError: rows cannot be read.
    """
    book = rules if isinstance(rules, Rulebook) else load_rules(rules)
    _must_stand_alone(book)
    layout = layout_of(book)
    ends = [clock(stamp) for stamp in (first, last)]
    begins = None if since is None else clock(since)
    cadence = Cadence(layout.every, layout.timezone).anchored(np.array([ends[0]]))
    if cadence.irregular:
        raise UsageError("every", "an irregular feed has no steps that all batches share", "a cadence")
    judged_at = clock(as_of)
    own = Extent(ends[0], ends[1], ends[0], ends[1], np.inf)
    past = None if begins is None else Extent(begins, ends[0] - cadence.step, begins, ends[0] - 1, np.inf)
    laid = plan(own, past, cadence, layout, None)
    run = Run(book, cadence, judged_at)
    common = Common(
        feed=book.feed,
        batch_id=batch,
        batch_fingerprint=batch,
        judged_at=str(utc_text(judged_at)[0]),
        rules_fingerprint=book.fingerprint,
        baseline_id=None,
        sercheck_version=__version__,
    )
    for number, given in enumerate(batches):
        rows = to_rows([table_chunk(_table(given), layout, cadence, f"Arrow batch {number}")], cadence)
        early = rows.stamps < ends[0]
        new = rows.take(~early)
        old = compact(rows.take(early)) if past is not None and early.any() else None
        seen = [part for grid in planned_grids(new, old, laid) for part in look(grid, Past(None), run).seen]
        yield arrow_table(records(book, decide(book, seen), common).columns, INTEGERS)


def _table(given: pa.RecordBatch) -> pa.Table:
    """A batch as a table."""
    import pyarrow as pa

    return pa.Table.from_batches([given])


def _must_stand_alone(book: Rulebook) -> None:
    """Refuse rules whose records need the other series."""
    for rule in book.rules:
        measure = get(rule.measure)
        place, todo = f"rule '{rule.name}'", "Gate the feed as a whole (engine local or dask) for this rule."
        if measure.compares_series:
            raise UsageError(place, "it compares series with each other", "rules that look at one series", todo)
        if "together" in rule.across or (not measure.exact and rule.across != ("series",)):
            came = f"its risk is shared among all series (across: {', '.join(rule.across)})"
            raise UsageError(place, came, "across: series", todo)
