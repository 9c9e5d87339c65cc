"""Networks in time for simulations, and a plain simulation to hold the array-wise one against."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from legworth.simulation.requests import RequestPaths
from network import Network
from network.arrays import FloatArray, IntArray
from tests.networks import hub_plan, one_leg
from tests.oracle import Readings, departing

__all__ = ["EARLY", "LATE", "hub_in_time", "leg_in_time", "plain_play", "revenue_of"]

EARLY: Readings = {60.0: 0.0, 30.0: 0.5, 7.0: 0.9, 0.0: 1.0}
LATE: Readings = {30.0: 0.0, 7.0: 0.25, 2.0: 0.6, 0.0: 1.0}


def leg_in_time(
    capacity: int, products: list[tuple[float, float, float]], days: float, curve: int = 0, family: str = "auto"
) -> Network:
    """One leg, some days before departure, all of whose products follow one curve: 0 early, 1 late, -1 none."""
    return departing(one_leg(capacity, products, family).network(), days, curve, [EARLY, LATE])


def hub_in_time(seed: int, spokes: int = 3, seats: int = 14) -> Network:
    """A small hub, twenty days before departure; inward legs leave half a day sooner; products mix their curves."""
    network = hub_plan(seed, spokes=spokes, seats=seats).network()
    days = np.where(np.arange(network.n_legs) < spokes, 19.5, 20.0)
    return departing(network, days, np.arange(network.n_products) % 3 - 1, [EARLY, LATE])


def plain_play(
    network: Network, requests: RequestPaths, path: int, accepts: Callable[[int, float, IntArray], bool]
) -> tuple[list[bool], IntArray]:
    """Answer the requests of one path one by one; ``accepts`` is told product, instant and seats left."""
    left = np.array(network.remaining)
    answers = []
    for product, at in zip(requests.product[:, path], requests.at[:, path], strict=True):
        if product == network.n_products:
            answers.append(False)
            continue
        itinerary = network.product_itinerary[product]
        legs = network.path_leg[network.path_start[itinerary] : network.path_start[itinerary + 1]]
        sold = bool(np.all(left[legs] > 0)) and accepts(int(product), float(at), left)
        left[legs] -= sold
        answers.append(sold)
    return answers, left


def revenue_of(network: Network, requests: RequestPaths, accepted: np.ndarray) -> FloatArray:
    """Revenue of every path, (P,)."""
    return np.asarray((np.append(network.fare, 0.0)[requests.product] * accepted).sum(axis=0))
