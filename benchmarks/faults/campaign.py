"""What the faults share: where tries lie, how long a night takes, and where everything is counted."""

from __future__ import annotations

import random
import statistics
import threading
import time
from collections import deque
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path

from benchmarks.faults.ground import TONIGHT, Ground
from benchmarks.faults.trial import Tally, Trial

__all__ = ["Campaign", "Fault", "Skip", "undisturbed"]


class Skip(Exception):
    """A fault that cannot be made here, and why."""


@dataclass(frozen=True)
class Fault:
    """A fault.

    Attributes
    ----------
    title
        What it is.
    run
        Makes one try: the campaign, the number of the try and of how many, and a random generator of its own.
    tries
        How many tries belong to how many kills.
    """

    title: str
    run: Callable[[Campaign, int, int, random.Random], None]
    tries: Callable[[int], int]


@dataclass
class Campaign:
    """What tries have in common."""

    ground: Ground
    scratch: Path
    seed: int
    tallies: dict[str, Tally] = field(default_factory=dict)
    lengths: deque[float] = field(default_factory=lambda: deque(maxlen=7))
    _lock: threading.Lock = field(default_factory=threading.Lock)

    @property
    def length(self) -> float:
        """Seconds that an undisturbed night takes now, while others use the machine as well."""
        return statistics.median(self.lengths)

    def random(self, fault: str, number: int) -> random.Random:
        """Return the random generator of a try."""
        return random.Random(f"{self.seed} {fault} {number}")

    def tally(self, fault: str) -> Tally:
        """Return where a fault is counted."""
        with self._lock:
            return self.tallies.setdefault(fault, Tally())

    @contextmanager
    def trial(
        self, fault: str, number: int, *, disk: Path | None = None, part_seconds: int | None = None
    ) -> Iterator[Trial]:
        """Lay out a try, and count it."""
        tally = self.tally(fault)
        with self._lock:
            tally.tries += 1
        place = self.scratch / "tries" / f"{fault}-{number}"
        began = time.monotonic()
        trial = Trial(self.ground, tally, fault, number, place, self._lock)
        with trial.begun(disk=disk, part_seconds=part_seconds):
            yield trial
        trial.add("seconds", time.monotonic() - began)
        self.lengths.extend(trial.lengths)


def undisturbed(campaign: Campaign, tries: int = 2) -> None:
    """Make nights without any fault by the real command: they must be what was expected, and say how long they take."""
    for number in range(1, tries + 1):
        with campaign.trial("undisturbed", number) as trial:
            trial.read_beside()
            running = trial.start()
            code = trial.ended(running)
            if not trial.settle(code, states=frozenset({TONIGHT})):
                trial.tell(f"an undisturbed night is not in force: {running.error.strip()[-300:]}")
            trial.next_night()
