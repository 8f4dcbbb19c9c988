"""A real PostgreSQL of the tests' own: one server a session, one database a test."""

from __future__ import annotations

import os
import shutil
import socket
import subprocess
import tempfile
import uuid
from collections.abc import Iterator
from pathlib import Path

import psycopg
import pytest


def programs() -> Path | None:
    """Return the folder of the newest PostgreSQL server installed, or None."""
    found = [path for path in Path("/usr/lib/postgresql").glob("*/bin") if (path / "initdb").exists()]
    return max(found, key=lambda path: int(path.parent.name), default=None)


def missing() -> str | None:
    """Return what is missing to start the peer, or None."""
    return None if programs() else "postgresql is not installed (apt-get install postgresql)"


def _as_postgres(*command: object) -> list[str]:
    # the server refuses to run as root
    return [*(["runuser", "-u", "postgres", "--"] if os.getuid() == 0 else []), *map(str, command)]


@pytest.fixture(scope="session")
def postgresql_server() -> Iterator[str]:
    """Start a server on a free port of the loopback and yield its url without a database."""
    binaries = programs()
    assert binaries is not None, missing()
    folder = Path(tempfile.mkdtemp(prefix="pg"))
    folder.chmod(0o755)
    if os.getuid() == 0:
        shutil.chown(folder, "postgres", "postgres")
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port = probe.getsockname()[1]
    make = [
        binaries / "initdb",
        "-D",
        folder / "data",
        "-A",
        "trust",
        "-U",
        "postgres",
        "--no-sync",
        "-E",
        "UTF8",
        "--locale=C.UTF-8",
    ]
    options = f"-p {port} -c listen_addresses=127.0.0.1 -c unix_socket_directories={folder} -c fsync=off"
    start = [binaries / "pg_ctl", "-D", folder / "data", "-w", "-l", folder / "log", "-o", options, "start"]
    stop = [binaries / "pg_ctl", "-D", folder / "data", "-m", "immediate", "stop"]
    try:
        subprocess.run(_as_postgres(*make), check=True, stdout=subprocess.DEVNULL, cwd="/")
        subprocess.run(_as_postgres(*start), check=True, stdout=subprocess.DEVNULL, cwd="/")
        yield f"postgresql+psycopg://postgres@127.0.0.1:{port}"
    finally:
        subprocess.run(_as_postgres(*stop), check=False, stdout=subprocess.DEVNULL, cwd="/")
        shutil.rmtree(folder, ignore_errors=True)


@pytest.fixture
def postgresql(postgresql_server: str) -> str:
    """Make an empty database and return its url."""
    name = "t" + uuid.uuid4().hex
    with psycopg.connect(f"{postgresql_server.replace('+psycopg', '')}/postgres", autocommit=True) as connection:
        connection.execute(f"CREATE DATABASE {name}")
    return f"{postgresql_server}/{name}"
