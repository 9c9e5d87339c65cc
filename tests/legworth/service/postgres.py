"""A real PostgreSQL server of a run's own, on loopback, with durable writes."""

from __future__ import annotations

import os
import pwd
import shutil
import socket
import subprocess
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

__all__ = ["postgres_programs", "running_postgres"]


def postgres_programs() -> Path | None:
    """Folder of PostgreSQL's server programs: Debian keeps them off the path."""
    found = shutil.which("pg_ctl")
    if found:
        return Path(found).parent
    return max(Path("/usr/lib/postgresql").glob("*/bin"), default=None)


@contextmanager
def running_postgres(programs: Path) -> Iterator[str]:
    """Run a server; gives its address."""
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
