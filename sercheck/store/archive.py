"""The archive: rows of batches as Parquet by feed and local day, and the log of what became of each; needs ``places``.

``<archive>/<feed>/2026-01-12/<batch id>.parquet`` holds the rows of one batch on one local day, sorted by series and
stamp, no stamp twice. ``<archive>/<feed>/log/<number>-<letters>.json`` says what became of a batch: released, held
(its rows wait), settled (held, then let in by a person) or discarded. Rows are written first, the entry last, each
under a hidden name, flushed and then named: a batch is there whole from its entry on and before it not at all, whenever
the process dies. An entry's name is nobody else's, so that of several processes none undoes what another wrote.

At a URL the same names are objects, but that the name of a day's rows also holds the hash of its bytes, and the entry
says which objects belong to it: nothing is ever written over, and a day is found without listing. Here and there the
entry has the hash of every file that was written.
"""

from __future__ import annotations

import json
import secrets
import time
from collections.abc import Iterator, Mapping
from contextlib import ExitStack, contextmanager
from dataclasses import asdict, dataclass, field, replace
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal, Self
from urllib.parse import quote

from sercheck.errors import StoreError
from sercheck.store.objects import SMALL, Objects
from sercheck.store.places import Folder, Place
from sercheck.store.where import without_password

if TYPE_CHECKING:
    import pyarrow as pa

What = Literal["released", "held", "settled", "discarded"]
COUNTS: frozenset[What] = frozenset({"released", "settled"})
"""States of a batch whose rows are history."""
GROUP_ROWS = 16_384
"""Rows of a row group (ours: a day of some hundred series; a block of series then reads little that it does not need
from each of a hundred days)."""
LONGEST_NAME = 120
"""Letters of a feed's folder, at most (file systems allow 255 bytes)."""


@dataclass(frozen=True)
class Entry:
    """What became of a batch, as the log says.

    Attributes:
        number: grows from entry to entry: nanoseconds of the clock, and always beyond the entries that were seen.
        batch_id: the batch.
        what: released, held, settled or discarded.
        fingerprint: of the batch's content.
        first: stamp of its first row, nanoseconds UTC.
        last: stamp of its last row.
        rows: rows kept, each stamp once.
        parts: names and sizes in bytes of the objects that hold the rows, where their names do not follow from the
            batch's.
        hashes: names and hashes of all files that were written with it; empty in a log older than them.
    """

    number: int
    batch_id: str
    what: What
    fingerprint: str
    first: int
    last: int
    rows: int
    parts: tuple[tuple[str, int], ...] = ()
    hashes: tuple[tuple[str, str], ...] = ()


@dataclass(frozen=True)
class Part:
    """Rows of one batch on one local day: a Parquet file, and the number of the release that it came with.

    Attributes:
        path: the file, or the URL of the object.
        content: all of a small object, fetched with others at once.
    """

    path: Path | str
    day: str
    number: int
    content: bytes | None = field(default=None, repr=False, compare=False)


@dataclass(frozen=True)
class Log:
    """All entries of a feed, the oldest first."""

    entries: tuple[Entry, ...]

    @cached_property
    def states(self) -> Mapping[str, Entry]:
        """What the last entry of each batch says."""
        return {entry.batch_id: entry for entry in self.entries}

    @property
    def history(self) -> tuple[Entry, ...]:
        """The batches whose rows are history, in order of release."""
        return tuple(sorted((e for e in self.states.values() if e.what in COUNTS), key=lambda entry: entry.number))

    @property
    def left_out(self) -> tuple[Entry, ...]:
        """The batches that wait or were discarded."""
        return tuple(entry for entry in self.states.values() if entry.what not in COUNTS)

    @property
    def settled(self) -> tuple[Entry, ...]:
        """The batches that were held and then let in by a person."""
        return tuple(entry for entry in self.states.values() if entry.what == "settled")


class Archive:
    """The archive of one feed. Nothing is made before something is kept.

    Every method raises ``SercheckError`` with one sentence when a file cannot be read or written.
    """

    def __init__(self, folder: str | Path, feed: str) -> None:
        self.feed = feed
        name = feed_folder(feed)
        self.place = place_at(f"{folder}/{name}" if "://" in str(folder) else Path(folder) / name)
        self._read: dict[str, Entry] = {}

    @property
    def folder(self) -> Path:
        """Where the feed's files lie, for an archive in a folder."""
        return Path(self.place.path(""))

    def prepare(self) -> None:
        """See that something can be written, to learn of trouble before long work.

        Raises:
            StoreError: it cannot.
        """
        self.place.prepare()

    def log(self) -> Log:
        """What became of every batch; empty where there is no archive."""
        names = self._names_of_entries()
        fresh = [name for name in names if name not in self._read]
        contents = self.place.read([f"log/{name}" for name in fresh])
        for name, content in zip(fresh, contents, strict=True):
            self._read[name] = self._entry(name, content)
        return Log(tuple(sorted((self._read[name] for name in names), key=lambda each: (each.number, each.batch_id))))

    def parts(self, first_day: str, last_day: str, log: Log | None = None) -> list[Part]:
        """The files of history on the local days ``first_day`` to ``last_day`` (as 2026-01-12), in order of day, then
        of release.
        """
        history = (log or self.log()).history
        named = [each for entry in history for each in _named(entry) if first_day <= each.day <= last_day]
        small = [each for each in named if each.size <= SMALL]
        contents = dict(zip(small, self.place.read([each.name for each in small]), strict=True))
        found = [Part(self.place.path(each.name), each.day, each.number, contents.get(each)) for each in named]
        numbers = {f"{entry.batch_id}.parquet": entry.number for entry in history if not entry.parts}
        days = self.place.names() if numbers else []
        for day in (name for name in days if first_day <= name <= last_day and name != "log"):
            here = (name for name in self.place.names(day) if name in numbers)
            found += [Part(self.place.path(f"{day}/{name}"), day, numbers[name]) for name in here]
        return sorted(found, key=lambda part: (part.day, part.number))

    @contextmanager
    def adding(self, batch_id: str, fingerprint: str, what: What) -> Iterator[Adding]:
        """Keep a batch: rows by day, and when the block ends well the entry that makes them count.

        Whoever calls has looked at the log: what was kept of the batch before is written over.
        """
        with ExitStack() as files:
            adding = Adding(self.place, batch_id, files)
            yield adding
        if adding.rows:
            parts, hashes = tuple(sorted(adding.parts)), tuple(sorted(adding.hashes))
            self._enter(Entry(0, batch_id, what, fingerprint, adding.first, adding.last, adding.rows, parts, hashes))

    def mark(self, known: Entry, what: What) -> None:
        """Say that something else became of a batch whose rows are there."""
        if known.what != what:
            self._enter(replace(known, what=what))

    def _enter(self, entry: Entry) -> None:
        newest = max((int(name.partition("-")[0]) for name in self._names_of_entries()), default=0)
        entry = replace(entry, number=max(time.time_ns(), newest + 1))
        facts = {name: value for name, value in asdict(entry).items() if name not in ("parts", "hashes") or value}
        name = f"log/{entry.number:020d}-{secrets.token_hex(4)}.json"
        self.place.write(name, json.dumps(facts, ensure_ascii=False).encode())

    def _names_of_entries(self) -> list[str]:
        entries = [name for name in self.place.names("log") if name.endswith(".json")]
        return [name for name in entries if name.partition("-")[0].isdigit()]

    def _entry(self, name: str, content: bytes) -> Entry:
        """An entry, read once: it never changes."""
        for wait in self.place.waits:
            if content.endswith(b"}"):
                break
            time.sleep(wait)
            (content,) = self.place.read([f"log/{name}"])
        try:
            facts = json.loads(content)
            parts = tuple((str(each), int(size)) for each, size in facts.pop("parts", ()))
            hashes = tuple((str(each), str(digest)) for each, digest in facts.pop("hashes", ()))
            return Entry(**facts, parts=parts, hashes=hashes)
        except (ValueError, TypeError, AttributeError) as error:
            raise StoreError(
                without_password(str(self.place.path(f"log/{name}"))),
                "this entry of the archive's log cannot be read", "as it was written", "Put back a copy of the file.",
            ) from error  # fmt: skip


@dataclass(frozen=True)
class _Named:
    """An object that an entry names."""

    name: str
    size: int
    number: int

    @property
    def day(self) -> str:
        return self.name.partition("/")[0]


def _named(entry: Entry) -> list[_Named]:
    return [_Named(name, size, entry.number) for name, size in entry.parts]


class Adding:
    """Rows of one batch on their way into the archive; blocks of series in order of key, each day apart."""

    def __init__(self, place: Place, batch_id: str, files: ExitStack) -> None:
        self._place, self._batch_id, self._files = place, batch_id, files
        self._writers: dict[str, Any] = {}
        self.parts: list[tuple[str, int]] = []
        self.hashes: list[tuple[str, str]] = []
        self.rows, self.first, self.last = 0, 2**63 - 1, -(2**63)

    def add(self, day: str, table: pa.Table, first: int, last: int) -> Self:
        """Rows of one day, sorted by series and stamp, all series after those added before; their first and last
        stamp.
        """
        import pyarrow.parquet as pq

        writer = self._writers.get(day)
        if writer is None:
            file = self._files.enter_context(self._place.part(day, self._batch_id, self._told))
            writer = pq.ParquetWriter(file, table.schema, compression="zstd", use_dictionary=["series"])
            self._writers[day] = self._files.enter_context(writer)
        writer.write_table(table, row_group_size=GROUP_ROWS)
        self.rows += table.num_rows
        self.first, self.last = min(self.first, first), max(self.last, last)
        return self

    def _told(self, name: str, size: int, digest: str) -> None:
        self.hashes.append((name, digest))
        if not name.endswith(f"/{self._batch_id}.parquet"):  # a name that does not follow from the batch's
            self.parts.append((name, size))


def place_at(folder: str | Path) -> Place:
    """A folder, or the place for objects at a URL."""
    return Objects(str(folder)) if "://" in str(folder) else Folder(Path(folder))


def feed_folder(feed: str) -> str:
    """The folder of a feed: its name, percent-encoded where a file system could stumble; no two feeds share one."""
    from hashlib import blake2b

    name = quote(feed, safe=" +,=@()")
    name = name if name.strip(".") else name.replace(".", "%2E")
    if len(name) > LONGEST_NAME:
        name = f"{name[: LONGEST_NAME - 17]}-{blake2b(feed.encode(), digest_size=8).hexdigest()}"
    return name
