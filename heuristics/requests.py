"""`Requests`: what the requests of a stretch of time add to seats of given values.

With fares sorted by leg, the requests above a value and their worth are running sums looked up at the last fare
above it. From step to step of a dynamic program most values pass no fare, so every seat keeps its place among the fares
of its leg, and only those that passed one are looked up anew.
"""

from __future__ import annotations

from functools import cached_property

import numpy as np
import numpy.typing as npt

from network.arrays import FloatArray, IntArray
from network.runs import SortedRuns

__all__ = ["FarePlaces", "Requests"]

FEW_STEPS = 3
"""Fares that a value may pass before its place is searched for among all."""


class FarePlaces:
    """Places of seats among the fares of their legs, which follow the values of the seats.

    A place is one of the n + 1 between and around the n fares of a leg, the highest fare first. The places of all legs
    stand in one line, those of leg l from ``fares.start[l] + l`` on.

    Parameters
    ----------
    fares
        Adjusted fares, one run a leg.
    leg
        (S,) leg of every seat.
    """

    def __init__(self, fares: SortedRuns, leg: IntArray) -> None:
        self.fares, self.leg = fares, leg
        legs = len(fares.start) - 1
        below = np.arange(len(fares.value)) + np.repeat(np.arange(legs), np.diff(fares.start))
        self._fare_above = np.full(len(fares.value) + legs, np.inf)
        self._fare_above[below + 1] = fares.value
        self._fare_below = np.full(len(fares.value) + legs, -np.inf)
        self._fare_below[below] = fares.value
        self._at: IntArray = fares.start[:-1][leg] + leg
        self._above, self._below = self._fare_above[self._at], self._fare_below[self._at]

    @property
    def count(self) -> IntArray:
        """(S,) fares before the place, those of earlier legs included."""
        return self._at - self.leg

    def count_of(self, seats: IntArray) -> IntArray:
        """``count`` of some seats."""
        return np.asarray(self._at[seats] - self.leg[seats])

    def follow(self, value: FloatArray) -> IntArray:
        """Move to the last fare above each value, (S,); return the seats that have another place now."""
        moved = np.flatnonzero((self._below > value) | (self._above <= value))
        if len(moved):
            at, wanted = self._at[moved], value[moved]
            for _ in range(FEW_STEPS):
                at += self._fare_below[at] > wanted
                at -= self._fare_above[at] <= wanted
            far = np.flatnonzero((self._fare_below[at] > wanted) | (self._fare_above[at] <= wanted))
            if len(far):
                at[far] = self._searched(wanted[far], self.leg[moved[far]])
            self._at[moved] = at
            self._above[moved], self._below[moved] = self._fare_above[at], self._fare_below[at]
        return moved

    def _searched(self, value: FloatArray, leg: IntArray) -> IntArray:
        """Places found in all legs at once."""
        return np.searchsorted(self._ranked, leg - 1j * value) + leg

    @cached_property
    def _ranked(self) -> npt.NDArray[np.complex128]:
        """(P,) leg and fare as complex numbers, which are ordered by leg first and by falling fare then."""
        return np.repeat(np.arange(len(self.fares.start) - 1), np.diff(self.fares.start)) - 1j * self.fares.value


class Requests:
    """Requests of a stretch of time: how many are expected at which adjusted fare, leg by leg.

    Parameters
    ----------
    places
        Fares, and the seats that will ask for their gain among them; one stretch of time after the other may use them.
    expected
        (P,) expected requests of every row.
    """

    def __init__(self, places: FarePlaces, expected: FloatArray) -> None:
        self._places = places
        self._sums = np.zeros((2, len(expected) + 1))
        np.cumsum(expected, out=self._sums[0, 1:])
        np.cumsum(expected * places.fares.value, out=self._sums[1, 1:])
        count, first = places.count, places.fares.start[:-1][places.leg]
        self._base = [sums[first] for sums in self._sums]
        self._found = [sums[count] - base for sums, base in zip(self._sums, self._base, strict=True)]

    def gain(self, value: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return Phi(z), (S,), what these requests add to seats worth z, and the requests above z, (S,)."""
        moved = self._places.follow(value)
        count = self._places.count_of(moved)
        for found, sums, base in zip(self._found, self._sums, self._base, strict=True):
            found[moved] = sums[count] - base[moved]
        number, worth = self._found
        return worth - value * number, number.copy()
