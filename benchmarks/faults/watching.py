"""Who watches while a night is disturbed: its processes, found by a mark in their environment, and a reader."""

from __future__ import annotations

import json
import os
import signal
import threading
import time
from collections.abc import Callable
from pathlib import Path

from benchmarks.faults.ground import sha256
from legworth.store import Store
from network import LegworthError

__all__ = ["MARK", "Reader", "clear_semaphores", "family", "kill_family", "workers"]

MARK = "LEGWORTH_CAMPAIGN"
GLANCE = 0.02
"""Seconds between two looks at what is in force."""

THOROUGH = 2.0
"""Seconds after which a night is read as a whole again even if it is still the same."""


def family(mark: str) -> dict[int, str]:
    """Command line by process, of all whose environment carries a mark that begins so, whoever their parent is now."""
    wanted, found = f"{MARK}={mark}".encode(), {}
    for place in Path("/proc").glob("[0-9]*"):
        try:
            if not any(entry.startswith(wanted) for entry in (place / "environ").read_bytes().split(b"\0")):
                continue
            line = (place / "cmdline").read_bytes().replace(b"\0", b" ").decode(errors="replace")
        except OSError:  # it has ended meanwhile
            continue
        if line:  # a process that waits to be reaped has none
            found[int(place.name)] = line
    return found


def workers(mark: str) -> list[int]:
    """Processes that price parts."""
    return [process for process, line in family(mark).items() if "LokyProcess" in line]


def kill_family(mark: str) -> None:
    """Kill every process that carries a mark that begins so."""
    for process in family(mark):
        try:
            os.kill(process, signal.SIGKILL)
        except ProcessLookupError:
            continue


def clear_semaphores(commands: list[int]) -> int:
    """Remove the named semaphores that commands have left in memory; return how many there were."""
    found = [path for command in commands for path in Path("/dev/shm").glob(f"sem.loky-{command}-*")]
    for path in found:
        path.unlink(missing_ok=True)
    return len(found)


class Reader:
    """Reads the store all the time, as an inventory system does, and notes what it should never have seen.

    What is in force is looked at some fifty times a second. Whenever it has changed, and every two seconds, the
    night is read as a whole: by own code (every file against the manifest), by `Night.verify`, and all tables.

    Parameters
    ----------
    store
        The store.
    sound
        Told the folder of every night read as a whole; returns what is wrong with it.
    damaged
        Whether the night that is in force at the beginning is damaged on purpose, so that errors are to be expected
        until another one is.
    """

    def __init__(self, store: Path, sound: Callable[[Path, str], list[str]], damaged: bool = False) -> None:
        self.violations: list[str] = []
        self.looks = self.nights_read = 0
        self._store, self._sound, self._damaged = store, sound, damaged
        self._first = self._mark()
        self._ended = threading.Event()
        self._thread = threading.Thread(target=self._watch, daemon=True)
        self._thread.start()

    def end(self) -> None:
        """Stop reading, after one last look."""
        self._ended.set()
        self._thread.join()
        self._look(thorough=True)

    def _mark(self) -> bytes | None:
        try:
            return (self._store / "in_force").read_bytes()
        except OSError:
            return None

    def _watch(self) -> None:
        last, since = None, 0.0
        while not self._ended.wait(GLANCE):
            now = self._mark()
            thorough = now != last or time.monotonic() - since > THOROUGH
            self._look(thorough=thorough)
            if thorough:
                last, since = now, time.monotonic()

    def _look(self, *, thorough: bool) -> None:
        self.looks += 1
        mark = self._mark()
        if self._damaged and mark == self._first:
            return
        try:
            said = json.loads(mark or b"nothing is in force")
            folder = self._store / "nights" / f"night={said['night']}"
            if sha256((folder / "manifest.json").read_bytes()) != said["manifest"]:
                self._tell("the manifest is not the one that in_force names")
            if thorough:
                self.nights_read += 1
                for fault in self._sound(folder, said["manifest"]):
                    self._tell(fault)
                self._read_tables()
        except (OSError, ValueError, KeyError, TypeError, LegworthError) as error:
            self._tell(f"{type(error).__name__}: {error}")

    def _read_tables(self) -> None:
        night = Store.open(self._store).in_force()
        if night is None:
            self._tell("nothing is in force")
            return
        for fault in night.verify():
            self._tell(fault)
        for name, rows in night.manifest.rows.items():
            if night.table(name).num_rows != rows:
                self._tell(f"table {name} is not whole")

    def _tell(self, what: str) -> None:
        line = f"a reader saw: {what}"
        if line not in self.violations:
            self.violations.append(line)
