"""Dask clusters on loopback in tests."""

from __future__ import annotations

import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass
from pathlib import Path

ROOT = Path(__file__).parents[3]


@dataclass(frozen=True)
class Started:
    """A scheduler and its workers (or their nannies), of one thread each."""

    file: str
    scheduler: subprocess.Popen[bytes]
    workers: list[subprocess.Popen[bytes]]


@contextmanager
def cluster(where: Path, workers: int, nanny: bool) -> Iterator[Started]:
    """Start a cluster on loopback; a nanny replaces its worker when that ends."""
    file = where / "scheduler.json"
    # Loading libraries stops a scheduler or worker for seconds on a busy machine: better before than when parts come.
    quiet = ["--no-dashboard", "--scheduler-file", str(file), "--preload", "legworth.refresh.cluster_work"]
    command = [sys.executable, "-m", "distributed.cli.dask_scheduler", "--host", "127.0.0.1", "--port", "0", *quiet]
    worker = [sys.executable, "-m", "distributed.cli.dask_worker", "--host", "127.0.0.1", "--nthreads", "1", *quiet]
    worker += ["--local-directory", str(where), "--nanny" if nanny else "--no-nanny"]
    started: list[subprocess.Popen[bytes]] = []
    with ExitStack() as stack:
        for arguments in [command] + [worker] * workers:
            started.append(
                stack.enter_context(
                    subprocess.Popen(arguments, cwd=ROOT, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
                )
            )
            stack.callback(started[-1].terminate)
        for _ in range(600):
            if file.exists() and file.stat().st_size:
                break
            time.sleep(0.05)
        yield Started(str(file), started[0], started[1:])
