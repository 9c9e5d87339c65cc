"""How demand is estimated: what an analyst may choose."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from legworth.estimation.closing import CLOSINGS, Closing
from legworth.estimation.pickup import PICKUPS, Pickup
from network.arrays import FloatArray
from network.errors import SettingError

__all__ = ["DemandOptions"]


@dataclass(frozen=True)
class DemandOptions:
    """How demand is estimated.

    Attributes
    ----------
    closing
        How an interval in which a class was closed is read. ``shared``: the class closed at an unknown instant of it
        because seats ran out for all (leg control); ``limit``: it closed on its own bookings, so they are a lower
        bound (the textbook's censored count); ``discard``: such intervals are left out; ``ignore``: the flag is not
        looked at, which is biased low.
    pickup
        ``combined``: bookings so far inform demand to come as far as history says they do; ``additive``: they do not;
        ``multiplicative``: demand to come is in proportion to them.
    half_life
        Age in days at which a departure counts half; None for no ageing.
    weekday, season
        Whether effects of the weekday and of the time of year are fitted; they need 5 weeks and 330 days of departures.
    seed
        Seed of the choice of series where history is too long for all of it to shape the curves.

    Raises
    ------
    SettingError
        If one is out of its limits.
    """

    closing: Closing = "shared"
    pickup: Pickup = "combined"
    half_life: float | None = 365.0
    weekday: bool = True
    season: bool = True
    seed: int = 1

    def __post_init__(self) -> None:
        if self.closing not in CLOSINGS:
            raise SettingError(f"closing {self.closing!r} is unknown; choose {', '.join(CLOSINGS)}")
        if self.pickup not in PICKUPS:
            raise SettingError(f"pickup {self.pickup!r} is unknown; choose {', '.join(PICKUPS)}")
        if self.half_life is not None and not 0 < self.half_life < np.inf:
            raise SettingError(f"half_life must be above 0 days, or None for no ageing, got {self.half_life}")
        if self.seed < 0:
            raise SettingError(f"seed must not be negative, got {self.seed}")

    def weight(self, age: FloatArray) -> FloatArray:
        """(n,) how much departures of an age in days count; those ahead are of age 0."""
        if self.half_life is None:
            return np.ones(len(age))
        return np.asarray(0.5 ** (np.maximum(age, 0.0) / self.half_life))
