"""Small networks for the tests of this room."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from datetime import UTC, datetime

import numpy as np
import pytest

from network.demand import Demand
from network.model import BookingCurves, Legs, Network, Stations

Build = Callable[..., Network]


@pytest.fixture(scope="session")
def build() -> Build:
    """Return a function that makes a network from capacities, paths and products."""

    def make(
        capacity: Sequence[int],
        paths: Sequence[Sequence[int]],
        products: Sequence[Sequence[tuple[float, float, float]]],
        family: str = "auto",
    ) -> Network:
        """One list of (fare, mean, deviation) for each path."""
        n_legs = len(capacity)
        count = [len(p) for p in products]
        fare, mean, deviation = np.array([row for p in products for row in p], dtype=float).reshape(-1, 3).T
        zeros, instants, nothing = np.zeros(n_legs, int), np.zeros(n_legs, "datetime64[m]"), np.zeros(0)
        no_names = np.zeros(0, dtype=object)
        remaining = np.array(capacity)
        return Network(
            name="small",
            currency="EUR",
            as_of=datetime(2030, 1, 1, tzinfo=UTC),
            stations=Stations(no_names, no_names, nothing, nothing, nothing),
            legs=Legs(
                np.array([f"leg {i}" for i in range(n_legs)], dtype=object),
                *(zeros, zeros, instants, instants, zeros, zeros),
                capacity=remaining.copy(),
                sold=zeros,
            ),
            remaining=remaining,
            itinerary=np.array([f"itinerary {i}" for i in range(len(paths))], dtype=object),
            path_start=np.concatenate([[0], np.cumsum([len(p) for p in paths])]),
            path_leg=np.array([leg for p in paths for leg in p]),
            fare_classes=tuple(f"class {i}" for i in range(max(count))),
            product_itinerary=np.repeat(np.arange(len(paths)), count),
            product_class=np.concatenate([np.arange(n) for n in count]),
            fare=fare,
            demand=Demand.of(mean, deviation, family),
            curve=np.full(len(fare), -1),
            curves=BookingCurves(no_names, np.zeros(1, int), nothing, nothing),
        )

    return make
