"""What a night is asked for, and what it has to hand while it is made."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field

from legworth.pricing import PricingOptions
from legworth.refresh.journal import Journal
from legworth.refresh.running import PartTask, Workers
from legworth.store import Store, UnfinishedNight
from network import SettingError
from network.settings import NetworkSettings

__all__ = ["Progress", "RefreshOptions", "Work"]

Progress = Callable[[int, int], None]


@dataclass(frozen=True)
class RefreshOptions:
    """How a night is made.

    Attributes
    ----------
    pricing
        How parts are priced; ``jobs`` is the number of processes.
    cluster
        Address of a Dask scheduler whose workers are used instead; none for this machine.
    force
        Reason to publish the night even if a check fails; none to let checks stop it.
    """

    pricing: PricingOptions = field(default_factory=PricingOptions)
    cluster: str | None = None
    force: str | None = None

    def __post_init__(self) -> None:
        if self.force is not None and not self.force.strip():
            raise SettingError("a night is forced for a reason; give one after --force")


@dataclass
class Work:
    """What a night has to hand while it is made."""

    store: Store
    aside: UnfinishedNight
    options: RefreshOptions
    journal: Journal
    settings: NetworkSettings
    workers: Workers | None
    task: PartTask
    progress: Progress
    seconds: dict[str, float] = field(default_factory=dict)

    @contextmanager
    def phase(self, name: str) -> Iterator[None]:
        """Note the seconds of a phase."""
        begin = time.perf_counter()
        yield
        self.seconds[name] = round(time.perf_counter() - begin, 3)
