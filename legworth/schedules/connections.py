"""Connections: legs joined into itineraries by the rules of a network folder.

The work goes in four steps: legs in departure order by station (`connection_board`), which leg may follow which
(`connection_links`), whole journeys without those that break a rule or are pointless (`connection_search`,
`connection_choice`), and names (`connection_names`). Nothing depends on the order of the rows.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from legworth.schedules.connection_board import DepartureBoard
from legworth.schedules.connection_journeys import Journeys
from legworth.schedules.connection_links import find_links
from legworth.schedules.connection_names import name_journeys
from legworth.schedules.connection_report import Dropped, Tally
from legworth.schedules.connection_search import Permitted, search
from network import Legs, Stations
from network.arrays import IntArray, NameArray
from network.connection_settings import ConnectionRules

__all__ = ["Connections", "build_connections"]


@dataclass(frozen=True, eq=False)
class Connections:
    """Itineraries, sorted by the names of their first and last station, then by departure, arrival and leg names.

    Attributes
    ----------
    path_start, path_leg
        Legs of itinerary ``i`` in travel order: ``path_leg[path_start[i]:path_start[i + 1]]``.
    itinerary
        (I,) names, unique.
    history_name
        (I,) the same without the date, shared by itineraries that recur.
    vehicles
        (I,) vehicles that a passenger sits in: one more than changes.
    dropped
        What each rule dropped, in the order in which the rules are applied.
    unjudged
        Connections kept although their detour is not known, because a station has no coordinates.
    unused_kinds
        Kinds that a minimum connection time names but no leg has.
    """

    path_start: IntArray
    path_leg: IntArray
    itinerary: NameArray
    history_name: NameArray
    vehicles: IntArray
    dropped: dict[str, Dropped]
    unjudged: int
    unused_kinds: tuple[str, ...]

    def __len__(self) -> int:
        return len(self.itinerary)

    def as_dict(self) -> dict[str, Any]:
        """Counts for a report in JSON."""
        by_legs = np.bincount(np.diff(self.path_start), minlength=2)[1:]
        by_vehicles = np.bincount(self.vehicles, minlength=2)[1:]
        return {
            "itineraries": len(self),
            "by_legs": {str(legs): int(count) for legs, count in enumerate(by_legs, start=1) if count},
            "by_vehicles": {str(number): int(count) for number, count in enumerate(by_vehicles, start=1) if count},
            "dropped": {rule: dropped.as_dict() for rule, dropped in self.dropped.items()},
            "without_coordinates": self.unjudged,
            "unused_kinds": list(self.unused_kinds),
        }


def build_connections(
    legs: Legs,
    stations: Stations,
    rules: ConnectionRules,
    *,
    kind: NameArray | None = None,
    through: IntArray | None = None,
    wanted: IntArray | None = None,
    permitted: Permitted | None = None,
    recurring: NameArray | None = None,
    examples: int = 5,
    progress: Callable[[int, int], None] | None = None,
) -> Connections:
    """Join legs into itineraries.

    Between wanted stations every leg alone is an itinerary, and so are legs that one vehicle runs one after the other,
    up to ``rules.most_through``. An itinerary with changes must keep all rules (`network.connection_settings`):

    - the time between two legs where passengers change is at least the station's and the kinds' minimum, at most
      the longest connection, and unless ``overnight`` both stand on the same local date;
    - it never comes back to a station (this holds without a change as well);
    - the great circles of its legs together are at most ``detour`` times the great circle from end to end, where all
      coordinates are known;
    - no other itinerary between the same stations leaves no earlier, arrives no later, needs no more legs, and is
      better in one of the three. Legs on which the passenger keeps the seat count as one. A ride without a change
      dominates connections and is never dropped itself: it is sold in its own right;
    - it is among the first ``most_per_day`` of its pair of stations and local date of departure.

    Parameters
    ----------
    legs, stations
        L legs and their stations, as read (connection times of stations filled in).
    rules
        Section ``[connections]`` of ``network.toml``.
    kind
        (L,) kind of every leg, None or empty where it has none.
    through
        (L,) position of the leg that the same vehicle runs next, -1 where there is none. No connection time is needed
        there, and none is too long.
    wanted
        (p, 2) positions of the stations of departure and destination between which itineraries are made; all if None.
    permitted
        Tells which itineraries may be sold, given ``path_start`` and ``path_leg`` as in `Connections`: traffic rights
        and the like. What may not be sold drops no other itinerary, and longer ones may begin with it.
    recurring
        (L,) name of every leg without its date, such as a flight number, for the names of itineraries; departure times
        if None.
    examples
        Most examples of what each rule dropped.
    progress
        Is told how many legs of how many are done.

    Returns
    -------
    Connections

    Raises
    ------
    ValueError
        If lengths differ, a position is none, a leg ends where it begins or before it departs, or ``through`` leads to
        a leg that begins elsewhere or earlier.
    """
    board = DepartureBoard.of(legs, stations, kind, through)
    if wanted is not None:
        wanted = _pairs(wanted, len(stations))
    if recurring is not None and len(recurring) != len(legs):
        raise ValueError(f"expected one recurring name for each of {len(legs)} legs")
    tally = Tally(examples)
    links = find_links(board, rules, tally)
    journeys = _sorted(search(board, links, rules, wanted, permitted, tally, progress))
    name, history = name_journeys(journeys, None if recurring is None else recurring[board.position])
    named = {name for minimum in rules.minimum_by_kinds for name in (minimum.arriving, minimum.departing)}
    return Connections(
        path_start=journeys.start,
        path_leg=board.position[journeys.leg].astype(np.int32),
        itinerary=name,
        history_name=history,
        vehicles=journeys.vehicles,
        dropped=tally.dropped(),
        unjudged=tally.unjudged,
        unused_kinds=tuple(sorted(named - set(board.kinds))),
    )


def _pairs(wanted: IntArray, stations: int) -> IntArray:
    pairs = np.asarray(wanted)
    if pairs.ndim != 2 or pairs.shape[1] != 2 or not np.issubdtype(pairs.dtype, np.integer):
        raise ValueError(f"wanted must hold rows of two station positions, not {pairs.shape} of {pairs.dtype}")
    if np.any((pairs < 0) | (pairs >= stations)):
        raise ValueError(f"wanted must hold positions from 0 to {stations - 1}")
    return pairs


def _sorted(journeys: Journeys) -> Journeys:
    """Journeys by station names, departure, arrival and leg names."""
    stations = journeys.board.stations.name
    rank = np.empty(len(stations), dtype=np.int64)
    rank[np.argsort(stations, kind="stable")] = np.arange(len(stations))
    origin = rank[journeys.board.origin[journeys.first]]
    destination = rank[journeys.board.destination[journeys.last]]
    return journeys.take(journeys.ordered_by(origin, destination, journeys.departs, journeys.arrives))
