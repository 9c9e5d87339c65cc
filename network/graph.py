"""The route graph, and the components along which the work separates exactly."""

from __future__ import annotations

from dataclasses import dataclass

import networkx as nx
import numpy as np
from scipy.sparse import csr_array
from scipy.sparse.csgraph import connected_components

from network.arrays import IntArray
from network.model import Network

__all__ = ["Component", "component_of_leg", "components", "route_graph"]


@dataclass(frozen=True, eq=False)
class Component:
    """A part of a network that shares no itinerary with the rest.

    Attributes
    ----------
    whole
        The network that it is a part of.
    legs, itineraries, products
        Its rising positions in the whole network.
    """

    whole: Network
    legs: IntArray
    itineraries: IntArray
    products: IntArray

    @property
    def network(self) -> Network:
        """The part as a network of its own, in the same order; cut out anew each time, so hold on to it."""
        if len(self.legs) == self.whole.n_legs:
            return self.whole
        return self.whole.subnetwork(self.legs, self.itineraries)

    def __reduce__(self) -> tuple[type[Component], tuple[Network, IntArray, IntArray, IntArray]]:
        """Send the part alone to another process."""
        return Component, (self.network, self.legs, self.itineraries, self.products)


def route_graph(network: Network) -> nx.MultiDiGraph[str]:
    """Return the route graph: one node a station, one edge a leg, with times, seats and position.

    The edge key is the name of the leg; ``position`` is its place in the arrays of the network.
    """
    graph: nx.MultiDiGraph[str] = nx.MultiDiGraph(name=network.name)
    stations, legs = network.stations, network.legs
    for position, name in enumerate(stations.name):
        graph.add_node(
            name,
            label=stations.label[position],
            latitude=float(stations.latitude[position]),
            longitude=float(stations.longitude[position]),
        )
    for position, name in enumerate(legs.name):
        graph.add_edge(
            stations.name[legs.origin[position]],
            stations.name[legs.destination[position]],
            key=name,
            position=position,
            departs=legs.departs[position],
            arrives=legs.arrives[position],
            remaining=int(network.remaining[position]),
        )
    return graph


def components(network: Network) -> list[Component]:
    """Cut a network into its components.

    Two legs belong together when a chain of itineraries ties them; the legs of one itinerary tie each to
    the next. Components come in the order of their first legs. A leg without itinerary is a component of
    its own.
    """
    if network.n_legs == 0:
        return []
    count, of_leg = component_of_leg(network)
    if count == 1:
        sizes = network.n_legs, network.n_itineraries, network.n_products
        return [Component(network, *(np.arange(size) for size in sizes))]
    of_itinerary = of_leg[network.path_leg[network.path_start[:-1]]]
    of_product = of_itinerary[network.product_itinerary]
    legs, itineraries, products = (_grouped(of, count) for of in (of_leg, of_itinerary, of_product))
    return [Component(network, legs[c], itineraries[c], products[c]) for c in range(count)]


def component_of_leg(network: Network) -> tuple[int, IntArray]:
    """Number the components in the order of their first legs.

    Returns
    -------
    int, (L,) array
        How many there are, and the component of every leg.
    """
    within = np.ones(len(network.path_leg), dtype=bool)
    within[network.path_start[1:] - 1] = False
    joint = np.flatnonzero(within)
    pairs = (np.ones(len(joint)), (network.path_leg[joint], network.path_leg[joint + 1]))
    tied = csr_array(pairs, shape=(network.n_legs, network.n_legs))
    count, label = connected_components(tied, directed=False)
    _, first = np.unique(label, return_index=True)
    rank = np.empty(count, dtype=np.int64)
    rank[np.argsort(first)] = np.arange(count)
    return int(count), rank[label]


def _grouped(label: IntArray, count: int) -> list[IntArray]:
    """Positions of each label, rising."""
    order = np.argsort(label, kind="stable")
    edges = np.searchsorted(label[order], np.arange(count + 1))
    return [order[edges[c] : edges[c + 1]] for c in range(count)]
