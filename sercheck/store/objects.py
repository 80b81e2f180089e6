"""A place for objects (a bucket, any other fsspec URL) as the place of the archive; depends on ``where`` and
``hashed``.

An object is written whole under a name that nobody else gives to other content (rows carry the hash of their bytes,
entries random letters), so that nothing is ever written over and a reader who knows a name finds all of it or nothing.
Buckets show an object when it is whole; where the place behind a URL is made of folders that can rename (a disk, a file
server), it is written under a hidden name first, so that a writer who dies half-way leaves nothing that counts.
Credentials and endpoints come from where fsspec's own packages look for them, never from us.
"""

from __future__ import annotations

import shutil
import sys
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from functools import cached_property
from hashlib import blake2b
from tempfile import SpooledTemporaryFile
from typing import TYPE_CHECKING, Any, BinaryIO, cast

from sercheck.errors import StoreError
from sercheck.store.hashed import SIZE
from sercheck.store.where import without_password

if TYPE_CHECKING:
    from sercheck.store.places import Tell

IN_MEMORY = 1 << 20
"""Bytes of an object that are gathered in memory before a file of the machine's takes them (ours: a quarter of days
is written at a time, 90 MB)."""
AT_ONCE = 64 << 20
"""Bytes up to which an object is sent in one piece (ours; larger ones in parts, which appear together)."""
SMALL = 256 << 10
"""Bytes up to which an object is fetched whole, many at a time (ours: sixteen weeks of days are then 30 MB; asking for
pieces of one costs more round trips than it saves bytes)."""
FLAT = frozenset({"s3", "s3a", "gs", "gcs", "abfs", "abfss", "az", "oci", "oss", "memory"})
"""Kinds of places without folders: there nothing has to be made before an object (and asking might make a bucket)."""
WRITABLE = "writable"
"""The empty object by which it is tried whether a place can be written."""
BLOCK = 1 << 20
"""Bytes copied at a time."""
STRANGERS = (
    ("botocore.exceptions", "BotoCoreError"), ("botocore.exceptions", "ClientError"), ("aiohttp", "ClientError"),
    ("google.auth.exceptions", "GoogleAuthError"), ("gcsfs.retry", "HttpError"),
    ("azure.core.exceptions", "AzureError"), ("paramiko", "SSHException"),
)  # fmt: skip
"""What the packages behind fsspec raise beside ``OSError``."""


class Objects:
    """Objects under one URL. The library is imported and the place is asked when something is wanted of it."""

    waits: tuple[float, ...] = (0.05, 0.2, 0.5, 1.0)

    def __init__(self, url: str) -> None:
        self.root = url.rstrip("/")

    @cached_property
    def _open(self) -> tuple[Any, str]:
        return opened_place(self.root)

    def _at(self, name: str) -> str:
        return f"{self._open[1]}/{name}" if name else self._open[1]

    def prepare(self) -> None:
        with trouble(self.path(WRITABLE)):
            self._parent(WRITABLE)
            self._open[0].pipe_file(self._at(WRITABLE), b"")

    def names(self, inside: str = "") -> list[str]:
        files, path = self._open[0], self._at(inside)
        with trouble(self.path(inside)):
            files.invalidate_cache()  # others write too
            try:
                found = files.ls(path, detail=False)
            except FileNotFoundError:
                return []
        names = {name.rstrip("/").rpartition("/")[2] for name in found if name.rstrip("/") != path}
        return sorted(names)

    def path(self, name: str) -> str:
        return f"{self.root}/{name}" if name else self.root

    def read(self, names: Sequence[str]) -> list[bytes]:
        if not names:
            return []
        with trouble(self.root):
            found = self._open[0].cat_ranges([self._at(name) for name in names], None, None, on_error="return")
            for each in found:
                if isinstance(each, BaseException):
                    raise each
        return [bytes(each) for each in found]

    def write(self, name: str, content: bytes) -> None:
        with trouble(self.path(name)):
            self._parent(name)
            with self._draft(self._at(name)) as path:
                self._open[0].pipe_file(path, content)

    def _parent(self, name: str) -> None:
        if not self._flat:
            self._open[0].makedirs(self._at(name).rpartition("/")[0], exist_ok=True)

    @property
    def _flat(self) -> bool:
        kinds = self._open[0].protocol
        return bool(({kinds} if isinstance(kinds, str) else set(kinds)) & FLAT)

    @contextmanager
    def _draft(self, path: str) -> Iterator[str]:
        """The name to write under; it becomes ``path`` in one step when the block ends well."""
        from fsspec import AbstractFileSystem

        files = self._open[0]
        if self._flat or type(files).mv is AbstractFileSystem.mv:  # its move is a copy: nothing would be won
            yield path
            return
        folder, _, name = path.rpartition("/")
        draft = f"{folder}/.{name}"  # the same after a kill, so that a repeat takes it over
        yield draft
        files.mv(draft, path)

    @contextmanager
    def part(self, day: str, batch_id: str, tell: Tell) -> Iterator[BinaryIO]:
        with SpooledTemporaryFile(IN_MEMORY) as file:  # the hash names it, so it must be there before it is sent
            spool = cast("BinaryIO", file)
            yield spool
            size, digest = _measured(spool)
            name = f"{day}/{batch_id}-{digest}.parquet"
            self._send(name, spool, size)
            tell(name, size, digest)

    def _send(self, name: str, spool: BinaryIO, size: int) -> None:
        files, path = self._open[0], self._at(name)
        with trouble(self.path(name)):
            if files.exists(path) and files.size(path) == size:  # the name says that it is the same
                return
            self._parent(name)
            with self._draft(path) as draft:
                if size <= AT_ONCE:
                    files.pipe_file(draft, spool.read())
                    return
                with files.open(draft, "wb") as target:
                    shutil.copyfileobj(spool, target, BLOCK)


def _measured(spool: BinaryIO) -> tuple[int, str]:
    """Bytes and hash of a file that was written; it is then at its beginning."""
    size, digest = spool.tell(), blake2b(digest_size=SIZE)
    spool.seek(0)
    while block := spool.read(BLOCK):
        digest.update(block)
    spool.seek(0)
    return size, digest.hexdigest()


def opened_place(url: str) -> tuple[Any, str]:
    """The file system of a URL and the path there.

    Raises:
        StoreError: fsspec or the package for this kind of URL is not installed, or the kind is not known.
    """
    shown = without_password(url)
    try:
        from fsspec.core import url_to_fs
    except ImportError as error:
        todo = "Install it: pip install 'sercheck[objects]'."
        raise StoreError(shown, "a store at a URL needs the package fsspec", "it to be installed", todo) from error
    try:
        with trouble(url):
            files, path = url_to_fs(url)
    except ImportError as error:
        came = f"this kind of store needs a further package ({error})"
        raise StoreError(shown, came, "it to be installed", "Install it beside sercheck.") from error
    except ValueError as error:
        wanted = "a folder, or a URL that fsspec knows, such as s3://bucket/prefix"
        raise StoreError(shown, f"this kind of store is not known ({without_password(str(error))})", wanted) from error
    return files, path.rstrip("/")


def opened_object(url: str, content: bytes | None) -> Any:
    """An object for pyarrow to read: what was fetched already, else a file that fetches what is asked of it."""
    import pyarrow as pa

    if content is not None:
        return pa.BufferReader(content)
    files, path = opened_place(url)
    return files.open(path, "rb", cache_type="none")


@contextmanager
def trouble(url: str) -> Iterator[None]:
    """Turn what a place for objects answers into one sentence."""
    shown = without_password(url)
    try:
        yield
    except FileNotFoundError as error:
        todo = "Look at the name of the bucket or host."
        raise StoreError(shown, "there is no such place or object", "one that is there", todo) from error
    except PermissionError as error:
        raise StoreError(shown, "no permission for this place", "the right to read and write it") from error
    except NotImplementedError as error:
        raise StoreError(shown, "this kind of place cannot be written", "one that can") from error
    except answers() as error:
        text = " ".join(without_password(str(error)).split())[:300] or type(error).__name__
        came = f"the place for objects cannot be used ({text})"
        raise StoreError(shown, came, todo="Look at it and repeat.") from error


def answers() -> tuple[type[Exception], ...]:
    """The errors that a place for objects may raise: those of the system, and of the packages that are loaded."""
    loaded = [(sys.modules.get(module), name) for module, name in STRANGERS]
    return (OSError, *(getattr(module, name) for module, name in loaded if hasattr(module, name)))
