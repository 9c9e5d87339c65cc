"""Parts: how a network is cut into pieces that are solved, stored and compared one by one.

The program separates exactly along components. A large component is a part of its own; small ones, such as legs that
no connection ties together, are bundled by the date on which they first depart, so that a part is worth a
process and a folder. Parts are named after that date, so that the same departures go by the same name every night.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from network import Network
from network.arrays import IntArray, TimeArray
from network.graph import component_of_leg

__all__ = ["BUNDLE_MOST", "LARGE", "Part", "cut_parts"]

LARGE = 2_000
"""Products from which on a component is a part of its own."""

BUNDLE_MOST = 50_000
"""Products after which a bundle of small components is closed and another begun."""


@dataclass(frozen=True, eq=False)
class Part:
    """A part of a network.

    Attributes
    ----------
    name
        Local date of its first departure; further parts of the same date have ``-2``, ``-3``, ... behind it.
    legs, itineraries
        Rising positions in the whole network.
    products
        Number of products.
    components
        Number of components that it bundles.
    """

    name: str
    legs: IntArray
    itineraries: IntArray
    products: int
    components: int

    def network_of(self, whole: Network) -> Network:
        """Cut the part out of the whole network."""
        return whole.subnetwork(self.legs, self.itineraries)


def cut_parts(network: Network, large: int = LARGE, bundle_most: int = BUNDLE_MOST) -> list[Part]:
    """Cut a network into parts, in order of date and then of the name of the first leg.

    Components without products go with others of their date, or of the nearest earlier date that sells anything,
    so that every part is a network folder that can be read.

    Parameters
    ----------
    network
        The whole network.
    large
        Products from which on a component is a part of its own.
    bundle_most
        Products after which a bundle is closed.
    """
    if network.n_legs == 0:
        return []
    count, of_leg = component_of_leg(network)
    of_itinerary = of_leg[network.path_leg[network.path_start[:-1]]]
    products = np.bincount(of_itinerary, weights=np.diff(network.product_start), minlength=count).astype(np.int64)
    first = _first_legs(network, of_leg, count)
    date = _dates(network, first, products)
    name = np.argsort(np.argsort(network.legs.name[first].astype("str"), kind="stable"), kind="stable")
    unit = _units(date, name, products, large, bundle_most)
    return _named_parts(network, unit, date, (of_leg, of_itinerary), products)


def _first_legs(network: Network, of_leg: IntArray, count: int) -> IntArray:
    """(C,) leg of every component that departs first, the first in the table of those that depart together."""
    order = np.lexsort((network.legs.departs.astype("datetime64[s]").astype(np.int64), of_leg))
    return np.asarray(order[np.searchsorted(of_leg[order], np.arange(count))])


def _dates(network: Network, first: IntArray, products: IntArray) -> TimeArray:
    """(C,) local date of the first departure; of components that sell nothing that of the next earlier that do."""
    local: TimeArray = network.legs.departs.astype("datetime64[s]") + network.legs.departs_offset.astype(
        "timedelta64[m]"
    )
    date: TimeArray = local[first].astype("datetime64[D]")
    selling = np.unique(date[products > 0])
    if len(selling) == 0:
        return date
    earlier = np.maximum(np.searchsorted(selling, date, side="right") - 1, 0)
    return np.where(products > 0, date, selling[earlier])


def _units(date: np.ndarray, name: IntArray, products: IntArray, large: int, bundle_most: int) -> IntArray:
    """(C,) number of the part of every component, rising by date and then by name of the first leg."""
    order = np.lexsort((name, date))
    new_date = np.append(True, np.diff(date[order]).astype(np.int64) > 0)
    day = np.cumsum(new_date) - 1
    alone = products[order] >= large
    small = np.where(alone, 0, products[order])
    before = np.cumsum(small) - small
    before -= before[new_date][day]
    # A component that sells nothing must never open a bundle: it stays with the one before it.
    begun = day * (small.sum() + 1) + np.where(small > 0, before // bundle_most, 0)
    bundle = np.maximum.accumulate(begun)
    poor = np.bincount(day, weights=small) == 0
    place = np.arange(len(order))
    host = _first_of(np.where(alone, day, -1), len(poor))
    lodging = ~alone & poor[day] & (host[day] >= 0)
    key = np.where(alone, place, np.where(lodging, host[day], -1 - bundle))
    _, opener, group = np.unique(np.column_stack([day, key]), axis=0, return_index=True, return_inverse=True)
    rank = np.empty(len(opener), dtype=np.int64)
    rank[np.lexsort((opener, day[opener]))] = np.arange(len(opener))
    unit = np.empty(len(order), dtype=np.int64)
    unit[order] = rank[group.ravel()]
    return unit


def _first_of(label: IntArray, count: int) -> IntArray:
    """(count,) first place of every label, -1 where it does not occur."""
    found = np.full(count, -1, dtype=np.int64)
    places = np.flatnonzero(label >= 0)[::-1]
    found[label[places]] = places
    return found


def _named_parts(
    network: Network, unit: IntArray, date: np.ndarray, labels: tuple[IntArray, IntArray], products: IntArray
) -> list[Part]:
    count = int(unit.max()) + 1
    date_of = np.empty(count, dtype=date.dtype)
    date_of[unit] = date
    number = np.arange(count) - np.searchsorted(date_of, date_of) + 1
    legs, itineraries = (_members(unit[label], count) for label in labels)
    sizes = np.bincount(unit, weights=products, minlength=count).astype(np.int64)
    bundled = np.bincount(unit, minlength=count)
    return [
        Part(
            name=f"{date_of[u]}" if number[u] == 1 else f"{date_of[u]}-{number[u]}",
            legs=legs[u],
            itineraries=itineraries[u],
            products=int(sizes[u]),
            components=int(bundled[u]),
        )
        for u in range(count)
    ]


def _members(label: IntArray, count: int) -> list[IntArray]:
    order = np.argsort(label, kind="stable")
    return np.split(order, np.searchsorted(label[order], np.arange(1, count)))
