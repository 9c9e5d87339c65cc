"""Run the parts: as many at a time as there are workers, and once more where a worker died, hung or found no optimum.

Whoever does the work hides behind `Workers`, so that the processes of this machine (`legworth.refresh.processes`) and
the workers of a cluster (`legworth.refresh.cluster`) are driven by the same few rules:

- No more parts are in flight than there are workers, which bounds memory.
- A part that fails is put off until all others are done and then run once more with nothing beside it: with the
  other solver if its solver failed or it took too long, with the same one if its process died.
- A part that fails again stops the night.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Generator, Iterable, Iterator
from concurrent.futures import FIRST_COMPLETED, Future, wait
from concurrent.futures.process import BrokenProcessPool
from dataclasses import dataclass, replace
from typing import Protocol

from legworth.refresh.part_exchange import PartInput, PartOutput
from lp import SOLVERS
from network.errors import LegworthError, SolveError, SolverStoppedError

__all__ = ["Failed", "Failure", "PartTask", "Workers", "run_parts"]

PartTask = Callable[[PartInput], PartOutput]

TICK = 1.0
"""Seconds after which workers and clocks are looked at again."""

PATIENCE = 5.0
"""Times its time limit after which a part counts as overdue even if it still seems to wait for a worker."""


class Workers(Protocol):
    """Whoever works on parts."""

    def capacity(self) -> int:
        """Parts that may be in flight now, at least one."""

    def submit(self, task: PartTask, part: PartInput) -> Future[PartOutput]:
        """Begin with a part; only called while fewer than `capacity` are in flight."""

    def waiting(self, future: Future[PartOutput]) -> bool:
        """Whether a part is known to wait for a worker still."""

    def end(self, future: Future[PartOutput]) -> None:
        """End the process that works on a part."""

    def close(self) -> None:
        """End everything that is still running."""


@dataclass(frozen=True)
class Failure:
    """One part that failed: its name, what happened, and whether it is tried once more and with which solver."""

    part: str
    problem: str
    again: bool
    solver: str


Failed = Callable[[Failure], None]


class _Overdue(Exception):
    """A part has taken too long."""


@dataclass
class _Flight:
    """A part in flight: when it was given away, and when its time began."""

    part: PartInput
    given: float
    since: float

    @classmethod
    def of(cls, part: PartInput) -> _Flight:
        now = time.monotonic()
        return cls(part, now, now)

    def overdue(self, seconds: float, waiting: bool) -> bool:
        """Whether the part has had its time; while it waits for a worker its time does not run, within reason."""
        now = time.monotonic()
        if waiting:
            self.since = now
        return now - self.since > seconds or now - self.given > PATIENCE * seconds


def run_parts(
    parts: Iterable[PartInput], workers: Workers, task: PartTask, seconds: float, failed: Failed
) -> Generator[PartOutput]:
    """Run all parts, in whatever order they are done.

    Parameters
    ----------
    parts
        The parts; drawn one by one as workers become free.
    workers
        Who works; closed at the end, however that comes.
    task
        The work on one part.
    seconds
        Time that a part may take.
    failed
        Told of every failure.

    Raises
    ------
    SolveError
        If a part failed twice for want of an optimum, of time or of a process that lives.
    LegworthError
        If it failed twice in another way.
    """
    again: list[PartInput] = []
    try:
        for part, outcome in _settled(iter(parts), workers, task, seconds, workers.capacity):
            if isinstance(outcome, PartOutput):
                yield outcome
            else:
                again.append(_once_more(part, outcome, failed))
        for part, outcome in _settled(iter(again), workers, task, seconds, lambda: 1):
            if not isinstance(outcome, PartOutput):
                failed(Failure(part.name, _problem(outcome), False, part.lp.solver.name))
                raise _twice(part, outcome, seconds) from outcome
            yield outcome
    finally:
        workers.close()


def _settled(
    parts: Iterator[PartInput], workers: Workers, task: PartTask, seconds: float, most: Callable[[], int]
) -> Iterator[tuple[PartInput, PartOutput | Exception]]:
    """Yield every part with what came of it."""
    flights: dict[Future[PartOutput], _Flight] = {}
    left = True
    while left or flights:
        while left and len(flights) < most():
            part = next(parts, None)
            left = part is not None
            if part is not None:
                flights[workers.submit(task, part)] = _Flight.of(part)
        done, _ = wait(flights, timeout=TICK, return_when=FIRST_COMPLETED)
        for future in done:
            flight = flights.pop(future)
            error = future.exception()
            if error is not None and not isinstance(error, Exception):
                raise error
            yield flight.part, future.result() if error is None else error
        for future, flight in list(flights.items()):
            # Ending one takes time, in which another may have come in.
            if not future.done() and flight.overdue(seconds, workers.waiting(future)):
                del flights[future]
                workers.end(future)
                yield flight.part, _Overdue(f"took more than {seconds:g} s")


def _once_more(part: PartInput, error: Exception, failed: Failed) -> PartInput:
    """Return the part as it is to be tried again."""
    solver = part.lp.solver.name
    if isinstance(error, (SolveError, _Overdue)):
        solver = next(name for name in SOLVERS if name != solver)
    failed(Failure(part.name, _problem(error), True, solver))
    return replace(part, solver=solver)


def _problem(error: Exception) -> str:
    if isinstance(error, BrokenProcessPool):
        return "its process died"
    if isinstance(error, (LegworthError, _Overdue)):
        return str(error)
    return f"{type(error).__name__}: {error}"


def _twice(part: PartInput, error: Exception, seconds: float) -> LegworthError:
    """Say of a part that failed twice what to do."""
    if isinstance(error, SolveError):
        return type(error)(f"part {part.name}: {error}")
    if isinstance(error, _Overdue):
        return SolverStoppedError(
            f"part {part.name}: took more than {seconds:g} s with either solver; "
            "look at its legs, or raise part_seconds"
        )
    if isinstance(error, BrokenProcessPool):
        return SolverStoppedError(
            f"part {part.name}: its process died twice, the second time alone; it may need more memory than there is"
        )
    if isinstance(error, LegworthError):
        return error
    return LegworthError(f"part {part.name}: {_problem(error)}")
