"""A PostgreSQL server of the tests' own, and empty databases on it; needs its programs, its driver and root."""

from __future__ import annotations

import os
import shutil
import subprocess
import tempfile
import time
from pathlib import Path

import pytest


@pytest.fixture(scope="session")
def running_server():
    """The address of a PostgreSQL server of our own, where its programs and the driver are installed."""
    pytest.importorskip("psycopg", reason="the driver of PostgreSQL is not installed")
    program = shutil.which("postgres")
    if program is None or os.getuid() != 0:
        pytest.skip("no PostgreSQL here, or no right to start it as another user")
    programs = Path(program).resolve().parent
    with tempfile.TemporaryDirectory() as data:
        shutil.chown(data, "postgres")
        user = {"user": "postgres", "cwd": "/", "env": {"LC_ALL": "C.UTF-8"}, "stdout": subprocess.DEVNULL}
        subprocess.run([programs / "initdb", "-D", data, "-A", "trust", "-N", "-E", "UTF8"], check=True, **user)
        options = f"-c listen_addresses= -c unix_socket_directories={data} -c fsync=off"
        log = ["-l", f"{data}/log", "-o", options]
        subprocess.run([programs / "pg_ctl", "-D", data, "-w", *log, "start"], check=True, **user)
        yield data
        subprocess.run([programs / "pg_ctl", "-D", data, "-m", "immediate", "stop"], check=True, **user)


@pytest.fixture(params=["sqlite", "postgresql"])
def ledger_store(request, tmp_path):
    """Where a ledger may lie: a folder, or the URL of an empty database on a server."""
    return str(tmp_path) if request.param == "sqlite" else request.getfixturevalue("server")


@pytest.fixture
def server(running_server):
    """The URL of an empty database."""
    import psycopg

    name = f"test_{time.monotonic_ns()}"
    with psycopg.connect(host=running_server, user="postgres", autocommit=True) as connection:
        collated = "TEMPLATE template0 LOCALE_PROVIDER icu ICU_LOCALE 'en-US'"  # as people have it, not by bytes
        connection.execute(f"CREATE DATABASE {name} {collated}")
    return f"postgresql+psycopg://postgres@/{name}?host={running_server}"
