"""Real services in processes of their own, on loopback."""

from __future__ import annotations

import asyncio
import os
import signal
import socket
import subprocess
import sys
import time
from pathlib import Path

from tests.legworth.service.wire import Wire

__all__ = ["ServiceProcess"]


class ServiceProcess:
    """``legworth serve`` on a free port; killed and started again at will.

    Parameters
    ----------
    store
        The store.
    settings
        The settings file.
    log
        File for what the process prints.
    at
        Where its clock begins.
    """

    def __init__(self, store: Path, settings: Path | None, log: Path, at: str = "snapshot") -> None:
        with socket.socket() as probe:
            probe.bind(("127.0.0.1", 0))
            self.port: int = probe.getsockname()[1]
        self._words = [sys.executable, "-m", "legworth.cli", "serve", "--store", str(store), "--port", str(self.port)]
        self._words += ["--at", at] + ([] if settings is None else ["--settings", str(settings)])
        self._log = log
        self._process: subprocess.Popen[bytes] | None = None

    @property
    def pid(self) -> int:
        """Number of the process."""
        assert self._process is not None
        return self._process.pid

    def start(self) -> None:
        """Start the process; it listens a little later."""
        with self._log.open("ab") as log:
            self._process = subprocess.Popen(self._words, stdout=log, stderr=log, start_new_session=True)

    async def listening(self, seconds: float = 60.0) -> None:
        """Wait until it answers."""
        deadline = time.monotonic() + seconds
        async with Wire(self.port) as wire:
            while True:
                try:
                    if (await wire.raw("GET", "/v1/health"))[0] == 200:
                        return
                except (OSError, EOFError, ValueError):
                    pass
                if time.monotonic() > deadline or (self._process is not None and self._process.poll() is not None):
                    raise TimeoutError(f"the service does not answer; see {self._log}")
                await asyncio.sleep(0.05)

    def kill(self) -> None:
        """End it without warning."""
        assert self._process is not None
        os.killpg(self._process.pid, signal.SIGKILL)
        self._process.wait()

    def stop(self) -> None:
        """Ask it to end, and wait."""
        if self._process is not None and self._process.poll() is None:
            self._process.send_signal(signal.SIGTERM)
            try:
                self._process.wait(30)
            except subprocess.TimeoutExpired:
                self.kill()
