"""What an archive asks of the place that it lies in, and a folder as one; depends on ``outputs`` and ``hashed``."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator, Sequence
from contextlib import AbstractContextManager, contextmanager, suppress
from pathlib import Path
from typing import BinaryIO, Protocol, cast

from sercheck.errors import StoreError
from sercheck.outputs import whole_file
from sercheck.store.hashed import Hashing

Tell = Callable[[str, int, str], None]
"""Called with the name, the size and the hash of what was written."""


class Place(Protocol):
    """Named pieces of bytes, each of them there whole or not at all. Names are relative, such as ``log/17-ab.json``.

    Attributes:
        waits: seconds before each further try to read a small piece that is not whole: some places show what is being
            written (a file server behind an fsspec URL; buckets and folders do not).
    """

    waits: tuple[float, ...]

    def prepare(self) -> None:
        """See that something can be written here, to learn of trouble before long work."""

    def names(self, inside: str = "") -> list[str]:
        """The names directly under this one, in order; none where nothing is."""

    def path(self, name: str) -> Path | str:
        """The whole path or URL of a name."""

    def read(self, names: Sequence[str]) -> list[bytes]:
        """What lies under the names, in their order."""

    def write(self, name: str, content: bytes) -> None:
        """Put a small piece under a name that nobody else uses."""

    def part(self, day: str, batch_id: str, tell: Tell) -> AbstractContextManager[BinaryIO]:
        """A context manager: a file for rows of a batch on a day, which is there when the block ends well.

        ``tell`` learns its name, its size and the hash of its bytes.
        """


class Folder:
    """A folder of this machine, for this user alone. Nothing is made before something is written."""

    waits: tuple[float, ...] = ()

    def __init__(self, path: Path) -> None:
        self.root = path

    def prepare(self) -> None:
        if not os.access(_made(self.root), os.W_OK | os.X_OK):
            came = "no permission to write to the archive"
            raise StoreError(str(self.root), came, "a folder this user may write to")

    def names(self, inside: str = "") -> list[str]:
        folder = self.root / inside
        try:
            return sorted(path.name for path in folder.iterdir())
        except (FileNotFoundError, NotADirectoryError):
            return []
        except OSError as error:
            raise _unreadable(folder, error) from error

    def path(self, name: str) -> Path:
        return self.root / name

    def read(self, names: Sequence[str]) -> list[bytes]:
        return [self._bytes(self.root / name) for name in names]

    def _bytes(self, path: Path) -> bytes:
        try:
            return path.read_bytes()
        except OSError as error:
            raise _unreadable(path, error) from error

    def write(self, name: str, content: bytes) -> None:
        path = self.root / name
        with whole_file(_made(path.parent) / path.name, private=True) as file:
            file.write(content)

    @contextmanager
    def part(self, day: str, batch_id: str, tell: Tell) -> Iterator[BinaryIO]:
        name = f"{batch_id}.parquet"
        with whole_file(_made(self.root / day) / name, private=True) as file:
            hashing = Hashing(file)
            yield cast("BinaryIO", hashing)
        tell(f"{day}/{name}", hashing.size, hashing.hexdigest())


def _unreadable(path: Path, error: OSError) -> StoreError:
    why = (error.strerror or str(error)).lower()
    return StoreError(str(path), f"the archive cannot be read: {why}")


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
