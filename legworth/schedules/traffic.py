"""Between which stations passengers may be carried: restrictions of segments, and calls to board or alight only."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from network.arrays import BoolArray, IntArray

__all__ = ["NO_CONNECTING", "NO_LOCAL", "Traffic"]

NO_LOCAL = frozenset("ADEGHIKMNOQTVWXY")
"""Traffic restriction codes that forbid to sell a segment by itself (SSIM, appendix of codes, from memory)."""

NO_CONNECTING = frozenset("BHIMT")
"""Codes that forbid to connect at either end of the segment: local traffic only, or stopovers only (from memory)."""

POINTS = 11
"""Stations ahead for which a leg can carry a code."""


@dataclass(frozen=True, eq=False)
class Traffic:
    """Restrictions of legs by position.

    A *ride* is what a passenger does without changing vehicles: one leg, or several that one vehicle runs.

    Attributes
    ----------
    board, alight
        (L,) whether a ride may begin with the leg, and whether it may end with it.
    row, codes
        (L,) row in ``codes`` of the leg, -1 for no restriction; (R, 11) code of the ride that begins with the leg and
        has one leg, two legs, and so on; a space for none.
    """

    board: BoolArray
    alight: BoolArray
    row: IntArray
    codes: npt.NDArray[np.bytes_]

    @classmethod
    def free(cls, legs: int) -> Traffic:
        """No restrictions."""
        everywhere = np.ones(legs, dtype=bool)
        return cls(everywhere, everywhere, np.full(legs, -1), np.full((0, POINTS), b" ", dtype="S1"))

    def take(self, rows: IntArray) -> Traffic:
        """Restrictions of some legs."""
        return Traffic(self.board[rows], self.alight[rows], self.row[rows], self.codes)

    @property
    def restricted(self) -> bool:
        """Whether there is any restriction at all."""
        return not (self.board.all() and self.alight.all() and (self.row < 0).all())

    def permitted(self, through: IntArray, path_start: IntArray, path_leg: IntArray) -> BoolArray:
        """Tell which itineraries may be sold.

        Parameters
        ----------
        through
            (L,) next leg of the same vehicle, -1 if none.
        path_start, path_leg
            Legs of the itineraries in travel order (see `network.model.Network`).

        Returns
        -------
        BoolArray
            (I,) False where a ride begins or ends where it may not, a single ride is restricted to connecting
            traffic, or one of several rides to local traffic.
        """
        itineraries = len(path_start) - 1
        if itineraries == 0 or not self.restricted:
            return np.ones(itineraries, dtype=bool)
        owner = np.repeat(np.arange(itineraries), np.diff(path_start))
        stays = (through[path_leg[:-1]] == path_leg[1:]) & (owner[:-1] == owner[1:])
        first = np.flatnonzero(np.append(True, ~stays))
        last = np.append(first[1:], len(path_leg)) - 1
        rides = np.bincount(owner[first], minlength=itineraries)
        alone = rides[owner[first]] == 1
        bad = ~self.board[path_leg[first]] | ~self.alight[path_leg[last]]
        code = self._codes_of(path_leg[first], last - first + 1)
        bad |= alone & np.isin(code, [sign.encode() for sign in NO_LOCAL])
        bad |= ~alone & np.isin(code, [sign.encode() for sign in NO_CONNECTING])
        allowed = np.ones(itineraries, dtype=bool)
        allowed[owner[first[bad]]] = False
        return allowed

    def _codes_of(self, leg: IntArray, length: IntArray) -> npt.NDArray[np.bytes_]:
        row = self.row[leg]
        code = np.full(len(leg), b" ", dtype="S1")
        known = (row >= 0) & (length <= POINTS)
        code[known] = self.codes[row[known], length[known] - 1]
        return code
