"""Files that appear whole or not at all, and batch files moved once the decision stands; depends only on ``errors``."""

from __future__ import annotations

import errno
import os
import platform
import secrets
import shutil
import stat
from collections.abc import Iterator, Sequence
from contextlib import contextmanager, suppress
from hashlib import blake2b
from itertools import count
from pathlib import Path
from typing import BinaryIO, NoReturn

from sercheck.errors import OutputError

BLOCK = 1 << 20
"""Bytes read at a time when two files are compared or copied (a mebibyte: large against the cost of a call)."""
COMPRESSIONS = frozenset({".gz", ".bz2", ".xz", ".zst"})
NO_LINKS = frozenset({errno.EPERM, errno.EACCES, errno.ENOTSUP, errno.EOPNOTSUPP, errno.ENOSYS, errno.EMLINK})
"""What a filesystem without hard links, or a kernel that protects other people's files, answers to ``link``."""


@contextmanager
def whole_file(path: str | Path, *, private: bool = False) -> Iterator[BinaryIO]:
    """Open ``path`` for writing so that nobody ever sees half of it.

    What is written goes to a hidden file in the same folder; when the block ends well it is flushed to the disk and
    takes the name in one step, when it ends badly it is removed and an older file of that name stays as it was. A link
    is followed; an older file hands on its permissions. A ``private`` file is made for this user alone.

    Raises:
        OutputError: missing folder, no permission, not an ordinary file, full disk.
    """
    target = Path(os.path.realpath(path))
    with _as_output_error(path):
        mode = _mode_of_old(path, target)
        draft, handle = _draft_in(target.parent, 0o600 if private else 0o666)
        try:
            with os.fdopen(handle, "wb") as file:
                yield file
                file.flush()
                if mode is not None:
                    os.fchmod(file.fileno(), mode)
                os.fsync(file.fileno())
            draft.replace(target)
        except BaseException:  # an interrupt leaves no draft behind either
            with suppress(OSError):
                draft.unlink()
            raise
        _settle(target.parent)


def write_text(path: str | Path, text: str) -> None:
    """Write a whole text file, UTF-8, as ``whole_file`` does."""
    with whole_file(path) as file:
        file.write(text.encode("utf-8", "replace"))


def make_folder(path: str | Path) -> None:
    """Make a folder where there is none; its parent must be there.

    Raises:
        OutputError: it cannot be made, or a file has its name.
    """
    with _as_output_error(path):
        Path(path).mkdir(exist_ok=True)


def check_place(path: str | Path, *, folder: bool = False) -> None:
    """Refuse, before any work is done, the name of a file (or of a folder for files) that cannot be written.

    Raises:
        OutputError: the folder around it is missing or may not be written to, or a file stands where a folder must be.
    """
    with _as_output_error(path):
        there = folder and os.path.lexists(path)
        around = Path(path) if there else Path(os.path.realpath(path)).parent
        if not around.is_dir():
            number = errno.ENOTDIR if there else errno.ENOENT
            raise OSError(number, os.strerror(number))
        if not os.access(around, os.W_OK | os.X_OK, effective_ids=os.access in os.supports_effective_ids):
            raise PermissionError(errno.EACCES, os.strerror(errno.EACCES))


def move_batch(paths: Sequence[str | Path], folder: str | Path) -> tuple[Path, ...]:
    """Move the files of a batch into ``folder`` and tell where each one is now. Call it when the decision is stored.

    Each file moves in one step: it is seen at the old place or at the new one, never cut short and never lost. Nothing
    is overwritten: where the folder has a file of that name, the same content counts as moved already (a repeat after a
    kill ends as the first run would have), other content makes the newcomer ``name.2.csv``, ``name.3.csv`` and so on,
    for feeds that deliver every batch under one name. A source that is gone counts as moved when the folder has a file
    of its name. A link is replaced by the content it leads to; what it led to stays. The folder itself is created,
    its parents are not.

    Raises:
        OutputError: a file is in neither place, the folder cannot be made or written, the disk is full. Files moved
            before the error stay moved; a repeat moves the rest.
    """
    into = Path(folder)
    with _as_output_error(into):
        if not into.is_dir():
            into.mkdir(exist_ok=True)
    return tuple(_move(Path(path), into) for path in paths)


def _move(source: Path, folder: Path) -> Path:
    with _as_output_error(folder / source.name):
        if not os.path.lexists(source):
            return _moved_before(source, folder)
        if source.parent.samefile(folder):
            return source
        if not source.is_file():
            raise OutputError(str(source), "cannot be moved: it is not a file", "the file of a batch")
        try:
            return _place(source, folder)
        except FileNotFoundError:  # another process has just moved it
            return _moved_before(source, folder)


def _moved_before(source: Path, folder: Path) -> Path:
    target = folder / source.name
    if target.is_file():
        return target
    raise OutputError(
        str(source), f"cannot be moved to {folder}: it is in neither place", "the batch file that was judged",
        "Look for who else moves files of this feed.",
    )  # fmt: skip


def _place(source: Path, folder: Path) -> Path:
    """Give the file a name in the folder, then take the old name away; a kill in between leaves both, never none."""
    try:
        target = _copy(source, folder) if source.is_symlink() else _claim(source, folder, source.name)
    except OSError as error:
        if error.errno != errno.EXDEV:
            raise
        target = _copy(source, folder)
    _settle(folder)
    source.unlink(missing_ok=True)
    _settle(source.parent)
    return target


def _claim(source: Path, folder: Path, name: str) -> Path:
    """Put ``source`` under the name, or the first free numbered one; an equal file that is there already will do."""
    for number in count(1):
        target = folder / (name if number == 1 else _numbered(name, number))
        try:
            _link_or_rename(source, target)
        except FileExistsError:
            if target.is_file() and _same_content(source, target):
                return target
        else:
            return target
    raise AssertionError  # the numbers do not end


def _numbered(name: str, number: int) -> str:
    path = Path(name)
    suffix = "".join(path.suffixes[-2:]) if path.suffix in COMPRESSIONS else path.suffix
    return f"{name.removesuffix(suffix)}.{number}{suffix}"


def _link_or_rename(source: Path, target: Path) -> None:
    try:
        os.link(source, target)  # unlike rename, refuses to overwrite
    except OSError as error:
        if error.errno not in NO_LINKS:
            raise
        if os.path.lexists(target):
            raise FileExistsError(errno.EEXIST, "exists", str(target)) from None
        source.rename(target)


def _copy(source: Path, folder: Path) -> Path:
    draft, handle = _draft_in(folder)
    try:
        with source.open("rb") as old, os.fdopen(handle, "wb") as new:
            shutil.copyfileobj(old, new, BLOCK)
            new.flush()
            os.fsync(new.fileno())
        shutil.copystat(source, draft)
        return _claim(draft, folder, source.name)
    finally:
        draft.unlink(missing_ok=True)


def _same_content(one: Path, other: Path) -> bool:
    if one.samefile(other):
        return True
    if one.stat().st_size != other.stat().st_size:
        return False
    with one.open("rb") as left, other.open("rb") as right:
        while block := left.read(BLOCK):
            if block != right.read(BLOCK):
                return False
    return True


def _mode_of_old(path: str | Path, target: Path) -> int | None:
    """Permissions of the file that will be replaced, or None when there is none."""
    try:
        found = target.stat()
    except FileNotFoundError:
        return None
    if stat.S_ISDIR(found.st_mode):
        raise OutputError(str(path), "is a folder", "the name of a file")
    if not stat.S_ISREG(found.st_mode):
        raise OutputError(str(path), "is a device or a pipe", "the name of a file", "Use - for stdout.")
    if not os.access(target, os.W_OK):
        raise PermissionError(errno.EACCES, "write-protected", str(target))
    return stat.S_IMODE(found.st_mode)


def _draft_in(folder: Path, mode: int = 0o666) -> tuple[Path, int]:
    """A new hidden file in the folder, with the permissions that new files of this user get, or fewer.

    Its name tells machine and process, so that what a killed process left behind is known and cleared away.
    """
    machine = blake2b(platform.node().encode(), digest_size=4).hexdigest()
    for old in folder.glob(f".sercheck-{machine}-*.tmp"):
        if _is_dead(old.name.split("-")[2]):
            with suppress(OSError):
                old.unlink()
    draft = folder / f".sercheck-{machine}-{os.getpid()}-{secrets.token_hex(8)}.tmp"
    return draft, os.open(draft, os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC, mode)


def _is_dead(process: str) -> bool:
    try:
        os.kill(int(process), 0)
    except ProcessLookupError:
        return True
    except (ValueError, OverflowError, OSError):
        return False
    return False


def _settle(folder: Path) -> None:
    """Have the folder's new names on the disk; some network filesystems cannot and need not."""
    handle = os.open(folder, os.O_RDONLY)
    try:
        with suppress(OSError):
            os.fsync(handle)
    finally:
        os.close(handle)


@contextmanager
def _as_output_error(path: str | Path) -> Iterator[None]:
    try:
        yield
    except OSError as error:
        output_trouble(path, error)


def output_trouble(path: str | Path, error: OSError) -> NoReturn:
    """Say as one ``OutputError`` why ``path`` could not be written."""
    folder = Path(os.path.realpath(path)).parent
    place = str(path)
    match error.errno:
        case errno.ENOENT if not folder.is_dir():
            problem = OutputError(place, f"there is no folder {folder}", "a file in a folder that exists", "Create it.")
        case errno.EACCES | errno.EPERM:
            problem = OutputError(place, "no permission to write here", "a folder this user may write to")
        case errno.EROFS:
            problem = OutputError(place, "the filesystem is read-only", "a folder that can be written")
        case errno.ENOSPC | errno.EDQUOT:
            problem = OutputError(place, "the disk is full; nothing was changed", todo="Make room and repeat.")
        case errno.EPIPE:
            problem = OutputError(place, "whoever was reading has closed the pipe; not all was written")
        case errno.ENOTDIR | errno.EEXIST:
            problem = OutputError(place, "a file stands where a folder is needed", "a folder")
        case _:
            problem = OutputError(place, f"cannot be written: {error.strerror or error}")
    raise problem from error
