"""The hash of a file of the archive, taken of its bytes on their way out; needs nothing of ours."""

from __future__ import annotations

from hashlib import blake2b
from io import BufferedIOBase
from typing import TYPE_CHECKING, BinaryIO

if TYPE_CHECKING:
    from _typeshed import ReadableBuffer

SIZE = 8
"""Bytes of a hash (ours: damage passes unseen once in 2**64 times; against forgery no length helps, for who can write
rows can write the log as well)."""


def hash_of(content: bytes) -> str:
    """BLAKE2b (Aumasson and others 2013) of some bytes, as hexadecimal digits."""
    return blake2b(content, digest_size=SIZE).hexdigest()


class Hashing(BufferedIOBase):
    """A file that is only written on; it hands everything to another one and knows its size and hash.

    The hash is of what was meant to be written, so that a disk which keeps something else is found out.
    """

    def __init__(self, file: BinaryIO) -> None:
        self._file, self._hash, self.size = file, blake2b(digest_size=SIZE), 0

    def writable(self) -> bool:
        return True

    def tell(self) -> int:
        return self.size

    def write(self, content: ReadableBuffer, /) -> int:
        with memoryview(content) as view:
            self._file.write(view)
            self._hash.update(view)
            self.size += view.nbytes
            return view.nbytes

    def hexdigest(self) -> str:
        """The hash of all that was written."""
        return self._hash.hexdigest()
