"""The route graph, and components against networkx.connected_components."""

from __future__ import annotations

import pickle
from itertools import pairwise
from pathlib import Path

import networkx as nx
import numpy as np
import pytest
from hypothesis import given, settings

from network import Network, components, read_folder, route_graph
from tests.folders import Folder
from tests.networks import Plan, plans

DEMO = Path(__file__).parents[2] / "demo_network"


@pytest.fixture(scope="module")
def demo() -> Network:
    return read_folder(DEMO).network


@pytest.fixture
def small(tmp_path: Path) -> Network:
    return read_folder(Folder().write(tmp_path)).network


def legs_of(network: Network, itinerary: int) -> list[int]:
    return network.path_leg[network.path_start[itinerary] : network.path_start[itinerary + 1]].tolist()


def tied_legs(network: Network) -> list[list[int]]:
    """Components of legs by networkx: a node a leg, an edge between legs that follow each other."""
    graph: nx.Graph[int] = nx.Graph()
    graph.add_nodes_from(range(network.n_legs))
    for itinerary in range(network.n_itineraries):
        graph.add_edges_from(pairwise(legs_of(network, itinerary)))
    return sorted(sorted(group) for group in nx.connected_components(graph))


def check_components(network: Network) -> None:
    parts = components(network)
    assert [part.legs.tolist() for part in parts] == tied_legs(network)
    for whole, name in (
        (network.n_legs, "legs"),
        (network.n_itineraries, "itineraries"),
        (network.n_products, "products"),
    ):
        joined = np.concatenate([getattr(part, name) for part in parts])
        assert sorted(joined.tolist()) == list(range(whole))
    for part in parts:
        inner = part.network
        assert inner.legs.name.tolist() == network.legs.name[part.legs].tolist()
        assert inner.remaining.tolist() == network.remaining[part.legs].tolist()
        for position, itinerary in enumerate(part.itineraries):
            assert inner.itinerary[position] == network.itinerary[itinerary]
            assert part.legs[legs_of(inner, position)].tolist() == legs_of(network, int(itinerary))
        assert inner.fare.tolist() == network.fare[part.products].tolist()
        assert inner.demand.mean.tolist() == network.demand.mean[part.products].tolist()
        assert inner.demand.family.tolist() == network.demand.family[part.products].tolist()
        assert inner.product_class.tolist() == network.product_class[part.products].tolist()
        assert part.itineraries[inner.product_itinerary].tolist() == network.product_itinerary[part.products].tolist()


@given(plans(max_legs=7))
@settings(deadline=None, max_examples=150)
def test_components_are_those_of_networkx(plan: Plan) -> None:
    check_components(plan.network())


def test_components_of_the_demo_are_those_of_networkx(demo: Network) -> None:
    check_components(demo)


def test_a_component_is_sent_without_the_whole(demo: Network) -> None:
    part = components(demo)[1]
    sent = pickle.loads(pickle.dumps(part))
    assert sent.whole.n_legs == len(part.legs) < demo.n_legs
    assert sent.network.legs.name.tolist() == part.network.legs.name.tolist()
    assert sent.network.fare.tolist() == part.network.fare.tolist()
    assert sent.legs.tolist() == part.legs.tolist()


def test_components_of_the_small_folder(small: Network) -> None:
    assert [part.network.legs.name.tolist() for part in components(small)] == [["L1", "L2", "L3"], ["L4"], ["L5"]]


def test_no_legs_no_components() -> None:
    assert components(Plan((), (), ()).network()) == []


def test_the_route_graph_holds_every_station_and_leg_once(demo: Network) -> None:
    graph = route_graph(demo)
    assert list(graph) == demo.stations.name.tolist()
    assert graph.number_of_edges() == demo.n_legs
    for origin, destination, name, leg in graph.edges(keys=True, data=True):
        position = leg["position"]
        assert demo.legs.name[position] == name
        assert demo.stations.name[demo.legs.origin[position]] == origin
        assert demo.stations.name[demo.legs.destination[position]] == destination
        assert leg["remaining"] == demo.remaining[position]
        assert leg["departs"] < leg["arrives"]


def test_every_itinerary_is_a_walk_that_keeps_the_connection_times(demo: Network) -> None:
    graph = route_graph(demo)
    by_position = {leg["position"]: (origin, end, leg) for origin, end, leg in graph.edges(data=True)}
    least = dict(zip(demo.stations.name, demo.stations.minimum_connection, strict=True))
    connections = 0
    for itinerary in range(demo.n_itineraries):
        for first, second in pairwise(legs_of(demo, itinerary)):
            _, meets, before = by_position[first]
            origin, _, after = by_position[second]
            assert meets == origin
            assert (after["departs"] - before["arrives"]) / np.timedelta64(1, "m") >= least[meets]
            connections += 1
    assert connections > 1000


def test_stations_carry_their_place_and_label(small: Network) -> None:
    graph = route_graph(small)
    assert graph.nodes["SUD"] == {"label": "Südford", "latitude": 45.5, "longitude": 7.75}
    assert graph.nodes["NOR"]["label"] == "Norby, Old Town"
    assert nx.is_weakly_connected(graph)
    assert graph.degree("HUB") == 4
