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

FEW_STEPS = 3
"""Columns by which an answer may lie beside a near one before it is found by bisection."""


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
    def running(self) -> FloatArray:
        """(K + 1, 3) sums of width, width*value and width*value**2 of the columns before each position."""
        width, value = self.columns.width, self.columns.value
        sums = np.zeros((len(self.columns) + 1, 3))
        np.cumsum(np.column_stack([width, width * value, width * value**2]), axis=0, out=sums[1:])
        return sums

    @cached_property
    def running_start(self) -> FloatArray:
        """(I, 3) the rows of ``running`` where the columns of each itinerary begin."""
        return np.asarray(self.running[self.columns.start[:-1]])

    def seats_before(self, end: IntArray) -> FloatArray:
        """Seats of the columns of every itinerary before the positions ``end``, (I,)."""
        return np.asarray(self.running[end, 0] - self.running_start[:, 0])

    def count_above(self, threshold: FloatArray, near: IntArray | None = None) -> IntArray:
        """Return where the columns worth more than a threshold end in every itinerary.

        Parameters
        ----------
        threshold
            (I,) currency.
        near
            (I,) answers for a threshold close by, which make the search short; bisection if None.

        Returns
        -------
        ndarray
            (I,) positions in the columns: those of itinerary i worth more than ``threshold[i]`` are
            ``columns.start[i]:result[i]``.
        """
        start, end = self.columns.start[:-1], self.columns.start[1:]
        if near is None:
            return self._bisected(threshold, start, end)
        value = self._fenced_value
        found = near.copy()
        low = np.flatnonzero((value[found + 1] > threshold) & (found < end))
        high = np.flatnonzero((value[found] <= threshold) & (found > start))
        for _ in range(FEW_STEPS):
            found[low] += 1
            found[high] -= 1
            low = low[(value[found[low] + 1] > threshold[low]) & (found[low] < end[low])]
            high = high[(value[found[high]] <= threshold[high]) & (found[high] > start[high])]
        far = np.concatenate([low, high])
        if len(far):
            found[far] = self._bisected(threshold[far], start[far], end[far])
        return found

    @cached_property
    def _fenced_value(self) -> FloatArray:
        """(K + 2,) the values with one place before and one after them, so that column k stands at k + 1."""
        return np.concatenate([[0.0], self.columns.value, [0.0]])

    def _bisected(self, threshold: FloatArray, low: IntArray, high: IntArray) -> IntArray:
        """Bisect between ``low`` and ``high`` in all itineraries at once."""
        value = self._fenced_value
        deepest = int((high - low).max(initial=0))
        for _ in range(deepest.bit_length()):
            middle = (low + high) >> 1
            searching = middle < high
            above = searching & (value[middle + 1] > threshold)
            low = np.where(above, middle + 1, low)
            high = np.where(searching & ~above, middle, high)
        return low
