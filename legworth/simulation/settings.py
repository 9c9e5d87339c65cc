"""What a simulation is asked for."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from legworth.simulation.attendance import Attendance
from legworth.simulation.entries import entries_of
from network import SettingError

__all__ = ["BASELINE", "REOPTIMISED", "STANDARD", "SimulationOptions"]

STANDARD = (
    "first-come",
    "leg",
    "leg+",
    "adjusted",
    "virtual",
    "deterministic",
    "probabilistic",
    "randomised",
    "curves",
)
"""Entries whose rules serve all paths."""

REOPTIMISED = ("adjusted+", "virtual+", "deterministic+", "probabilistic+", "curves+")
"""Entries that need preparations for every path."""

BASELINE = "leg+"
"""Leg-level control re-optimised at every reading, as it is run in practice: what the others are compared with."""


@dataclass(frozen=True)
class SimulationOptions:
    """What is simulated.

    Attributes
    ----------
    paths, seed
        Booking horizons, and the seed from which they are drawn.
    methods
        Names of methods, with + at the end to re-optimise; `BASELINE` always takes part.
    reoptimised_paths
        Paths, the first ones, played by entries that must be prepared anew for every path; 0 leaves them out.
    readings
        Instants of re-optimisation, the snapshot included, if no days are given.
    reading_days
        Days before the last departure at which to re-optimise.
    demand_factor
        Factor on the demand to come, for both the requests and the forecast.
    fare_splits
        Whether to bound by fare splits, which takes long.
    attendance
        Cancellations, no-shows and seats authorised beyond those on board; None for none.
    legs
        Names of legs to follow over time; those with the dearest last seats if none is given.
    jobs
        Processes.

    Raises
    ------
    SettingError
        If one is out of its limits.
    """

    paths: int = 1000
    seed: int = 1
    methods: tuple[str, ...] = (*STANDARD, *REOPTIMISED)
    reoptimised_paths: int = 10
    readings: int = 16
    reading_days: tuple[float, ...] | None = None
    demand_factor: float = 1.0
    fare_splits: bool = False
    attendance: Attendance | None = None
    legs: tuple[str, ...] = ()
    jobs: int = 1

    def __post_init__(self) -> None:
        if self.paths < 2:
            raise SettingError(f"{self.paths} paths are too few to tell an error from; take at least 2")
        if self.reoptimised_paths < 0 or self.reoptimised_paths == 1:
            raise SettingError("entries can be re-optimised path by path on no path, or on at least 2")
        if self.readings < 1:
            raise SettingError(f"the number of readings must be at least 1, got {self.readings}")
        if self.reading_days is not None and not all(np.isfinite(day) and day >= 0 for day in self.reading_days):
            raise SettingError("reading days must be days before departure, not negative")
        if self.seed < 0 or self.jobs < 1:
            raise SettingError("the seed must not be negative and jobs must be at least 1")
        if not 0 < self.demand_factor <= 10:
            raise SettingError(f"the demand factor must be above 0 and at most 10, got {self.demand_factor}")
        entries_of(self.methods)
