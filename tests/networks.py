"""Small networks in memory: a `Plan` says in plain tuples what is sold, and hypothesis draws plans.

Drawn figures lie on coarse grids (quarters of a passenger, twelfths of money), so that ties and degenerate
programs turn up all the time.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from datetime import UTC, datetime

import numpy as np
from hypothesis import settings
from hypothesis import strategies as st

from network import BookingCurves, Demand, Legs, Network, Stations

__all__ = ["FAMILIES", "Plan", "Product", "degenerate_plans", "examples", "hub_plan", "one_leg", "plans", "sure_plan"]

FAMILIES = ("poisson", "negative_binomial", "gamma", "normal")

Product = tuple[float, float, float]
"""Fare, mean and deviation of the demand to come."""


def examples(count: int) -> settings:
    """Return the settings of a test that is to draw so many examples, always the same, however slow."""
    return settings(max_examples=count, deadline=None, derandomize=True, database=None)


@dataclass(frozen=True)
class Plan:
    """What is sold on a small network.

    Attributes
    ----------
    capacity
        Seats left on every leg.
    paths
        Legs of every itinerary.
    products
        For every itinerary its products, fare class by fare class.
    family
        Family of all demands, as in `Demand.of`.
    """

    capacity: tuple[int, ...]
    paths: tuple[tuple[int, ...], ...]
    products: tuple[tuple[Product, ...], ...]
    family: str = "auto"

    def network(self) -> Network:
        """Build the network."""
        n_legs = len(self.capacity)
        count = np.array([len(classes) for classes in self.products], dtype=np.int64)
        rows = np.array([row for classes in self.products for row in classes], dtype=np.float64).reshape(-1, 3)
        length = [len(path) for path in self.paths]
        seats, zeros = np.array(self.capacity, dtype=np.int64), np.zeros(n_legs, dtype=np.int64)
        instants = np.zeros(n_legs, dtype="datetime64[m]")
        names, nothing = np.zeros(0, dtype=object), np.zeros(0)
        station = np.array(["hub"], dtype=object)
        return Network(
            name="small",
            currency="EUR",
            as_of=datetime(2030, 1, 1, tzinfo=UTC),
            stations=Stations(station, station, np.zeros(1), np.zeros(1), np.zeros(1)),
            legs=Legs(
                np.array([f"leg {i}" for i in range(n_legs)], dtype=object),
                *(zeros, zeros, instants, instants, zeros, zeros),
                capacity=seats,
                sold=zeros,
            ),
            remaining=seats,
            itinerary=np.array([f"itinerary {i}" for i in range(len(self.paths))], dtype=object),
            path_start=np.concatenate([[0], np.cumsum(length, dtype=np.int64)]),
            path_leg=np.array([leg for path in self.paths for leg in path], dtype=np.int64),
            fare_classes=tuple(f"class {i}" for i in range(int(count.max(initial=0)))),
            product_itinerary=np.repeat(np.arange(len(self.paths)), count),
            product_class=np.concatenate([np.zeros(0, dtype=np.int64), *(np.arange(n) for n in count)]),
            fare=rows[:, 0],
            demand=Demand.of(rows[:, 1], rows[:, 2], self.family),
            curve=np.full(len(rows), -1),
            curves=BookingCurves(names, np.zeros(1, dtype=np.int64), nothing, nothing),
        )

    def with_products(self, products: Sequence[Sequence[Product]]) -> Plan:
        """Return the plan with other products on the same itineraries."""
        return replace(self, products=tuple(tuple(classes) for classes in products))

    def with_fares(self, factor: float) -> Plan:
        """Return the plan in another currency: every fare times a factor."""
        return self.with_products([[(factor * f, m, s) for f, m, s in classes] for classes in self.products])

    def reordered(self, legs: Sequence[int], itineraries: Sequence[int]) -> Plan:
        """Return the plan with leg ``legs[n]`` and itinerary ``itineraries[n]`` in place n, classes turned round."""
        place = {leg: n for n, leg in enumerate(legs)}
        return Plan(
            tuple(self.capacity[leg] for leg in legs),
            tuple(tuple(place[leg] for leg in self.paths[i]) for i in itineraries),
            tuple(self.products[i][::-1] for i in itineraries),
            self.family,
        )


def one_leg(capacity: int, products: Sequence[Product], family: str = "auto") -> Plan:
    """One leg and its fare classes."""
    return Plan((capacity,), ((0,),), (tuple(products),), family)


def sure_plan(capacity: Sequence[int], rows: Sequence[tuple[Sequence[int], float, float]]) -> Plan:
    """Plan of products, each a path, a fare and a demand known without doubt, on an itinerary of its own."""
    paths = tuple(tuple(path) for path, _, _ in rows)
    return Plan(tuple(capacity), paths, tuple(((fare, demand, 0.0),) for _, fare, demand in rows), "normal")


def hub_plan(seed: int, spokes: int = 5, seats: int = 30, classes: int = 4) -> Plan:
    """Draw ``spokes`` legs into and as many out of one hub, all locals and connections, and ample demand."""
    rng = np.random.default_rng(seed)
    inward, outward = range(spokes), range(spokes, 2 * spokes)
    paths: list[tuple[int, ...]] = [(leg,) for leg in (*inward, *outward)]
    paths += [(a, b) for a in inward for b in outward if b - spokes != a]
    capacity = rng.integers(seats // 2, seats * 3 // 2, 2 * spokes)
    ladder = np.linspace(1.0, 0.3, classes)
    products = []
    for path in paths:
        top = rng.uniform(150.0, 400.0) * (1.0 if len(path) == 1 else 1.6)
        mean = rng.uniform(0.2, 1.0, classes) * seats / classes * (1.0 if len(path) == 1 else 2.5 / spokes)
        deviation = np.sqrt(mean * rng.uniform(1.2, 3.0, classes))
        products.append(tuple(zip((top * ladder).tolist(), mean.tolist(), deviation.tolist(), strict=True)))
    return Plan(tuple(capacity.tolist()), tuple(paths), tuple(products), "negative_binomial")


@st.composite
def plans(
    draw: st.DrawFn, max_legs: int = 4, max_seats: int = 9, families: Sequence[str] = ("auto", *FAMILIES)
) -> Plan:
    """Draw plans of up to ``max_legs`` legs; some legs, itineraries and products may have nothing to them."""
    n_legs = draw(st.integers(1, max_legs))
    capacity = draw(st.lists(st.integers(0, max_seats), min_size=n_legs, max_size=n_legs))
    path = st.lists(st.integers(0, n_legs - 1), min_size=1, max_size=3, unique=True).map(tuple)
    paths = draw(st.lists(path, min_size=1, max_size=6))
    fare = st.integers(0, 48).map(lambda twelfths: twelfths * 100 / 12)
    mean = st.integers(0, 24).map(lambda quarters: quarters / 4)
    ratio = st.sampled_from([0.0, 0.5, 1.0, 1.5, 3.0])
    product = st.tuples(fare, mean, ratio).map(lambda row: (row[0], row[1], (row[1] * row[2]) ** 0.5))
    products = draw(st.lists(st.lists(product, max_size=3), min_size=len(paths), max_size=len(paths)))
    plan = Plan(tuple(capacity), tuple(paths), (), draw(st.sampled_from(families)))
    return plan.with_products(products)


@st.composite
def degenerate_plans(draw: st.DrawFn, families: Sequence[str] = ("auto", *FAMILIES)) -> Plan:
    """Draw plans with something peculiar to them: ties, nothing to sell, nobody to buy, or no doubt at all."""
    plan = draw(plans(families=families))
    rows = plan.products
    match draw(st.sampled_from(["equal", "crowded", "closed", "deserted", "free", "sure", "single", "unsold"])):
        case "equal":
            return plan.with_products([[(100.0, m, s) for _, m, s in classes] for classes in rows])
        case "crowded":
            return replace(plan, capacity=tuple(seats + 200 for seats in plan.capacity))
        case "closed":
            return replace(plan, capacity=tuple(0 for _ in plan.capacity))
        case "deserted":
            return plan.with_products([[(f, 0.0, s) for f, _, s in classes] for classes in rows])
        case "free":
            return plan.with_products([[(0.0, m, s) for _, m, s in classes] for classes in rows])
        case "sure":
            whole = [[(f, float(round(m)), 0.0) for f, m, _ in classes] for classes in rows]
            return replace(plan.with_products(whole), family="normal")
        case "single":
            return Plan(plan.capacity, plan.paths[:1], ((rows[0] or ((75.0, 2.0, 2.0),))[:1],), plan.family)
        case _:
            return Plan(plan.capacity, (), (), plan.family)
