"""Nights in tests: workers without processes, tasks that go wrong, and how to look at what came out.

Tasks stand in a module of their own, so that the processes of a pool and the workers of a cluster can import them.
"""

from __future__ import annotations

import os
import signal
import struct
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from concurrent.futures import Future
from dataclasses import dataclass, field, replace
from pathlib import Path

from legworth.curves import CurveMethod
from legworth.pricing import PricingOptions
from legworth.refresh import PartInput, PartOutput, Refreshed, RefreshOptions, refresh, run_part
from legworth.refresh.running import PartTask
from legworth.store import Night, Store
from network.errors import SolverStoppedError
from tests.folders import Folder

PRICING = PricingOptions(curves=CurveMethod.DECOMPOSITION)


@dataclass
class InPlace:
    """Workers that work at once, in this process; remembers who was worked on, in order."""

    worked: list[str] = field(default_factory=list)
    beside: list[int] = field(default_factory=list)
    closed: bool = False
    most: int = 2

    def capacity(self) -> int:
        return self.most

    def submit(self, task: PartTask, part: PartInput) -> Future[PartOutput]:
        self.worked.append(part.name)
        future: Future[PartOutput] = Future()
        try:
            future.set_result(task(part))
        except Exception as error:
            future.set_exception(error)
        return future

    def waiting(self, future: Future[PartOutput]) -> bool:
        return False

    def end(self, future: Future[PartOutput]) -> None:
        raise AssertionError("nothing can hang here")

    def close(self) -> None:
        self.closed = True


def make(
    folder: Path,
    store: Path,
    *,
    pricing: PricingOptions = PRICING,
    force: str | None = None,
    task: PartTask = run_part,
) -> Refreshed:
    """Make a night in this process."""
    return refresh(folder, store, RefreshOptions(pricing, None, force), workers=InPlace(), task=task)


def in_force(store: Path) -> Night | None:
    """The night in force, after every file of it has been verified."""
    night = Store.open(store).in_force()
    if night is not None:
        assert night.verify() == ()
    return night


def contents(night: Night) -> dict[str, bytes]:
    """Content of every file of a night that is to be the same whoever worked: all in the folders of its parts."""
    return {
        path.relative_to(night.folder).as_posix(): path.read_bytes() for path in sorted(night.folder.glob("part=*/*"))
    }


def limits(folder: Folder, **settings: float) -> Folder:
    """Add a section ``[refresh]``."""
    text = "".join(f"{name} = {value}\n" for name, value in settings.items())
    return folder.mutate("network.toml", lambda toml: f"{toml}\n[refresh]\n{text}")


@dataclass(frozen=True)
class DiesOnce:
    """Kills its own process the first time a part is worked on, and leaves a mark by which it knows."""

    part: str
    marks: Path
    always: bool = False

    def __call__(self, part: PartInput) -> PartOutput:
        mark = self.marks / part.name
        if part.name == self.part and (self.always or not mark.exists()):
            mark.touch()
            os._exit(9)
        return run_part(part)


@dataclass(frozen=True)
class LosesItsWorker:
    """Starts a program that never ends, as a solver that hangs, notes its number, and dies itself, once."""

    note: Path

    def __call__(self, part: PartInput) -> PartOutput:
        if not self.note.exists():
            self.note.write_text(str(subprocess.Popen(["sleep", "3600"]).pid))
            os._exit(9)
        return run_part(part)


@dataclass(frozen=True)
class Litters:
    """Leaves a temporary file and dies once, as a solver does that is killed; notes where the file was."""

    note: Path

    def __call__(self, part: PartInput) -> PartOutput:
        if not self.note.exists():
            litter = Path(tempfile.gettempdir()) / "litter.mps"
            litter.touch()
            self.note.write_text(str(litter))
            os._exit(9)
        return run_part(part)


@dataclass(frozen=True)
class Hangs:
    """Never ends on a part, or only with one of the solvers."""

    part: str
    solver: str | None = None

    def __call__(self, part: PartInput) -> PartOutput:
        if part.name == self.part and part.lp.solver.name == (self.solver or part.lp.solver.name):
            time.sleep(3600)
        return run_part(part)


@dataclass(frozen=True)
class HangsInSolver:
    """Waits on a part, with one of the solvers, for a program that never ends, as a solver may; notes its number."""

    part: str
    solver: str
    note: Path

    def __call__(self, part: PartInput) -> PartOutput:
        if part.name == self.part and part.lp.solver.name == self.solver:
            with subprocess.Popen(["sleep", "3600"]) as hanging:
                self.note.write_text(str(hanging.pid))
        return run_part(part)


@dataclass(frozen=True)
class Fails:
    """Finds no optimum for a part, with one of the solvers or with any."""

    part: str
    solver: str | None = None
    error: type[Exception] = SolverStoppedError

    def __call__(self, part: PartInput) -> PartOutput:
        if part.name == self.part and part.lp.solver.name == (self.solver or part.lp.solver.name):
            raise self.error("gave up")
        return run_part(part)


@dataclass(frozen=True)
class Spoils:
    """Prices a part and then changes what came out."""

    part: str
    change: Callable[[PartOutput], PartOutput]

    def __call__(self, part: PartInput) -> PartOutput:
        output = run_part(part)
        return self.change(output) if part.name == self.part else output


@dataclass(frozen=True)
class Slow:
    """Takes a while for every part and leaves a mark as it begins, with the number of whoever started its process."""

    seconds: float
    marks: Path

    def __call__(self, part: PartInput) -> PartOutput:
        (self.marks / f"{part.name}-{os.getppid()}").touch()
        time.sleep(self.seconds)
        return run_part(part)


def with_solver(part: PartInput, name: str) -> PartInput:
    """The part, solved by a solver of that name."""
    return replace(part, solver=name)  # type: ignore[arg-type]


def half_an_answer(hang: bool) -> None:
    """Send the first half of an answer and die, or hang."""
    frame = sys._getframe()
    while "result_queue" not in frame.f_locals:
        assert frame.f_back is not None
        frame = frame.f_back
    writer = frame.f_locals["result_queue"]._writer
    os.write(writer.fileno(), struct.pack("!i", 1000) + bytes(500))
    if hang:
        time.sleep(3600)
    os._exit(9)


def stop_and_be_killed(seconds: float) -> None:
    """Read nothing more from now on, and be killed after some time."""
    subprocess.Popen(["sh", "-c", f"sleep {seconds}; kill -KILL {os.getpid()}"])
    os.kill(os.getpid(), signal.SIGSTOP)


def length(data: bytes) -> int:
    """Number of bytes."""
    return len(data)
