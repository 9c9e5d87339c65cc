"""Which journeys between the same two stations are worth offering: dominance, and a most per day."""

from __future__ import annotations

import numpy as np

from legworth.schedules.connection_board import DepartureBoard
from legworth.schedules.connection_journeys import Journeys
from legworth.schedules.connection_report import Tally
from network.arrays import BoolArray, IntArray

__all__ = ["LaterArrivals", "dominated", "limit_per_day"]

NEVER = 2**40
"""Seconds, later than any arrival."""


def dominated(pair: IntArray, departs: IntArray, arrives: IntArray, vehicles: IntArray) -> BoolArray:
    """Tell which journeys others make pointless.

    Journey x is dominated by y of the same pair of stations if y leaves no earlier, arrives no later and needs no more
    vehicles, and at least one of the three is better. Equals do not dominate each other. What dominates a journey that
    dominates x dominates x, so it does not matter whether y itself is kept.

    Parameters
    ----------
    pair
        (n,) one number for each pair of stations.
    departs, arrives
        (n,) seconds, the arrivals at least 0.
    vehicles
        (n,) vehicles.

    Returns
    -------
    ndarray
        (n,) of bool.

    Examples
    --------
    >>> departs, arrives = np.array([10, 20, 20, 30]), np.array([50, 50, 50, 60])
    >>> dominated(np.zeros(4, dtype=int), departs, arrives, np.array([1, 2, 3, 3])).tolist()
    [False, False, True, False]
    """
    if len(pair) == 0:
        return np.zeros(0, dtype=bool)
    order = np.lexsort((arrives, -departs, pair))
    pair, departs, arrives, vehicles = (values[order] for values in (pair, departs, arrives, vehicles))
    new_pair = np.append(True, pair[1:] != pair[:-1])
    new_run = new_pair | np.append(True, departs[1:] != departs[:-1])
    runs = np.flatnonzero(new_run)
    run = np.cumsum(new_run) - 1
    shift = (np.cumsum(new_pair) - 1) * NEVER  # lets one running minimum over all begin anew with every pair
    before = runs[run] - 1  # the last journey that leaves later
    later_exists = (before >= 0) & (pair[before] == pair)
    found = np.zeros(len(pair), dtype=bool)
    fewer_in_run = np.full(len(pair), NEVER)
    for count in np.unique(vehicles):
        arrival = np.where(vehicles <= count, arrives, NEVER)
        best = np.minimum.accumulate(arrival - shift)
        leaving_later = np.where(later_exists, best[before] + shift, NEVER)
        in_run = np.minimum.reduceat(arrival, runs)[run]
        worse = (leaving_later <= arrives) | (in_run < arrives) | (fewer_in_run <= arrives)
        found |= worse & (vehicles == count)
        fewer_in_run = in_run
    result = np.empty(len(pair), dtype=bool)
    result[order] = found
    return result


class LaterArrivals:
    """Earliest arrivals from one station by journeys that leave later than those looked at now.

    Journeys are looked at from the last departure of a station to its first, in blocks that never part equal
    departures, so what is known of earlier blocks decides for certain, without holding their journeys.
    """

    def __init__(self, board: DepartureBoard, most_vehicles: int) -> None:
        self._origin = -1
        self._earliest = np.full((most_vehicles + 1, len(board.stations)), NEVER)

    def dominate(self, origin: IntArray, destination: IntArray, arrives: IntArray, vehicles: IntArray) -> BoolArray:
        """(n,) True where a journey that leaves later arrives no later with no more vehicles."""
        if not np.any(origin == self._origin):
            return np.zeros(len(origin), dtype=bool)
        return np.asarray((origin == self._origin) & (self._earliest[vehicles, destination] <= arrives))

    def learn(self, journeys: Journeys, origin: int) -> None:
        """Take in the journeys of a block whose last station of departure is ``origin``."""
        board = journeys.board
        if origin != self._origin:
            self._origin = origin
            self._earliest[:] = NEVER
        own = np.flatnonzero(board.origin[journeys.first] == origin)
        to = board.destination[journeys.last[own]]
        np.minimum.at(self._earliest, (journeys.vehicles[own], to), journeys.arrives[own])
        np.minimum.accumulate(self._earliest, axis=0, out=self._earliest)


def limit_per_day(journeys: Journeys, most: int | None, tally: Tally) -> Journeys:
    """Keep at most so many journeys of a pair of stations and a local date of departure.

    The quickest come first, then those with fewer vehicles, then by the names of the legs. A journey without a change
    takes its place among them and is kept even beyond the limit.
    """
    if most is None or len(journeys) == 0:
        return journeys
    day = journeys.board.departs_day[journeys.first]
    pair = journeys.pair
    order = journeys.ordered_by(pair, day, journeys.arrives - journeys.departs, journeys.vehicles)
    pair, day = pair[order], day[order]
    new = np.append(True, (pair[1:] != pair[:-1]) | (day[1:] != day[:-1]))
    place = np.arange(len(order)) - np.flatnonzero(new)[np.cumsum(new) - 1]
    beyond = (place >= most) & ~journeys.direct[order]

    def words(row: int) -> str:
        which = int(order[row])
        date = np.datetime64(int(day[row]), "D")
        return f"{journeys.words(which)}: number {place[row] + 1} of {journeys.ends(which)} on {date}"

    tally.note("most_per_day", np.flatnonzero(beyond), words)
    return journeys.take(np.sort(order[~beyond]))
