"""One try: a store, a night that is disturbed, what must hold after it, and the night after that."""

from __future__ import annotations

import os
import re
import shutil
import subprocess
import sys
import threading
import time
from collections import Counter
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from benchmarks.faults.ground import BEFORE, FIRST, ROOT, TONIGHT, Ground, Step, copy_store
from benchmarks.faults.verdict import Paths, history_faults, in_force, leftovers, night_faults
from benchmarks.faults.watching import MARK, Reader, clear_semaphores, family, kill_family
from network import LegworthError

__all__ = ["LIMIT", "OLD", "OLD_STEPS", "Running", "Tally", "Trial", "plain", "signal_group"]

LIMIT = 300.0
"""Seconds after which a night counts as one that never ends."""

BY_COMMAND = 4

GONE_WITHIN = 20.0
"""Seconds within which no process of a night may be left once its command has ended."""

OLD_STEPS = (Step(FIRST), Step(BEFORE))
OLD = "00002-2027-02-26"
NIGHTS = {"00001-2027-02-25": OLD_STEPS[:1], OLD: OLD_STEPS}


@dataclass
class Tally:
    """What came of the tries of one fault."""

    tries: int = 0
    old: int = 0
    new: int = 0
    next_succeeded: int = 0
    too_late: int = 0
    seconds: float = 0.0
    longest: float = 0.0
    gone_after: float = 0.0
    semaphores: float = 0
    looks: int = 0
    nights_read: int = 0
    codes: Counter[str] = field(default_factory=Counter)
    moments: Counter[str] = field(default_factory=Counter)
    messages: Counter[str] = field(default_factory=Counter)
    violations: list[str] = field(default_factory=list)

    def as_dict(self) -> dict[str, Any]:
        """As plain values."""
        return {name: dict(value) if isinstance(value, Counter) else value for name, value in vars(self).items()}


@dataclass
class Running:
    """A command that runs: its process, where its output goes, and when it began."""

    process: subprocess.Popen[bytes]
    place: Path
    began: float

    def wait(self, limit: float = LIMIT) -> int | None:
        """Wait for its end; None if it does not come."""
        try:
            return self.process.wait(max(limit - (time.monotonic() - self.began), 0.1))
        except subprocess.TimeoutExpired:
            return None

    @property
    def error(self) -> str:
        """What it has printed as errors."""
        return self.place.with_suffix(".err").read_text(errors="replace")


class Trial:
    """One try.

    Attributes
    ----------
    place, store, folder, temporary
        Where everything lies; the store; the network folder; the folder for temporary files.
    tally
        Where it is counted.
    paths
        The nights known.
    harmed
        Nights that were harmed on purpose and are not looked at.
    before
        What is put before every command.
    """

    def __init__(self, ground: Ground, tally: Tally, name: str, number: int, place: Path, lock: threading.Lock) -> None:
        self.ground, self.tally, self.number, self.place, self._lock = ground, tally, number, place, lock
        self.label = f"{name} {number}"
        self.mark = f"{ground.mark}-{name}-{number}-"
        self.store, self.folder, self.temporary = place / "nights", place / "folder", place / "tmp"
        self.paths = Paths(dict(NIGHTS))
        self.lengths: list[float] = []
        self.before: tuple[str, ...] = ()
        self._reader: Reader | None = None
        self.harmed: set[str] = set()
        self._commands: list[int] = []
        self._told = 0

    @contextmanager
    def begun(self, *, disk: Path | None = None, part_seconds: int | None = None) -> Iterator[Trial]:
        """Lay everything out, and clear it away once the try has ended."""
        self.place.mkdir(parents=True)
        if disk is not None:
            self.store = disk / "nights"
        self.temporary.mkdir()
        copy_store(self.ground.store_after(OLD_STEPS), self.store)
        self.ground.write(TONIGHT, self.folder, part_seconds)
        try:
            yield self
        finally:
            if self._reader is not None:
                self._reader.end()
            kill_family(self.mark)
            self.add("semaphores", clear_semaphores(self._commands))
            shutil.rmtree(self.place, ignore_errors=True)

    def put_back(self, kept: Path) -> None:
        """Put the store back as it was kept, as somebody would who mends it by hand."""
        if self._reader is not None:
            self._reader.end()
            self._reader = None
        shutil.rmtree(self.store)
        copy_store(kept, self.store)

    def read_beside(self, *, damaged: bool = False) -> None:
        """Let a reader read from now on."""
        self._reader = Reader(self.store, night_faults, damaged)

    def start(self, jobs: int = 2, **environment: str) -> Running:
        """Start ``legworth refresh``, the leader of a session of its own."""
        place = self.place / f"run{len(self._commands) + 1}"
        command = [*self.before, sys.executable, "-m", "legworth.cli", "refresh", str(self.folder)]
        command += ["--store", str(self.store), "--jobs", str(jobs)]
        whole = {**os.environ, MARK: self.mark, "TMPDIR": str(self.temporary), **environment}
        with place.with_suffix(".out").open("wb") as out, place.with_suffix(".err").open("wb") as error:
            process = subprocess.Popen(
                command,
                cwd=ROOT,
                env=whole,
                stdin=subprocess.DEVNULL,
                stdout=out,
                stderr=error,
                start_new_session=True,
            )
        self._commands.append(process.pid)
        return Running(process, place, time.monotonic())

    def tell(self, *violations: str) -> None:
        """Note violations."""
        lines = [f"{self.label}: {violation}" for violation in violations]
        self._told += len(lines)
        with self._lock:
            self.tally.violations += [line for line in lines if line not in self.tally.violations]

    def count(self, counter: str, key: str) -> None:
        """Count something."""
        with self._lock:
            getattr(self.tally, counter)[key] += 1

    def add(self, figure: str, amount: float = 1) -> None:
        """Add to a figure."""
        with self._lock:
            setattr(self.tally, figure, getattr(self.tally, figure) + amount)

    def most(self, figure: str, amount: float) -> None:
        """Keep the greatest."""
        with self._lock:
            setattr(self.tally, figure, max(getattr(self.tally, figure), amount))

    def ended(self, running: Running, limit: float = LIMIT) -> int | None:
        """Wait until a night and all its processes have ended; return its exit code, None if it never ended."""
        code = running.wait(limit)
        self.most("longest", time.monotonic() - running.began)
        if code is None:
            self.tell(f"it has not ended after {limit:.0f} s")
            kill_family(self.mark)
            running.process.wait()
        self._await_family()
        error = running.error
        self.count("codes", str(code))
        if code == 0:
            self.lengths.append(time.monotonic() - running.began)
        if code != 0:
            self.count("messages", plain(error))
        if code in (1, 2, 3, 4) and not re.match(r"[^\s:]", error):
            self.tell(f"exit code {code} without a line that says why: {error.strip()[:200]!r}")
        if "Traceback" in error:
            self.tell(f"a traceback, exit code {code}: {error.strip().splitlines()[-1]}")
        return code

    def _await_family(self) -> None:
        began = time.monotonic()
        while left := family(self.mark):
            if time.monotonic() - began > GONE_WITHIN:
                self.tell(f"still running after {GONE_WITHIN:.0f} s: {'; '.join(line[:80] for line in left.values())}")
                kill_family(self.mark)
                return
            time.sleep(0.02)
        self.most("gone_after", time.monotonic() - began)

    def moment(self) -> str:
        """How far the newest night has got, by its log."""
        name, _ = in_force(self.store)
        logs = sorted((self.store / "log").glob("*.jsonl"))
        lines = logs[-1].read_text(errors="replace").splitlines() if logs else []
        event = next((e for e in reversed(_EVENTS) if any(f'"event": "{e}"' in line for line in lines)), "")
        if not logs or logs[-1].stem in self.paths.known:
            return "before it held the store"
        if event == "published" or name == logs[-1].stem:
            return "after it was in force"
        return {"": "reading", "begun": "reading", "checks": "report, sync, publication"}.get(event, "pricing")

    def settle(
        self,
        code: int | None,
        *,
        states: frozenset[str] = frozenset({TONIGHT}),
        told: bool = True,
        before: str | None = OLD,
    ) -> bool:
        """Hold the store after a disturbed night to what must be so; return whether the new night is in force.

        Parameters
        ----------
        code
            Exit code of the night.
        states
            States of the tables that it may have been made from.
        told
            Whether the exit code must tell which night is in force.
        before
            Night that the new one must have been compared with; None for any earlier one.
        """
        try:
            name, _ = in_force(self.store)
        except (OSError, ValueError, KeyError) as error:
            self.tell(f"nothing is in force: {error}")
            return False
        new = name != OLD
        self.add("new" if new else "old")
        if told and (code == 0) != new:
            self.tell(f"exit code {code}, and in force is the {'new' if new else 'old'} night")
        self.hold_nights(states, before)
        return new

    def hold_nights(self, states: frozenset[str], before: str | None) -> None:
        """Hold every night of the store to what it must be, the one in force to its hash as well."""
        name, manifest = in_force(self.store)
        folders = sorted((self.store / "nights").iterdir())
        if f"night={name}" not in {folder.name for folder in folders}:
            self.tell(f"night {name} is in force and not there")
        for folder in folders:
            if folder.name.removeprefix("night=") in self.harmed:
                continue
            known = folder.name.removeprefix("night=")
            faults = night_faults(folder, manifest if known == name else None)
            if not faults:
                faults = self.paths.place(self.ground, folder, states, before)
            self.tell(*faults[:5])
            if not faults and known == name and known not in self.paths.known:
                self.tell(f"night {name} is in force and unknown")

    def next_night(self) -> None:
        """Make the next night, which must succeed, be what it must be, and leave nothing behind.

        Every fourth try makes it by the command, with one worker, so that the same bytes are asked of another number
        of them as well; the others make it in this process, which is faster.
        """
        self.paths.spare = False
        told, last = self._told, in_force(self.store)[0]
        try:
            self._next_by_command() if self.number % BY_COMMAND == 0 else self.ground.make(self.folder, self.store)
        except LegworthError as error:
            self.tell(f"the next night failed: {error}")
            return
        name, _ = in_force(self.store)
        if name in self.paths.known or name <= last:
            self.tell("the next night is not in force though it says so")
        self.hold_nights(frozenset({TONIGHT}), last)
        self.tell(*history_faults(self.store))
        self.tell(*leftovers(self.store, self.temporary, self.folder, frozenset(self.ground.states[TONIGHT])))
        if self._reader is not None:
            self._reader.end()
            self.tell(*self._reader.violations)
            self.add("looks", self._reader.looks)
            self.add("nights_read", self._reader.nights_read)
            self._reader = None
        if self._told == told:
            self.add("next_succeeded")

    def _next_by_command(self) -> None:
        running = self.start(jobs=1)
        code = self.ended(running)
        if code != 0:
            raise LegworthError(f"exit code {code}: {running.error.strip()[-300:]}")


_EVENTS = ("begun", "read", "last_night", "part", "checks", "published")


def plain(message: str) -> str:
    """Make messages alike that differ in paths, names and numbers only."""
    text = re.sub(r"\S*/\S*?([^/\s]+\.(?:csv|toml|jsonl?|parquet))", r".../\1", message.strip())
    text = re.sub(r"/\S+", "...", text)
    text = re.sub(r"\d{5}-\d{4}-\d\d-\d\d", "NIGHT", text)
    text = re.sub(r"\d{4}-\d\d-\d\d(-\d)?", "DATE", text)
    lines = [line for line in text.splitlines() if line.strip()]
    if any(line.startswith("Traceback") for line in lines):
        lines = ["Traceback", lines[-1]]
    return " | ".join(lines)[:400] or "(nothing)"


def signal_group(process: int, number: int) -> None:
    """Signal the process group that a process leads, if it is still there."""
    try:
        os.killpg(process, number)
    except (ProcessLookupError, PermissionError):
        return
