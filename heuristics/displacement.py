"""Displacement-adjusted fares: what a product is worth to one leg of its itinerary.

The fare less the bid prices of the other legs (Barnhart, Belobaba and Odoni 2003, Applications of operations
research in the air transport industry, Transportation Science 37(4), call it the network value).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from heuristics.ladder import TIE, tie_groups
from network.arrays import FloatArray, IntArray
from network.model import Network

__all__ = ["LegProducts", "leg_products"]


@dataclass(frozen=True, eq=False)
class LegProducts:
    """The products of every leg, ranked by displacement-adjusted fare, leg after leg.

    Attributes
    ----------
    leg_start
        (L + 1,) rows of leg ``l`` are ``leg_start[l]:leg_start[l + 1]``.
    product
        (P,) position of the product; exactly equal adjusted fares stand in the order of products.
    adjusted_fare
        (P,) currency per passenger, falling within each leg; may be negative.
    tolerance
        (L,) currency: adjusted fares of the leg at most this far apart are equal, and at most this far
        above zero are nothing.
    """

    leg_start: IntArray
    product: IntArray
    adjusted_fare: FloatArray
    tolerance: FloatArray

    @property
    def n_legs(self) -> int:
        """Number of legs L."""
        return len(self.leg_start) - 1

    @cached_property
    def leg(self) -> IntArray:
        """(P,) leg of every row."""
        return np.repeat(np.arange(self.n_legs), np.diff(self.leg_start))

    @cached_property
    def rank(self) -> IntArray:
        """(P,) place of every row on its leg, 1 the best."""
        return np.arange(len(self.product)) - self.leg_start[self.leg] + 1

    @cached_property
    def group(self) -> IntArray:
        """(P,) number of the group of equal adjusted fares that the row belongs to, over all legs."""
        return tie_groups(self.adjusted_fare, self.tolerance[self.leg], self.rank == 1)


def leg_products(network: Network, bid_prices: npt.ArrayLike) -> LegProducts:
    """Rank the products of every leg by displacement-adjusted fare.

    The adjusted fare of product j on leg l is ``f_j - sum of the bid prices of the other legs of j``.

    Parameters
    ----------
    network
        What is sold.
    bid_prices
        (L,) currency per seat; zeros give the full fares, leg by leg.

    Raises
    ------
    ValueError
        If there is not one finite bid price for every leg, or one is negative.
    """
    price = np.asarray(bid_prices, dtype=np.float64)
    if price.shape != (network.n_legs,) or not np.all(np.isfinite(price)) or np.any(price < 0):
        raise ValueError(f"expected a finite bid price, not negative, for each of {network.n_legs} legs")
    # Legs of all itineraries, leg by leg and then in the order of itineraries.
    order = np.argsort(network.path_leg, kind="stable")
    leg_of_entry = network.path_leg[order]
    itinerary = np.repeat(np.arange(network.n_itineraries), np.diff(network.path_start))[order]
    count = np.diff(network.product_start)[itinerary]
    ends = np.cumsum(count)
    first = network.product_start[itinerary] - (ends - count)
    product = np.arange(count.sum()) + np.repeat(first, count)
    leg = np.repeat(leg_of_entry, count)
    others = network.path_sum(price)[itinerary] - price[leg_of_entry]
    adjusted = network.fare[product] - np.repeat(others, count)

    leg_start = np.searchsorted(leg, np.arange(network.n_legs + 1))
    tolerance = np.zeros(network.n_legs)
    np.maximum.at(tolerance, leg, TIE * network.fare[product])
    # Complex numbers are ordered by leg first.
    falling = np.argsort(leg - 1j * adjusted, kind="stable")
    return LegProducts(leg_start, product[falling], adjusted[falling], tolerance)
