"""A PostgreSQL server of the tests' own, and empty databases on it; needs its programs, its driver and root."""

from __future__ import annotations

import os
import shutil
import subprocess
import tempfile
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest


@contextmanager
def postgres() -> Iterator[str]:
    """A running server: the folder of its socket."""
    programs = Path(str(shutil.which("postgres"))).resolve().parent
    with tempfile.TemporaryDirectory() as data:
        shutil.chown(data, "postgres")
        user = {"user": "postgres", "cwd": "/", "env": {"LC_ALL": "C.UTF-8"}, "stdout": subprocess.DEVNULL}
        subprocess.run([programs / "initdb", "-D", data, "-A", "trust", "-N", "-E", "UTF8"], check=True, **user)
        options = f"-c listen_addresses= -c unix_socket_directories={data} -c fsync=off"
        log = ["-l", f"{data}/log", "-o", options]
        subprocess.run([programs / "pg_ctl", "-D", data, "-w", *log, "start"], check=True, **user)
        try:
            yield data
        finally:
            subprocess.run([programs / "pg_ctl", "-D", data, "-m", "immediate", "stop"], check=True, **user)


def new_database(at: str, like: str | None = None) -> str:
    """The URL of an empty database on the server whose socket is there, or of a copy of the one at the URL ``like``."""
    import psycopg

    name = f"test_{time.monotonic_ns()}"
    with psycopg.connect(host=at, user="postgres", autocommit=True) as connection:
        collated = "TEMPLATE template0 LOCALE_PROVIDER icu ICU_LOCALE 'en-US'"  # as people have it, not by bytes
        copied = f"TEMPLATE {like.split('/')[3].split('?')[0]}" if like else collated
        connection.execute(f"CREATE DATABASE {name} {copied}")
    return f"postgresql+psycopg://postgres@/{name}?host={at}"


@contextmanager
def databases() -> Iterator[Callable[..., str]]:
    """A server, and what makes an empty database on it or a copy of one."""
    with postgres() as at:
        yield lambda like=None: new_database(at, like)


@pytest.fixture(scope="session")
def running_server():
    """A PostgreSQL server of our own, where its programs and the driver are installed: the folder of its socket."""
    pytest.importorskip("psycopg", reason="the driver of PostgreSQL is not installed")
    if shutil.which("postgres") is None or os.getuid() != 0:
        pytest.skip("no PostgreSQL here, or no right to start it as another user")
    with postgres() as at:
        yield at


@pytest.fixture(params=["sqlite", "postgresql"])
def ledger_store(request, tmp_path):
    """Where a ledger may lie: a folder, or the URL of an empty database on a server."""
    return str(tmp_path) if request.param == "sqlite" else request.getfixturevalue("server")


@pytest.fixture
def server(running_server):
    """The URL of an empty database."""
    return new_database(running_server)
