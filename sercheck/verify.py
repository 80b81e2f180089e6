"""Does the store hold together: ledger, archive and what each says of the other; depends on ``store`` and ``intake``.

Nothing is changed. Every fault says what is wrong, where, and what a person can do.
"""

from __future__ import annotations

import io
import re
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, fields
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from sercheck.errors import SercheckError, StoreError
from sercheck.store.archive import Archive, Entry, Log, feed_folder, place_at
from sercheck.store.hashed import hash_of
from sercheck.store.objects import WRITABLE
from sercheck.store.rows import BaselineRow, Filters, JudgedBatch, judgement_id
from sercheck.store.tables import BASELINE_COLUMNS, tables
from sercheck.store.where import without_password

if TYPE_CHECKING:
    from sqlalchemy import Connection

    from sercheck.store.ledger import Ledger

DAY = 86_400_000_000_000
AGAIN = "Judge the batch again with `sercheck gate`: what is missing is put there."
COPY = "Put back a copy of the file, or judge the batch again with `sercheck gate`."
STRANGE = "Give the command again that was killed while it wrote it; if there was none, and none is running, remove it."
OTHER = "Name the ledger that goes with it (SERCHECK_LEDGER), or give the command again that was killed before it."
BACKUP = "Put back a copy of the ledger."


@dataclass(frozen=True)
class Fault:
    """One thing that is wrong.

    Attributes:
        where: the batch, file or table.
        what: what is wrong with it.
        todo: what to do.
    """

    where: str
    what: str
    todo: str

    def sentence(self) -> str:
        """All of it as one line."""
        return f"{self.where}: {self.what}. {self.todo}"


@dataclass(frozen=True)
class Verified:
    """What was looked at, and every fault.

    Attributes:
        unchecked: files that were kept before their hashes were; of them only the rows were counted.
    """

    batches: int
    records: int
    files: int
    rows: int
    unchecked: int
    faults: tuple[Fault, ...]


def verify(ledger: Ledger, archive: str | Path) -> Verified:
    """Check ledger and archive.

    Args:
        ledger: the open ledger.
        archive: the archive's folder or URL.

    Raises:
        StoreError: the ledger cannot be read at all.
    """
    faults: list[Fault] = []
    records, learned = 0, list[str]()
    with ledger.looking() as connection:
        if connection is not None:
            faults += _within(connection)
            records, learned = _count(connection), _learned(connection)
    batches = ledger.batches(Filters())
    files = rows = unchecked = 0
    feeds: dict[str, list[JudgedBatch]] = {feed: [] for feed in learned}
    for batch in batches:
        feeds.setdefault(batch.batch.feed, []).append(batch)
    for feed, own in feeds.items():
        kept = Archive(archive, feed)
        try:
            log = kept.log()
        except SercheckError as error:
            faults.append(Fault(error.place, error.came, "Put back a copy of the file."))
            continue
        faults += _agree(own, log, feed)
        hashes = _hashes(log)
        for entry in log.states.values():
            found = _Files(kept, entry, hashes)
            faults += found.faults()
            files, rows, unchecked = files + found.files, rows + found.rows, unchecked + found.unchecked
        faults += _strangers(kept, log)
    faults += _strange_feeds(archive, feeds)
    return Verified(len(batches), records, files, rows, unchecked, tuple(faults))


def _count(connection: Connection) -> int:
    from sqlalchemy import func, select

    return int(connection.execute(select(func.count()).select_from(tables().records)).scalar() or 0)


def _learned(connection: Connection) -> list[str]:
    """The feeds that something was learned of."""
    from sqlalchemy import select

    return list(connection.execute(select(tables().baselines.c.feed).distinct()).scalars())


def _within(connection: Connection) -> Iterator[Fault]:
    """The ledger against itself."""
    from sqlalchemy import func, select, text

    if connection.dialect.name == "sqlite":
        for (said,) in connection.execute(text("PRAGMA integrity_check(5)")):
            if said != "ok":
                yield Fault("ledger", f"the database is damaged: {said}", BACKUP)
    batches, judgements, records, baselines = tables()[:4]
    here = records.c.judgement_id == judgements.c.judgement_id
    number = select(func.count()).where(here).correlate(judgements).scalar_subquery()
    holding = select(func.count()).where(here, records.c.action == "hold").correlate(judgements).scalar_subquery()
    for row in connection.execute(select(*judgements.c, number.label("there"), holding.label("holding"))).mappings():
        where = f"batch {row['batch_id']}"
        wanted = row["passed"] + row["failed"] + row["undecided"]
        if row["there"] != wanted:
            what = f"{row['there']} of {wanted} records of judgement {row['judgement_id']} are there"
            yield Fault(where, what, BACKUP)
        elif (row["decision"] == "held") != bool(row["holding"]):
            yield Fault(where, f"it is {row['decision']} and {row['holding']} of its records say hold", BACKUP)
        if row["judgement_id"] != judgement_id(row["batch_id"], row["rules_fingerprint"], row["baseline_id"]):
            yield Fault(where, f"judgement {row['judgement_id']} is not the one of its rules and baseline", BACKUP)
    for child, column, parent in (
        (records, "judgement_id", judgements), (tables().standings, "judgement_id", judgements),
        (tables().messages, "judgement_id", judgements), (judgements, "batch_id", batches),
        (tables().settlements, "batch_id", batches),
    ):  # fmt: skip
        lost = select(func.count()).where(child.c[column].not_in(select(parent.c[column])))
        without = connection.execute(lost).scalar()
        if without:
            yield Fault(f"ledger, table {child.name}", f"{without} rows belong to nothing in {parent.name}", BACKUP)
    judged = select(judgements.c.batch_id)
    for name in connection.execute(select(batches.c.batch_id).where(batches.c.batch_id.not_in(judged))).scalars():
        yield Fault(f"batch {name}", "it is in the ledger without a judgement", AGAIN)
    columns = [baselines.c[name] for name in BASELINE_COLUMNS if name != "facts"]
    for row in connection.execute(select(*columns, func.length(baselines.c.facts).label("size"))).mappings():
        known = BaselineRow(**{each.name: row[each.name] for each in fields(BaselineRow) if each.name in row})
        if known.baseline_id != row["baseline_id"] or not row["size"]:
            todo = "Learn it anew with `sercheck learn`."
            yield Fault(f"baseline {row['baseline_id']}", "it is not what was learned", todo)


def _agree(batches: list[JudgedBatch], log: Log, feed: str) -> Iterator[Fault]:
    """The archive's log against the ledger's decisions."""
    states = log.states
    if not states and batches:
        yield Fault(f"feed {feed}", f"the archive has nothing of its {len(batches)} batches", AGAIN)
        return
    for each in batches:
        name = f"batch {each.batch.batch_id}"
        settled = each.settled
        wanted = each.last.decision if settled is None else "settled" if settled.what == "released" else "discarded"
        entry = states.get(each.batch.batch_id)
        if entry is None:
            yield Fault(name, f"it is {wanted} and the archive has none of its rows", AGAIN)
        elif entry.fingerprint != each.batch.fingerprint:
            yield Fault(name, "ledger and archive have different content under its id", COPY)
        elif entry.what != wanted and not (settled is None and entry.what in ("settled", "released")):
            todo = AGAIN if settled is None else "Give the same `sercheck settle` again."
            yield Fault(name, f"it is {wanted} in the ledger and {entry.what} in the archive", todo)


def _hashes(log: Log) -> dict[str, set[str]]:
    """The hashes that each file may have: of several processes that kept one batch at once each wrote down its own."""
    found: dict[str, set[str]] = {}
    for entry in log.entries:
        for name, digest in entry.hashes:
            found.setdefault(name, set()).add(digest)
        for name, _ in entry.parts:  # an object's name ends with it, in logs without hashes as well
            found.setdefault(name, set()).add(name.removesuffix(".parquet").rpartition("-")[2])
    return found


def _strangers(archive: Archive, log: Log) -> Iterator[Fault]:
    """Files of a feed's archive that no entry of its log has."""
    known = {name for entry in log.entries for name, _ in (*entry.hashes, *entry.parts)}
    old = {f"{entry.batch_id}.parquet" for entry in log.entries if not entry.hashes and not entry.parts}
    place = archive.place
    for day in place.names():
        if day == WRITABLE or day.startswith("."):
            continue
        if re.fullmatch(r"\d{4}-\d\d-\d\d|log", day):
            names = [f"{day}/{name}" for name in place.names(day) if not name.startswith(".") and name not in old]
        else:
            names = [day]
        for name in names:
            if name not in known and not re.fullmatch(r"log/\d+-.*\.json", name):
                where = without_password(str(place.path(name)))
                yield Fault(where, "no batch in the archive's log has this file", STRANGE)


def _strange_feeds(archive: str | Path, feeds: Iterable[str]) -> Iterator[Fault]:
    """Folders of the archive that are of no feed in the ledger."""
    place = place_at(archive)
    known = {feed_folder(feed) for feed in feeds}
    for name in place.names():
        if name not in known and not name.startswith("."):
            yield Fault(without_password(str(place.path(name))), "the ledger knows no feed of this name", OTHER)


class _Files:
    """The files of one batch in the archive."""

    def __init__(self, archive: Archive, entry: Entry, hashes: Mapping[str, set[str]]) -> None:
        self._place, self._entry, self._hashes = archive.place, entry, hashes
        self.files = self.rows = self.unchecked = 0

    def faults(self) -> Iterator[Fault]:
        """What is wrong with them."""
        import pyarrow as pa
        import pyarrow.parquet as pq

        first, last, whole = 2**63 - 1, -(2**63), True
        for name, size in self._names():
            where, wanted = without_password(str(self._place.path(name))), self._hashes.get(name, set())
            try:
                (content,) = self._place.read([name])
                wrong = self._wrong(content, size, wanted)
                if wrong:
                    yield Fault(where, wrong, COPY)
                    whole = False
                    continue
                table = pq.read_table(io.BytesIO(content))
                stamps = table.column("stamp").cast(pa.int64()).to_numpy()
            except (StoreError, pa.ArrowException, OSError, KeyError) as error:
                why = error.came if isinstance(error, StoreError) else "it is no whole Parquet file"
                yield Fault(where, f"the file cannot be read: {why}", COPY)
                whole = False
                continue
            self.unchecked += not wanted
            self.files, self.rows = self.files + 1, self.rows + len(stamps)
            if len(stamps):
                first, last = min(first, int(stamps.min())), max(last, int(stamps.max()))
        entry = self._entry
        name = f"batch {entry.batch_id}"
        if whole and self.rows != entry.rows:
            yield Fault(name, f"{self.rows} of its {entry.rows} rows are in the archive", COPY)
        elif whole and (first, last) != (entry.first, entry.last):
            yield Fault(name, "its rows in the archive are of other times than when they were kept", COPY)

    @staticmethod
    def _wrong(content: bytes, size: int | None, wanted: set[str]) -> str | None:
        """What is wrong with the bytes of a file; None where nothing is, or nothing is known of them."""
        if size is not None and len(content) != size:
            return f"it has {len(content)} bytes instead of {size}"
        if wanted and (found := hash_of(content)) not in wanted:
            return f"its bytes are not those that were written: their hash is {found} instead of {min(wanted)}"
        return None

    def _names(self) -> Iterator[tuple[str, int | None]]:
        if self._entry.parts:
            yield from self._entry.parts
            return
        if self._entry.hashes:
            yield from ((name, None) for name, _ in self._entry.hashes)
            return
        begin, end = (self._entry.first - DAY) // DAY, (self._entry.last + DAY) // DAY
        low, high = (str(np.datetime64(day, "D")) for day in (begin, end))
        file = f"{self._entry.batch_id}.parquet"
        for day in self._place.names():
            if low <= day <= high and file in self._place.names(day):
                yield f"{day}/{file}", None
