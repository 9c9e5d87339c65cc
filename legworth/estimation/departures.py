"""The products of a network as departures: on which date, how long before it, between which stations."""

from __future__ import annotations

from dataclasses import dataclass

from heuristics.arrivals import days_before_departure
from network import Network
from network.arrays import FloatArray, IntArray, NameArray, TimeArray

__all__ = ["Departures", "network_departures"]


@dataclass(frozen=True, eq=False)
class Departures:
    """Itineraries of a network, (I,) each.

    Attributes
    ----------
    date
        Local date on which the first leg departs, datetime64[D].
    days_left
        Days from the snapshot to that departure; 0 where it has departed.
    origin, destination
        Positions of the stations where the journey begins and ends.
    history_name
        Names under which history holds them.
    """

    date: TimeArray
    days_left: FloatArray
    origin: IntArray
    destination: IntArray
    history_name: NameArray


def network_departures(network: Network, history_name: NameArray | None = None) -> Departures:
    """Lay out the departures of a network; history goes by the names of the itineraries if none are given."""
    legs, first, last = network.legs, network.path_start[:-1], network.path_start[1:] - 1
    leg = network.path_leg[first]
    local = legs.departs[leg].astype("datetime64[s]") + legs.departs_offset[leg].astype("timedelta64[m]")
    return Departures(
        date=local.astype("datetime64[D]"),
        days_left=days_before_departure(network)[leg],
        origin=legs.origin[leg],
        destination=legs.destination[network.path_leg[last]],
        history_name=network.itinerary if history_name is None else history_name,
    )
