"""Calls of the trips of a GTFS feed, and the legs between them, before they are put on dates."""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np

from legworth.schedules.gtfs_calendar import NO_TIME, seconds_of
from legworth.schedules.gtfs_stations import FeedStations
from legworth.schedules.gtfs_tables import GtfsTable, GtfsTables
from network import counted
from network.arrays import BoolArray, IntArray

__all__ = ["TripLegs", "trip_legs"]

NOT_ALLOWED = 1
"""pickup_type or drop_off_type where passengers may not board or alight."""

APART = 10**8
"""Seconds by which trips are kept apart while all their times are made to rise at once."""


@dataclass(frozen=True, eq=False)
class TripLegs:
    """Legs of trips, by trip and then in travel order.

    Attributes
    ----------
    start
        (T + 1,) legs of trip ``t`` are ``start[t]:start[t + 1]``.
    number
        (n,) number of the leg within its trip, from 1 on.
    origin, destination
        (n,) positions of stations.
    departs, arrives
        (n,) seconds after the beginning of the day of service.
    board, alight
        (n,) whether passengers may board at the origin, and alight at the destination.
    """

    start: IntArray
    number: IntArray
    origin: IntArray
    destination: IntArray
    departs: IntArray
    arrives: IntArray
    board: BoolArray
    alight: BoolArray


@dataclass(frozen=True, eq=False)
class Calls:
    """Calls by trip and then in travel order; ``row`` is their row in stop_times.txt."""

    row: IntArray
    trip: IntArray
    station: IntArray
    arrives: IntArray
    departs: IntArray
    board: BoolArray
    alight: BoolArray

    def take(self, rows: IntArray | BoolArray) -> Calls:
        """Return some of the calls."""
        return Calls(*(getattr(self, field.name)[rows] for field in fields(self)))


def trip_legs(tables: GtfsTables, stations: FeedStations, wanted: BoolArray, left_out: dict[str, int]) -> TripLegs:
    """Make a leg of every pair of timed calls that follow each other on a trip.

    Calls without times and calls at which nobody may board or alight are passed; calls at one station that follow each
    other are one. A leg that takes no time, as feeds in whole minutes have, is given one second.

    Parameters
    ----------
    tables, stations
        The feed.
    wanted
        (T,) whether each trip is wanted.
    left_out
        Receives how many calls were passed.
    """
    table = tables["stop_times"]
    calls = _calls(table, tables, stations, wanted)
    timed = calls.departs != NO_TIME
    first, last = _ends(calls.trip)
    for end, word in ((first, "first"), (last, "last")):
        bad = end[~timed[end]]
        table.note(
            calls.row[bad],
            "arrival_time",
            lambda row, word=word: f"the {word} call of a trip needs a time; write H:MM:SS",
        )
    served = calls.board | calls.alight
    for passed, reason in (
        (~timed, "calls without times"),
        (timed & ~served, "calls at which nobody may board or alight"),
    ):
        if passed.any():
            left_out[reason] = int(passed.sum())
    calls = _merged(calls.take(timed & served))
    calls = _rising(calls, table)
    onward = np.flatnonzero(calls.trip[1:] == calls.trip[:-1])
    trip = calls.trip[onward]
    start = np.searchsorted(trip, np.arange(len(wanted) + 1))
    return TripLegs(
        start=start,
        number=np.arange(len(trip)) - start[trip] + 1,
        origin=calls.station[onward],
        destination=calls.station[onward + 1],
        departs=calls.departs[onward],
        arrives=calls.arrives[onward + 1],
        board=calls.board[onward],
        alight=calls.alight[onward + 1],
    )


def _calls(table: GtfsTable, tables: GtfsTables, stations: FeedStations, wanted: BoolArray) -> Calls:
    """Calls of the trips wanted, in travel order; notes trips and stops that are not there, and faulty times."""
    trip = table.find("trip_id", tables["trips"], "trip_id")
    stop = table.find("stop_id", tables["stops"], "stop_id")
    arrives, departs = seconds_of(table, "arrival_time"), seconds_of(table, "departure_time")
    arrives = np.where(arrives == NO_TIME, departs, arrives)
    departs = np.where(departs == NO_TIME, arrives, departs)
    rows = np.flatnonzero((trip >= 0) & (stop >= 0))
    rows = rows[wanted[trip[rows]]]
    rows = rows[np.lexsort((table.numbers("stop_sequence")[rows], trip[rows]))]
    return Calls(
        row=rows,
        trip=trip[rows],
        station=stations.of_stop[stop[rows]],
        arrives=arrives[rows],
        departs=departs[rows],
        board=table.numbers("pickup_type")[rows] != NOT_ALLOWED,
        alight=table.numbers("drop_off_type")[rows] != NOT_ALLOWED,
    )


def _ends(trip: IntArray) -> tuple[IntArray, IntArray]:
    """First and last position of every trip, of trips in order."""
    first = np.flatnonzero(np.append(True, np.diff(trip) != 0)[: len(trip)])
    return first, np.append(first[1:], len(trip))[: len(first)] - 1


def _merged(calls: Calls) -> Calls:
    """Make one call of calls of a trip that follow each other at one station."""
    if not len(calls.row):
        return calls
    new = np.append(True, (np.diff(calls.trip) != 0) | (np.diff(calls.station) != 0))
    first = np.flatnonzero(new)
    last = np.append(first[1:], len(new)) - 1
    return Calls(
        calls.row[first],
        calls.trip[first],
        calls.station[first],
        calls.arrives[first],
        calls.departs[last],
        np.logical_or.reduceat(calls.board, first),
        np.logical_or.reduceat(calls.alight, first),
    )


def _rising(calls: Calls, table: GtfsTable) -> Calls:
    """Notes times that fall along a trip, and sets equal ones of two calls a second apart."""
    if not len(calls.row):
        return calls
    onward = np.flatnonzero(calls.trip[1:] == calls.trip[:-1]) + 1
    early = onward[calls.arrives[onward] < calls.departs[onward - 1]]
    table.note(
        calls.row[early],
        "arrival_time",
        lambda row: "the trip arrives before it departs from the call before; correct the times or stop_sequence",
    )
    turned = np.flatnonzero(calls.departs < calls.arrives)
    table.note(
        calls.row[turned], "departure_time", lambda row: "the trip departs before it arrives; correct one of the two"
    )
    still = onward[calls.arrives[onward] == calls.departs[onward - 1]]
    if len(still):
        lines = [table.data.line_of(int(row)) for row in (calls.row[still].min(),)]
        table.faults.add(
            table.data.file,
            lines[0],
            "arrival_time",
            f"{counted(len(still), 'call from here on arrives', 'calls from here on arrive')} at the time at which the "
            "trip left the call before; a second was put between",
            warning=True,
            count=len(still),
        )
    first, _ = _ends(calls.trip)
    rank = np.cumsum(np.append(True, np.diff(calls.trip) != 0)) - 1
    number = np.arange(len(rank)) - first[rank]
    shift = rank * APART - number
    times = np.stack([calls.arrives + shift, calls.departs + shift], axis=1)
    times = np.maximum.accumulate(times.ravel()).reshape(-1, 2) - shift[:, None]
    return Calls(calls.row, calls.trip, calls.station, times[:, 0], times[:, 1], calls.board, calls.alight)
