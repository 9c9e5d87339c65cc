"""`SeatProgram`: one linear program over seat columns, and the sums over it that every step needs."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.sparse import csr_array

from lp.columns import SeatColumns
from network import Network
from network.arrays import FloatArray

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

    def with_capacity(self, capacity: FloatArray) -> SeatProgram:
        """Return the program for other seats, (L,), sharing everything else."""
        return SeatProgram(np.asarray(capacity, dtype=np.float64), self.network, self.columns)

    @property
    def incidence(self) -> csr_array:
        """(L, I) legs by itineraries."""
        return self.network.incidence

    @property
    def transposed(self) -> csr_array:
        """(I, L) itineraries by legs."""
        return self.network.transposed

    @property
    def scale(self) -> float:
        """The greatest value of a column: the size of money in this program, 1 if it has no columns."""
        return self.columns.scale

    def path_price(self, prices: FloatArray) -> FloatArray:
        """Sum prices per leg, (L,), over every path, giving (I,)."""
        return self.network.path_sum(prices)

    def load(self, seats: FloatArray) -> FloatArray:
        """Seats taken on every leg, (L,), by seats sold per column, (K,)."""
        carried = np.bincount(self.columns.itinerary, weights=seats, minlength=self.network.n_itineraries)
        return np.asarray(self.incidence @ carried)
