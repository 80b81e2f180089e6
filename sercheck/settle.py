"""A person overrules: a held batch is let in, a batch is discarded, a new regime begins; depends on the store.

The ledger is told first, then the archive. A process that dies in between has said it all the same: the same call
again, or the next ``gate`` of the batch, makes the archive agree.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING

from sercheck.errors import UsageError
from sercheck.store.archive import Archive, What
from sercheck.store.ledger import open_ledger
from sercheck.store.rows import JudgedBatch, Settlement
from sercheck.store.where import archive_place

if TYPE_CHECKING:
    from sercheck.store.ledger import Ledger

STATES: dict[str, What] = {"released": "settled", "discarded": "discarded"}
"""What the archive calls a batch of which a person said so."""


@dataclass(frozen=True)
class Settled:
    """What was settled.

    Attributes:
        batch_id: the whole id.
        said: what the ledger was told now, in order; empty for a call that only made the archive agree.
        notes: what the reader should know.
    """

    batch_id: str
    feed: str
    said: tuple[Settlement, ...]
    notes: tuple[str, ...] = ()


def settle(
    batch_id: str,
    *,
    by: str,
    because: str,
    release_as: str | None = None,
    relearn_from: str | None = None,
    store: str | Path,
    ledger: str | None = None,
) -> Settled:
    """Settle a batch, or its feed from a day on.

    Args:
        batch_id: id of the batch or its beginning.
        by: who says so.
        because: why.
        release_as: ``released`` (its rows become history) or ``discarded`` (they never do, and do no longer where
            rules or a person had released the batch). Discarding what is discarded changes nothing.
        relearn_from: a date, in the feed's time zone, or a time: history before it no longer teaches the feed.
        store: folder of ledger and archive.
        ledger: SQLAlchemy URL of the ledger, where it is not in the store.

    Raises:
        UsageError: no such batch, or it is to be released and is released already.
        StoreError: ledger or archive cannot be used.
    """
    if release_as is None and relearn_from is None:
        raise UsageError("settle", "nothing is asked for", "--as released, --as discarded or --relearn-from DATE")
    for name, text in (("--by", by), ("--because", because)):
        if not text.strip():
            raise UsageError(name, "it is empty", "who settles the batch, and why")
    with open_ledger(str(store), ledger) as kept_in:
        batch = kept_in.batch(batch_id)
        row = batch.batch
        archive = Archive(archive_place(store), row.feed)
        now = datetime.now(UTC).strftime("%Y-%m-%dT%H:%M:%S.%fZ")
        moment = None if relearn_from is None else _moment(relearn_from, _zone_of(batch))
        said: list[Settlement] = []
        notes: tuple[str, ...] = ()
        if release_as is not None:
            wish = Settlement(row.batch_id, row.feed, release_as, by, because, now)
            notes = _release(kept_in, batch, archive, wish, said)
        if moment is not None:
            said.append(kept_in.settle(Settlement(row.batch_id, row.feed, "relearn", by, because, now, moment)))
    return Settled(row.batch_id, row.feed, tuple(said), notes)


def _release(
    ledger: Ledger, batch: JudgedBatch, archive: Archive, wish: Settlement, said: list[Settlement]
) -> tuple[str, ...]:
    """Tell the ledger and make the archive agree."""
    place, before = f"batch {wish.batch_id}", batch.settled
    known = archive.log().states.get(wish.batch_id)
    again = before is not None and before.what == wish.what
    if wish.what == "released":
        wanted = "a batch that was held or discarded"
        if before is None and batch.last.decision == "released":
            raise UsageError(place, f"it was released by its rules at {batch.last.judged_at}", wanted)
        if before is not None and again and (known is None or known.what == STATES["released"]):
            raise UsageError(place, f"it is settled already: {before.sentence()}", wanted)
    if not again:
        said.append(ledger.settle(wish))
    if known is None:
        return ("the archive has no rows of this batch: judge it again with `sercheck gate` to keep them",)
    standing = ledger.batch(wish.batch_id).settled or wish  # somebody else may have said something meanwhile
    archive.mark(known, STATES[standing.what])
    return ()


def _zone_of(batch: JudgedBatch) -> str:
    """The time zone of the rules that the batch was judged by last."""
    import yaml

    read = yaml.safe_load(batch.last.rules)
    return str(read.get("timezone", "UTC")) if isinstance(read, dict) else "UTC"


def _moment(text: str, zone: str) -> str:
    """A date (its local midnight) or a time as UTC, RFC 3339."""
    from zoneinfo import ZoneInfo

    try:
        moment = datetime.fromisoformat(text)
        utc = (moment if moment.tzinfo else moment.replace(tzinfo=ZoneInfo(zone))).astimezone(UTC)
    except (ValueError, OverflowError) as trouble:
        raise UsageError("--relearn-from", f"'{text}' is no date", "a date such as 2026-01-12") from trouble
    return f"{utc:%Y-%m-%dT%H:%M:%S}Z"
