"""Databases for the ledger: a SQLite file, and a real PostgreSQL of this run's own."""

from __future__ import annotations

import os
import pwd
import shutil
import socket
import subprocess
import tempfile
from collections.abc import Iterator
from itertools import count
from pathlib import Path

import psycopg
import pytest

NUMBERS = count()


def _programs() -> Path | None:
    """Folder of PostgreSQL's server programs: Debian keeps them off the path."""
    found = shutil.which("pg_ctl")
    if found:
        return Path(found).parent
    return max(Path("/usr/lib/postgresql").glob("*/bin"), default=None)


@pytest.fixture(scope="session")
def postgres_server() -> Iterator[str]:
    """A PostgreSQL server on loopback with durable writes; yields its address."""
    programs = _programs()
    if programs is None:
        if os.environ.get("CI"):
            pytest.fail("PostgreSQL is not installed; CI must install Debian's package postgresql")
        pytest.skip("PostgreSQL is not installed")
    root = os.geteuid() == 0
    folder = Path(tempfile.mkdtemp(prefix="legworth-postgres-"))
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port = probe.getsockname()[1]
    as_whom = {"user": "postgres", "group": "postgres"} if root else {}
    owner = "postgres" if root else pwd.getpwuid(os.geteuid()).pw_name
    if root:
        shutil.chown(folder, "postgres", "postgres")
    data = folder / "data"

    def run(*words: str) -> None:
        subprocess.run(words, check=True, cwd=folder, stdout=subprocess.DEVNULL, stderr=subprocess.STDOUT, **as_whom)

    run(str(programs / "initdb"), "-D", str(data), "-A", "trust", "-U", owner, "--locale=C", "-E", "UTF8")
    options = f"-c listen_addresses=127.0.0.1 -c port={port} -c unix_socket_directories={folder}"
    run(str(programs / "pg_ctl"), "-D", str(data), "-w", "-l", str(folder / "log"), "-o", options, "start")
    try:
        yield f"postgresql+psycopg://{owner}@127.0.0.1:{port}"
    finally:
        run(str(programs / "pg_ctl"), "-D", str(data), "-m", "immediate", "stop")
        shutil.rmtree(folder, ignore_errors=True)


@pytest.fixture(params=["sqlite", "postgresql"])
def database(request: pytest.FixtureRequest, tmp_path: Path) -> str:
    """URL of an empty database of either kind."""
    if request.param == "sqlite":
        return f"sqlite:///{tmp_path / 'seats.sqlite'}"
    server = request.getfixturevalue("postgres_server")
    name = f"seats_{next(NUMBERS)}"
    with psycopg.connect(server.replace("+psycopg", "") + "/postgres", autocommit=True) as connection:
        connection.execute(f'CREATE DATABASE "{name}"')  # type: ignore[arg-type]
    return f"{server}/{name}"
