"""Small disks for tests of full and read-only filesystems; users without rights; needs root."""

from __future__ import annotations

import os
import subprocess
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest


@contextmanager
def small_disk(at: Path, size: str = "512k") -> Iterator[Path]:
    """A filesystem of its own at the folder ``at``; the test is skipped where none may be mounted."""
    at.mkdir()
    command = ["mount", "-t", "tmpfs", "-o", f"size={size}", "tmpfs", str(at)]
    made = subprocess.run(command, capture_output=True, check=False)
    if made.returncode:
        pytest.skip(f"no right to mount a small disk: {made.stderr.decode().strip()}")
    try:
        yield at
    finally:
        subprocess.run(["umount", "-l", str(at)], check=True)


@contextmanager
def somebody_else() -> Iterator[None]:
    """Act as a user without rights; the test is skipped where that needs rights we do not have."""
    if os.getuid() != 0:
        pytest.skip("only root can act as somebody else")
    os.seteuid(65534)
    try:
        yield
    finally:
        os.seteuid(0)


def make_read_only(at: Path) -> None:
    """From now on nothing can be written there."""
    subprocess.run(["mount", "-o", "remount,ro", str(at)], check=True)
