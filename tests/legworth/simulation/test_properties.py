"""Drawn networks: whatever is sold, seats suffice, nobody beats hindsight, and money scales with the currency."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from hypothesis import given

from legworth.simulation.entries import entries_of, play_anew, play_schedule, prepare_schedule
from legworth.simulation.hindsight import Hindsight
from legworth.simulation.measures import Book, tally
from legworth.simulation.requests import draw_requests
from legworth.simulation.rules import Situation
from network import Network
from tests.legworth.simulation.cases import EARLY, LATE
from tests.networks import Plan, degenerate_plans, examples, plans
from tests.oracle import departing

NAMES = ("first-come", "leg", "leg+", "adjusted", "virtual", "deterministic", "probabilistic", "curves", "curves+")
INSTANTS = np.array([0.0, 6.0, 11.0])


def in_time(plan: Plan) -> Network:
    network = plan.network()
    days = 12.0 + np.arange(network.n_legs) / 8
    return departing(network, days, np.arange(network.n_products) % 3 - 1, [EARLY, LATE])


def revenues(network: Network) -> dict[str, np.ndarray]:
    requests, situation = draw_requests(network, np.arange(3), 1), Situation.of(network)
    best = Hindsight(network).values(requests.demand)
    found = {}
    for entry in entries_of(NAMES):
        if entry.path_by_path:
            accepted, left = play_anew(requests, entry, network, situation, INSTANTS)
        else:
            schedule = prepare_schedule(entry, network, situation, INSTANTS)
            accepted, left = play_schedule(requests, schedule, situation)
        figures = tally(requests, accepted, situation, Book.of(network, 13.0))
        assert left.min(initial=0) >= 0
        np.testing.assert_array_equal(figures.occupied, (network.remaining - left).sum(axis=1))
        assert np.all(figures.denied == 0)
        assert np.all(figures.passengers + figures.refused == requests.demand.sum(axis=1))
        assert np.all(figures.revenue <= best * (1 + 1e-9) + 1e-9)
        found[entry.name] = figures.revenue
    return found


@given(plans())
@examples(15)
def test_drawn_networks(plan: Plan) -> None:
    network = in_time(plan)
    found = revenues(network)
    # Another currency: the same answers, and so the same revenue in it, but where ties are told apart by rounding.
    for name in ("first-come", "leg"):
        doubled = revenues(replace(network, fare=2.0 * network.fare))[name]
        np.testing.assert_allclose(doubled, 2.0 * found[name])


@given(degenerate_plans())
@examples(15)
def test_peculiar_networks(plan: Plan) -> None:
    revenues(in_time(plan))
