"""The hindsight optimum against other solvers, and played back passenger by passenger."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import Bounds, LinearConstraint, milp

from legworth.simulation.hindsight import Hindsight
from legworth.simulation.requests import draw_requests
from network import Network
from network.arrays import IntArray
from tests.legworth.simulation.cases import hub_in_time
from tests.networks import sure_plan

PATHS = 12


def reference(network: Network, demand: IntArray, *, whole: bool) -> float:
    """Optimum by scipy's HiGHS on the plain rows, in whole passengers or not."""
    uses = network.incidence.toarray()[:, network.product_itinerary]
    found = milp(
        -network.fare,
        integrality=np.full(network.n_products, int(whole)),
        bounds=Bounds(0, demand),
        constraints=LinearConstraint(uses, ub=network.remaining),
    )
    assert found.success
    return -float(found.fun)


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_optimum_agrees_with_the_reference_library(seed: int) -> None:
    network = hub_in_time(seed)
    demand = draw_requests(network, np.arange(PATHS), seed).demand
    values = Hindsight(network).values(demand)
    for value, of_path in zip(values, demand, strict=True):
        assert value == pytest.approx(reference(network, of_path, whole=False), rel=1e-9)
        # No plan of whole passengers earns more than the bound.
        assert reference(network, of_path, whole=True) <= value * (1 + 1e-9)


def test_plan_played_back_earns_what_the_bound_says() -> None:
    network = hub_in_time(4)
    requests = draw_requests(network, np.arange(PATHS), 4)
    hindsight, integral = Hindsight(network), 0
    for path, demand in enumerate(requests.demand):
        plan = hindsight.plan(demand)
        seats = np.rint(plan.seats)
        if np.abs(seats - plan.seats).max() > 1e-9:
            continue
        integral += 1
        allotted, left, revenue = seats.copy(), network.remaining.copy(), 0.0
        for product in requests.product[requests.real[:, path], path]:
            if allotted[product] > 0:
                allotted[product] -= 1
                itinerary = network.product_itinerary[product]
                left[network.path_leg[network.path_start[itinerary] : network.path_start[itinerary + 1]]] -= 1
                revenue += network.fare[product]
        assert allotted.sum() == 0
        assert left.min() >= 0
        assert revenue == pytest.approx(plan.value, rel=1e-12)
    assert integral > PATHS / 2


def test_fractional_optimum_of_a_triangle() -> None:
    # Three legs in a ring of one seat each and three two-leg products: the program sells half of each.
    network = sure_plan((1, 1, 1), [((0, 1), 10.0, 1.0), ((1, 2), 10.0, 1.0), ((2, 0), 10.0, 1.0)]).network()
    plan = Hindsight(network).plan(np.array([1, 1, 1]))
    assert plan.value == pytest.approx(15.0)
    assert reference(network, np.array([1, 1, 1]), whole=True) == pytest.approx(10.0)


def test_nobody_asking_earns_nothing() -> None:
    network = hub_in_time(4)
    assert Hindsight(network).values(np.zeros((2, network.n_products), dtype=np.int64)).tolist() == [0.0, 0.0]
