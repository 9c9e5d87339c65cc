"""Seat columns: what the network could sell, one column per product and seat, array-wise.

Every linear program here has the same shape. Legs l have c_l seats; an itinerary i uses the legs of its
path; its columns k have a value v_k and a width w_k (the most that may be sold at that value)::

    maximise    sum_k v_k x_k
    subject to  sum over columns k of itineraries through l of x_k <= c_l     for every leg l
                0 <= x_k <= w_k

In the deterministic program there is one column per product, as wide as its mean demand and worth its
fare. In the probabilistic program there is one column per product *and seat*, one wide, worth the fare
times the probability that demand reaches that seat.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from network import Network
from network.arrays import FloatArray, IntArray
from network.runs import SortedRuns

__all__ = ["TAIL", "SeatColumns", "deterministic_columns", "probabilistic_columns", "sampled_columns"]

TAIL = 1e-6
"""Seats that demand reaches with a smaller probability than this get no column."""


@dataclass(frozen=True, eq=False)
class SeatColumns:
    """Columns of one linear program, sorted by itinerary and then by falling value.

    Attributes
    ----------
    value, width
        (K,) currency per seat, positive, and seats, positive.
    product
        (K,) position of the product.
    start
        (I + 1,) where the columns of each itinerary begin.
    """

    value: FloatArray
    width: FloatArray
    product: IntArray
    start: IntArray

    def __len__(self) -> int:
        return len(self.value)

    @cached_property
    def itinerary(self) -> IntArray:
        """(K,) position of the itinerary of every column."""
        return np.repeat(np.arange(len(self.start) - 1), np.diff(self.start))

    @cached_property
    def scale(self) -> float:
        """The greatest value of a column: the size of money here, 1 if there are no columns."""
        return float(self.value.max(initial=0.0)) or 1.0

    def sales(self, seats: FloatArray, n_products: int) -> FloatArray:
        """Sum seats per column, (K,), over the columns of every product, giving (J,)."""
        return np.bincount(self.product, weights=seats, minlength=n_products).astype(np.float64)

    @cached_property
    def running(self) -> FloatArray:
        """(3, K + 1) sums of width, width*value and width*value**2 of the columns before each position."""
        sums = np.zeros((3, len(self) + 1))
        term = self.width
        for row in sums:
            np.cumsum(term, out=row[1:])
            term = term * self.value
        return sums

    @cached_property
    def running_start(self) -> FloatArray:
        """(3, I) the columns of ``running`` where those of each itinerary begin."""
        return np.asarray(self.running[:, self.start[:-1]])

    def seats_before(self, end: IntArray) -> FloatArray:
        """Seats of the columns of every itinerary before the positions ``end``, (I,)."""
        return np.asarray(self.running[0].take(end) - self.running_start[0])

    def sums_before(self, end: IntArray) -> list[FloatArray]:
        """Sums of width, width*value and width*value**2 of every itinerary before the positions ``end``, (I,) each."""
        found = [row.take(end) for row in self.running]
        for sums, first in zip(found, self.running_start, strict=True):
            np.subtract(sums, first, out=sums)
        return found

    def expected_sales(self, seats: FloatArray, fare: FloatArray) -> FloatArray:
        """Passengers expected of every product, (J,), within the seats that each column, (K,), sets aside."""
        revenue = np.bincount(self.product, weights=self.value * seats, minlength=len(fare))
        return np.divide(revenue, fare, out=np.zeros(len(fare)), where=fare > 0)

    def count_above(self, threshold: FloatArray, near: IntArray | None = None) -> IntArray:
        """Return where the columns worth more than a threshold, (I,), end in every itinerary.

        Those of itinerary i worth more than ``threshold[i]`` are ``start[i]:result[i]``; ``near`` are answers
        for thresholds close by.
        """
        return self._runs.count_above(threshold, near=near)

    @cached_property
    def _runs(self) -> SortedRuns:
        return SortedRuns(self.value, self.start)


def deterministic_columns(network: Network) -> SeatColumns:
    """One column per product: value its fare, width its mean demand to come."""
    return _sorted_columns(network, network.fare, network.demand.expected, np.arange(network.n_products))


def sampled_columns(network: Network, demand: FloatArray) -> SeatColumns:
    """One column per product: value its fare, width one outcome of its demand, (J,)."""
    return _sorted_columns(network, network.fare, demand, np.arange(network.n_products))


def probabilistic_columns(network: Network, tail: float = TAIL, *, any_seats: bool = False) -> SeatColumns:
    """One column per product and seat: value f_j S_j(k) for seat k, width 1.

    Seats that demand reaches with probability below ``tail`` are left out, and so are seats beyond the
    first that the path could not carry, which no optimum and no price can depend on; these are kept with
    ``any_seats``, so that the columns serve any number of remaining seats.
    """
    depth = network.demand.seats(tail)
    if not any_seats:
        depth = np.minimum(depth, network.path_remaining[network.product_itinerary] + 1)
    depth = np.where(network.fare > 0, depth, 0)
    product = np.repeat(np.arange(network.n_products, dtype=np.int32), depth)
    first = np.cumsum(depth) - depth
    seat = np.arange(1, len(product) + 1) - np.repeat(first, depth)
    value = network.fare[product] * network.demand.survivor(seat.astype(np.float64), product)
    return _sorted_columns(network, value, np.ones(len(product)), product)


def _sorted_columns(network: Network, value: FloatArray, width: FloatArray, product: IntArray) -> SeatColumns:
    kept = np.flatnonzero((value > 0) & (width > 0))
    itinerary = network.product_itinerary[product[kept]]
    # Complex numbers are ordered by itinerary first. The runs that stand sorted already are merged, which is fast.
    order = kept[np.argsort(itinerary - 1j * value[kept], kind="stable")]
    start = np.searchsorted(itinerary, np.arange(network.n_itineraries + 1))
    return SeatColumns(value[order], width[order], product[order], start)
