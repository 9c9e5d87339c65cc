"""City pairs: which itineraries of a history lend each other strength."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from legworth.estimation.departures import network_departures
from legworth.estimation.history import BookingHistory
from network import Network
from network.arrays import IntArray, NameArray

__all__ = ["Pools", "history_positions"]


@dataclass(frozen=True, eq=False)
class Pools:
    """City pairs of the itineraries of a history.

    Attributes
    ----------
    city_pair
        (I,) position of the city pair of every itinerary of the history.
    name
        Names of the city pairs, such as ``ORV-SAL``.
    """

    city_pair: IntArray
    name: NameArray

    @classmethod
    def of(cls, history: BookingHistory, network: Network, history_name: NameArray | None = None) -> Pools:
        """Take the city pairs from a network; an itinerary that it does not know stands alone, under its own name.

        Parameters
        ----------
        history
            Itineraries by name.
        network
            Itineraries and stations.
        history_name
            (I',) name under which history holds every itinerary of the network; its own name if left out.
        """
        at = history_positions(history, network, history_name)
        journeys, stations = network_departures(network), network.stations.name
        ends = stations[journeys.origin], stations[journeys.destination]
        name = history.itinerary.astype(object).copy()
        known = at >= 0
        name[at[known]] = [f"{begin}-{end}" for begin, end in zip(ends[0][known], ends[1][known], strict=True)]
        names, position = np.unique(name.astype(str), return_inverse=True)
        return cls(position.astype(np.int64), names.astype(object))

    def pairs_of(self, network: Network) -> IntArray:
        """(I',) city pair of every itinerary of a network, -1 where history holds none."""
        journeys, stations = network_departures(network), network.stations.name
        ends = zip(stations[journeys.origin], stations[journeys.destination], strict=True)
        return np.asarray(pd.Index(self.name).get_indexer(pd.Index([f"{begin}-{end}" for begin, end in ends])))


def history_positions(history: BookingHistory, network: Network, history_name: NameArray | None = None) -> IntArray:
    """(I',) position in the history of every itinerary of a network, -1 where it holds none of that name."""
    names = network.itinerary if history_name is None else history_name
    if len(names) != network.n_itineraries:
        raise ValueError(f"expected a name for each of {network.n_itineraries} itineraries, got {len(names)}")
    return np.asarray(pd.Index(history.itinerary).get_indexer(pd.Index(names)))
