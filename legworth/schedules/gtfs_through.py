"""Rides without a change: legs of one run, runs of one block, and trips that transfers.txt joins or parts."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from legworth.schedules.gtfs_runs import Runs
from legworth.schedules.gtfs_tables import GtfsTable, GtfsTables
from network.arrays import IntArray
from network.model import ranges

__all__ = ["through_legs"]

STAYS, ALIGHTS = 4, 5
"""Transfer types of two trips of one vehicle: passengers may stay on board, or must alight."""

DAY = 86_400


@dataclass(frozen=True, eq=False)
class _Ends:
    """First and last leg of every run, and their stations and times, (R,) each; runs without legs have none."""

    first: IntArray
    last: IntArray
    origin: IntArray
    destination: IntArray
    departs: IntArray
    arrives: IntArray


def through_legs(
    tables: GtfsTables,
    runs: Runs,
    run: IntArray,
    stations: tuple[IntArray, IntArray],
    times: tuple[IntArray, IntArray],
) -> IntArray:
    """Next leg of the same vehicle, for every leg.

    That is the next of the same run, or after the last one the first of the run that follows: the next one of the
    same block and day, unless ``transfers.txt`` says otherwise of the two trips. A trip that it joins to another (type
    4) goes on as the earliest run of that one that departs within a day of the arrival; type 5 parts two trips of a
    block. What it says of trips comes before blocks.

    Parameters
    ----------
    tables
        The feed; receives warnings of joined trips that never meet, and of vehicles that part.
    runs
        R runs.
    run
        (L,) run of every leg, rising.
    stations
        (L,) origin and destination.
    times
        (L,) departure and arrival, seconds.

    Returns
    -------
    IntArray
        (L,) positions of legs, -1 where there is none.
    """
    through = np.full(len(run), -1)
    inside = np.flatnonzero(run[1:] == run[:-1])
    through[inside] = inside + 1
    if not len(run):
        return through
    at = np.arange(len(runs))
    first, last = np.searchsorted(run, at), np.searchsorted(run, at, side="right") - 1
    head, tail = np.minimum(first, len(run) - 1), np.maximum(last, 0)
    ends = _Ends(first, last, stations[0][head], stations[1][tail], times[0][head], times[1][tail])
    one, other = _in_blocks(runs, ends)
    transfers = tables.get("transfers")
    if transfers is not None:
        trips = tables["trips"]
        told = [transfers.find(column, trips, "trip_id") for column in ("from_trip_id", "to_trip_id")]
        kind = transfers.numbers("transfer_type")
        of_trips, named = np.isin(kind, (STAYS, ALIGHTS)), (told[0] >= 0) & (told[1] >= 0)
        _warn(transfers, np.flatnonzero(of_trips & ~named), "of transfer_type 4 or 5 names no two trips; it was passed")
        rows = np.flatnonzero(of_trips & named)
        joins, parts = rows[kind[rows] == STAYS], rows[kind[rows] == ALIGHTS]
        spoken = told[0] * len(trips) + told[1]
        kept = ~np.isin(runs.trip[one], told[0][joins])
        kept &= ~np.isin(runs.trip[one] * len(trips) + runs.trip[other], spoken[parts])
        more = _joined(transfers, joins, told[0][joins], told[1][joins], runs, ends)
        one, other = np.append(one[kept], more[0]), np.append(other[kept], more[1])
    through[ends.last[one]] = ends.first[other]
    return through


def _in_blocks(runs: Runs, ends: _Ends) -> tuple[IntArray, IntArray]:
    """Runs that follow each other in a block on one day and meet."""
    blocked = np.flatnonzero((runs.block >= 0) & (ends.last >= ends.first))
    order = blocked[np.lexsort((ends.departs[blocked], runs.day[blocked], runs.block[blocked]))]
    one, other = order[:-1], order[1:]
    meet = (runs.block[one] == runs.block[other]) & (runs.day[one] == runs.day[other])
    meet &= (ends.destination[one] == ends.origin[other]) & (ends.arrives[one] <= ends.departs[other])
    return one[meet], other[meet]


def _joined(
    transfers: GtfsTable, rows: IntArray, before: IntArray, after: IntArray, runs: Runs, ends: _Ends
) -> tuple[IntArray, IntArray]:
    """Runs that rows of transfers.txt join; ``before`` and ``after`` are the trips of each row."""
    there = np.flatnonzero(ends.last >= ends.first)
    by_trip = there[np.lexsort((ends.departs[there], runs.trip[there]))]
    trip = runs.trip[by_trip]
    begin, end = np.searchsorted(trip, before), np.searchsorted(trip, before, side="right")
    row = np.repeat(np.arange(len(rows)), end - begin)
    one = by_trip[ranges(begin, end - begin)]
    start = int(ends.departs[there].min(initial=0))
    span = int(max(ends.departs[there].max(initial=0), ends.arrives[there].max(initial=0))) - start + 1
    key = trip * span + (ends.departs[by_trip] - start)
    place = np.searchsorted(key, after[row] * span + (ends.arrives[one] - start))
    other = by_trip[np.minimum(place, len(by_trip) - 1)] if len(by_trip) else place
    meet = (place < len(by_trip)) & (runs.trip[other] == after[row])
    meet &= (ends.departs[other] - ends.arrives[one] < DAY) & (ends.destination[one] == ends.origin[other])
    both = (end > begin) & np.isin(after, trip)
    met = np.zeros(len(rows), dtype=bool)
    met[row[meet]] = True
    _warn(transfers, rows[both & ~met], "joins trips that never meet at one station within a day; it was passed")
    row, one, other = row[meet], one[meet], other[meet]
    order = np.lexsort((other, ends.departs[other], one))
    row, one, other = row[order], one[order], other[order]
    again = np.append(False, one[1:] == one[:-1])[: len(one)]
    parted = np.unique(row[again & (other != np.append(-1, other[:-1])[: len(other)])])
    _warn(
        transfers,
        rows[parted],
        "joins a trip to one more; of several the one that departs first is taken as the ride without a change",
    )
    return one[~again], other[~again]


def _warn(transfers: GtfsTable, rows: IntArray, problem: str) -> None:
    transfers.note(rows, "from_trip_id", lambda row: problem, warning=True)
