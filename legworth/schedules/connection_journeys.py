"""`Journeys`: itineraries in the making, as flat arrays of legs of a `DepartureBoard`."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from legworth.schedules.connection_board import DepartureBoard
from network.arrays import BoolArray, IntArray
from network.model import ranges

__all__ = ["Journeys"]


@dataclass(frozen=True, eq=False)
class Journeys:
    """Journeys by position.

    Attributes
    ----------
    board
        What the legs are positions of.
    start, leg
        Legs of journey ``i`` in travel order: ``leg[start[i]:start[i + 1]]``.
    vehicles
        (n,) vehicles that a passenger sits in: one more than changes.
    """

    board: DepartureBoard
    start: IntArray
    leg: IntArray
    vehicles: IntArray

    def __len__(self) -> int:
        return len(self.vehicles)

    @classmethod
    def joined(cls, board: DepartureBoard, parts: Sequence[Journeys]) -> Journeys:
        """Put journeys one after the other."""
        length = [part.length for part in parts]
        return cls(
            board,
            np.concatenate([[0], np.cumsum(np.concatenate([np.zeros(0, dtype=np.int64), *length]))]),
            np.concatenate([np.zeros(0, dtype=np.int32), *(part.leg for part in parts)]),
            np.concatenate([np.zeros(0, dtype=np.int8), *(part.vehicles for part in parts)]),
        )

    def take(self, which: IntArray) -> Journeys:
        """Return some journeys, in the order given."""
        length = self.length[which]
        start = np.concatenate([[0], np.cumsum(length)])
        return Journeys(self.board, start, self.leg[ranges(self.start[which], length)], self.vehicles[which])

    @property
    def length(self) -> IntArray:
        """(n,) number of legs."""
        return np.diff(self.start)

    @cached_property
    def first(self) -> IntArray:
        """(n,) first leg."""
        return self.leg[self.start[:-1]]

    @cached_property
    def last(self) -> IntArray:
        """(n,) last leg."""
        return self.leg[self.start[1:] - 1]

    @property
    def pair(self) -> IntArray:
        """(n,) one number for the two stations between which a journey leads."""
        origin = self.board.origin[self.first].astype(np.int64)
        return origin * len(self.board.stations) + self.board.destination[self.last]

    @property
    def departs(self) -> IntArray:
        """(n,) seconds after the epoch of the board."""
        return self.board.departs[self.first]

    @property
    def arrives(self) -> IntArray:
        """(n,) seconds after the epoch of the board."""
        return self.board.arrives[self.last]

    @property
    def direct(self) -> BoolArray:
        """(n,) True where nobody changes."""
        return np.asarray(self.vehicles == 1)

    def words(self, which: int) -> str:
        """Say which legs a journey has."""
        return self.board.words(self.leg[self.start[which] : self.start[which + 1]])

    def ends(self, which: int) -> str:
        """Say from where to where a journey goes."""
        return self.board.ends(int(self.first[which]), int(self.last[which]))

    def ordered_by(self, *keys: IntArray) -> IntArray:
        """Positions by rising keys, the first most important, and among equals by the names of the legs."""
        order = np.lexsort(keys[::-1])
        change = np.ones(len(order), dtype=bool)
        change[1:] = np.any([key[order[1:]] != key[order[:-1]] for key in keys], axis=0)
        tied = np.flatnonzero(~change | ~np.append(change[1:], True))
        if len(tied):
            order[tied] = order[tied][self._by_names(order[tied], np.cumsum(change)[tied])]
        return order

    def _by_names(self, which: IntArray, group: IntArray) -> IntArray:
        """Order some journeys inside groups by the names of their first legs, then their second, and so on."""
        length, start = self.length[which], self.start[which]
        columns = []
        for place in range(int(length.max())):
            column = np.full(len(which), -1)
            has = length > place
            column[has] = self.board.rank[self.leg[start[has] + place]]
            columns.append(column)
        return np.lexsort((*columns[::-1], group))
