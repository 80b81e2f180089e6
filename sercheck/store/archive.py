"""The archive: rows of batches as Parquet by feed and local day, and the log of what became of each; needs ``outputs``.

``<archive>/<feed>/2026-01-12/<batch id>.parquet`` holds the rows of one batch on one local day, sorted by series and
stamp, no stamp twice. ``<archive>/<feed>/log/<number>-<letters>.json`` says what became of a batch: released, held
(its rows wait), settled (held, then let in by a person) or discarded. Rows are written first, the entry last, each
under a hidden name, flushed and then named: a batch is there whole from its entry on and before it not at all, whenever
the process dies. An entry's name is nobody else's, so that of several processes none undoes what another wrote.
"""

from __future__ import annotations

import json
import os
import secrets
import time
from collections.abc import Iterator, Mapping
from contextlib import ExitStack, contextmanager, suppress
from dataclasses import asdict, dataclass, replace
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal, Self
from urllib.parse import quote

from sercheck.errors import StoreError
from sercheck.outputs import whole_file

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
    """

    number: int
    batch_id: str
    what: What
    fingerprint: str
    first: int
    last: int
    rows: int


@dataclass(frozen=True)
class Part:
    """Rows of one batch on one local day: a Parquet file, and the number of the release that it came with."""

    path: Path
    day: str
    number: int


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
        self.folder = Path(folder) / feed_folder(feed)
        self._read: dict[str, Entry] = {}

    def prepare(self) -> None:
        """Make the folder and see that files can be made in it, to learn of trouble before long work.

        Raises:
            StoreError: they cannot.
        """
        if not os.access(_made(self.folder), os.W_OK | os.X_OK):
            came = "no permission to write to the archive"
            raise StoreError(str(self.folder), came, "a folder this user may write to")

    def log(self) -> Log:
        """What became of every batch; empty where there is no archive."""
        entries = [self._entry(name) for name in self._names_of_entries()]
        return Log(tuple(sorted(entries, key=lambda entry: (entry.number, entry.batch_id))))

    def parts(self, first_day: str, last_day: str, log: Log | None = None) -> list[Part]:
        """The files of history on the local days ``first_day`` to ``last_day`` (as 2026-01-12), in order of day, then
        of release.
        """
        numbers = {f"{e.batch_id}.parquet": e.number for e in (log or self.log()).history}
        found = []
        for day in sorted(name for name in _names(self.folder) if first_day <= name <= last_day and name != "log"):
            here = sorted((name for name in _names(self.folder / day) if name in numbers), key=numbers.__getitem__)
            found += [Part(self.folder / day / name, day, numbers[name]) for name in here]
        return found

    @contextmanager
    def adding(self, batch_id: str, fingerprint: str, what: What) -> Iterator[Adding]:
        """Keep a batch: rows by day, and when the block ends well the entry that makes them count.

        Whoever calls has looked at the log: what was kept of the batch before is written over.
        """
        with ExitStack() as files:
            adding = Adding(self.folder, batch_id, files)
            yield adding
        if adding.rows:
            self._enter(Entry(0, batch_id, what, fingerprint, adding.first, adding.last, adding.rows))

    def mark(self, known: Entry, what: What) -> None:
        """Say that something else became of a batch whose rows are there."""
        if known.what != what:
            self._enter(replace(known, what=what))

    def _enter(self, entry: Entry) -> None:
        newest = max((int(name.partition("-")[0]) for name in self._names_of_entries()), default=0)
        entry = replace(entry, number=max(time.time_ns(), newest + 1))
        folder = _made(self.folder / "log")
        with whole_file(folder / f"{entry.number:020d}-{secrets.token_hex(4)}.json") as file:
            file.write(json.dumps(asdict(entry), ensure_ascii=False).encode())

    def _names_of_entries(self) -> list[str]:
        entries = [name for name in _names(self.folder / "log") if name.endswith(".json")]
        return [name for name in entries if name.partition("-")[0].isdigit()]

    def _entry(self, name: str) -> Entry:
        """An entry, read once: it never changes."""
        if name not in self._read:
            path = self.folder / "log" / name
            try:
                self._read[name] = Entry(**json.loads(path.read_bytes()))
            except (OSError, ValueError, TypeError) as error:
                raise StoreError(
                    str(path), "this entry of the archive's log cannot be read", "as it was written",
                    "Put back a copy of the file.",
                ) from error  # fmt: skip
        return self._read[name]


class Adding:
    """Rows of one batch on their way into the archive; blocks of series in order of key, each day apart."""

    def __init__(self, folder: Path, batch_id: str, files: ExitStack) -> None:
        self._folder, self._name, self._files = folder, f"{batch_id}.parquet", files
        self._writers: dict[str, Any] = {}
        self.rows, self.first, self.last = 0, 2**63 - 1, -(2**63)

    def add(self, day: str, table: pa.Table, first: int, last: int) -> Self:
        """Rows of one day, sorted by series and stamp, all series after those added before; their first and last
        stamp.
        """
        import pyarrow.parquet as pq

        writer = self._writers.get(day)
        if writer is None:
            file = self._files.enter_context(whole_file(_made(self._folder / day) / self._name))
            writer = pq.ParquetWriter(file, table.schema, compression="zstd", use_dictionary=["series"])
            self._writers[day] = self._files.enter_context(writer)
        writer.write_table(table, row_group_size=GROUP_ROWS)
        self.rows += table.num_rows
        self.first, self.last = min(self.first, first), max(self.last, last)
        return self


def feed_folder(feed: str) -> str:
    """The folder of a feed: its name, percent-encoded where a file system could stumble; no two feeds share one."""
    from hashlib import blake2b

    name = quote(feed, safe=" +,=@()")
    name = name if name.strip(".") else name.replace(".", "%2E")
    if len(name) > LONGEST_NAME:
        name = f"{name[: LONGEST_NAME - 17]}-{blake2b(feed.encode(), digest_size=8).hexdigest()}"
    return name


def _names(folder: Path) -> list[str]:
    try:
        return sorted(path.name for path in folder.iterdir())
    except (FileNotFoundError, NotADirectoryError):
        return []
    except OSError as error:
        why = (error.strerror or str(error)).lower()
        raise StoreError(str(folder), f"the archive cannot be read: {why}") from error


def _made(folder: Path) -> Path:
    """The folder, made if need be, with its name on the disk (a rename inside it only flushes the folder itself)."""
    if folder.is_dir():
        return folder
    above = _made(folder.parent) if not folder.parent.is_dir() else folder.parent
    try:
        folder.mkdir(mode=0o700, exist_ok=True)
        handle = os.open(above, os.O_RDONLY)
        try:
            with suppress(OSError):  # some network filesystems cannot and need not
                os.fsync(handle)
        finally:
            os.close(handle)
    except OSError as error:
        raise StoreError(
            str(folder), f"the archive cannot be written: {(error.strerror or str(error)).lower()}",
            "a folder this user may write to", "Name another store with --store or SERCHECK_STORE.",
        ) from error  # fmt: skip
    return folder
