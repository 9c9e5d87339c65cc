"""Totals of every leg: what the checks of a night, and the next night's start, need without reading the products."""

from __future__ import annotations

import numpy as np
import pyarrow as pa

from network import Network
from network.arrays import FloatArray

__all__ = ["leg_totals"]


def leg_totals(network: Network, mean_demand_price: FloatArray, mean_demand_next_seat: FloatArray) -> pa.Table:
    """Make the table ``leg_totals`` of a part.

    Parameters
    ----------
    network
        The part.
    mean_demand_price, mean_demand_next_seat
        (L,) prices of the deterministic program, currency.
    """
    legs = network.legs
    expected = network.demand.expected
    single = np.diff(network.path_start)[network.product_itinerary] == 1
    return pa.table(
        {
            "leg": pa.array(legs.name.astype("str"), pa.string()),
            "departs": pa.array(legs.departs.astype("datetime64[s]"), pa.timestamp("s", tz="UTC")),
            "capacity": legs.capacity.astype(np.int64),
            "sold": legs.sold.astype(np.int64),
            "remaining": network.remaining.astype(np.int64),
            "demand": network.leg_load(expected),
            "own_demand": network.leg_load(np.where(single, expected, 0.0)),
            "highest_fare": _highest_fares(network),
            "mean_demand_price": mean_demand_price,
            "mean_demand_next_seat": mean_demand_next_seat,
        }
    )


def _highest_fares(network: Network) -> FloatArray:
    """(L,) highest fare of a product that uses the leg, 0 where there is none."""
    of_itinerary = np.zeros(network.n_itineraries)
    np.maximum.at(of_itinerary, network.product_itinerary, network.fare)
    highest = np.zeros(network.n_legs)
    np.maximum.at(highest, network.path_leg, np.repeat(of_itinerary, np.diff(network.path_start)))
    return highest
