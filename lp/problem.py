"""`SeatProgram`: one linear program over seat columns, and the sums over it that every step needs."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy.sparse import csr_array

from lp.columns import SeatColumns
from network import Network
from network.model import FloatArray, IntArray

__all__ = ["SeatProgram"]


@dataclass(frozen=True, eq=False)
class SeatProgram:
    """The program of `lp.columns` for given seats.

    Attributes
    ----------
    capacity
        (L,) seats per leg, not negative.
    network
        Paths and incidence; its own remaining seats are not used.
    columns
        The columns.
    """

    capacity: FloatArray
    network: Network
    columns: SeatColumns

    @classmethod
    def of(cls, network: Network, columns: SeatColumns) -> SeatProgram:
        """Return the program for the seats that the network has left."""
        return cls(network.remaining.astype(np.float64), network, columns)

    @property
    def incidence(self) -> csr_array:
        """(L, I) legs by itineraries."""
        return self.network.incidence

    @cached_property
    def transposed(self) -> csr_array:
        """(I, L) itineraries by legs."""
        return csr_array(self.network.incidence.T)

    @cached_property
    def scale(self) -> float:
        """The greatest value of a column: the size of money in this program, 1 if it has no columns."""
        return float(self.columns.value.max()) if len(self.columns) else 1.0

    def path_price(self, prices: FloatArray) -> FloatArray:
        """Sum prices per leg, (L,), over every path, giving (I,)."""
        return self.network.path_sum(prices)

    def load(self, seats: FloatArray) -> FloatArray:
        """Seats taken on every leg, (L,), by seats sold per column, (K,)."""
        carried = np.bincount(self.columns.itinerary, weights=seats, minlength=self.network.n_itineraries)
        return np.asarray(self.incidence @ carried)

    @cached_property
    def running(self) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Running sums of width, width*value and width*value**2, each (K + 1,), from 0."""
        width, value = self.columns.width, self.columns.value
        sums = [np.concatenate([[0.0], np.cumsum(term)]) for term in (width, width * value, width * value**2)]
        return sums[0], sums[1], sums[2]

    def count_above(self, threshold: FloatArray) -> IntArray:
        """Return where the columns worth more than a threshold end in every itinerary.

        Parameters
        ----------
        threshold
            (I,) currency.

        Returns
        -------
        ndarray
            (I,) positions in the columns: those of itinerary i worth more than ``threshold[i]`` are
            ``columns.start[i]:result[i]``. Found by bisection in all itineraries at once.
        """
        low, high = self.columns.start[:-1].copy(), self.columns.start[1:].copy()
        value = self.columns.value
        deepest = int((high - low).max()) if len(low) else 0
        for _ in range(deepest.bit_length()):
            middle = (low + high) >> 1
            searching = middle < high
            above = searching & (value[np.minimum(middle, len(value) - 1)] > threshold)
            low = np.where(above, middle + 1, low)
            high = np.where(searching & ~above, middle, high)
        return low
