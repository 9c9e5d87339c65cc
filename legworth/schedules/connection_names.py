"""Names of itineraries: readable, unique, and the same tomorrow as long as the itinerary is."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc

from legworth.schedules.connection_journeys import Journeys
from network.arrays import IntArray, NameArray

__all__ = ["name_journeys"]

DAYS_OF_YEAR = 365


def name_journeys(journeys: Journeys, recurring: NameArray | None = None) -> tuple[NameArray, NameArray]:
    """Name journeys by stations, date and departures.

    A name reads ``BOS-CVG-LAX-0110-0730-1005``: the stations where passengers board, change and alight, the local
    date of departure, and the local time at which each vehicle leaves, or in its place the name under which the
    leg recurs from date to date. Nothing in it depends on other itineraries, so a name stays the same, and with it
    fares and demand, when legs are added or taken away. Only where two itineraries agree in all that, the second by the
    names of its legs ends in ``-2``, and so on. The date has its year where departures span a year or more.

    Parameters
    ----------
    journeys
        n journeys, ordered so that of equal names the first by the names of its legs comes first.
    recurring
        (L,) name without date, such as a flight number, of every leg of the board; departure times if None.

    Returns
    -------
    name, history_name
        (n,) names, unique, and the same without the date, shared by what recurs.
    """
    board = journeys.board
    days = board.departs_day[journeys.first]
    boarding, owner = _boarding(journeys)
    seat = np.arange(len(boarding)) - np.searchsorted(owner, owner)
    if recurring is None:
        minute = board.departs_minute
        label = [f"{at // 60:02d}{at % 60:02d}" for at in range(24 * 60)]
        leaves, code = np.array(label, dtype=object), minute[boarding]
    else:
        leaves, code = recurring, boarding
    stations: list[pa.Array] = []
    departures: list[pa.Array] = []
    for vehicle in range(int(journeys.vehicles.max(initial=1))):
        column = np.full(len(journeys), -1)
        mine = seat == vehicle
        column[owner[mine]] = np.flatnonzero(mine)
        stations.append(_texts(board.stations.name, _picked(board.origin[boarding], column)))
        departures.append(_texts(leaves, _picked(code, column)))
    end = _texts(board.stations.name, board.destination[journeys.last])
    places, times = _joined([*stations, end]), _joined(departures)
    history = _joined([places, times])
    name = _joined([places, _dates(days, board.departs_day), times])
    return _told_apart(name, history)


def _boarding(journeys: Journeys) -> tuple[IntArray, IntArray]:
    """Legs on which passengers sit down, and the journey of each, rising."""
    through = journeys.board.through
    boards = np.ones(len(journeys.leg), dtype=bool)
    boards[1:] = through[journeys.leg[:-1]] != journeys.leg[1:]
    boards[journeys.start[:-1]] = True
    owner = np.repeat(np.arange(len(journeys)), journeys.length)
    return journeys.leg[boards], owner[boards]


def _picked(values: IntArray, at: IntArray) -> IntArray:
    """Values at some positions, -1 where the position is."""
    return np.append(values, -1)[at]


def _texts(names: NameArray, code: IntArray) -> pa.Array:
    """Names by position, missing where that is -1."""
    return pa.array(names, type=pa.string()).take(pa.array(code.astype(np.int64), mask=code < 0))


def _joined(parts: list[pa.Array]) -> pa.Array:
    return pc.binary_join_element_wise(*parts, "-", null_handling="skip")


def _dates(days: IntArray, of_board: IntArray) -> pa.Array:
    year = np.ptp(of_board) >= DAYS_OF_YEAR if len(of_board) else False
    found, code = np.unique(days, return_inverse=True)
    form = "%Y%m%d" if year else "%m%d"
    names = pd.to_datetime(found, unit="D").strftime(form).to_numpy(dtype=object)
    return _texts(names, code)


def _told_apart(name: pa.Array, history: pa.Array) -> tuple[NameArray, NameArray]:
    """Number what is left of equal names, in the order in which they stand."""
    while True:
        again = _earlier_equals(name)
        if not again.any():
            return _objects(name), _objects(history)
        number = pa.array(again + 1, mask=again == 0).cast(pa.string())
        name, history = _joined([name, number]), _joined([history, number])


def _earlier_equals(name: pa.Array) -> IntArray:
    """(n,) how many equal names stand before each."""
    encoded = name.dictionary_encode()
    if len(encoded.dictionary) == len(name):
        return np.zeros(len(name), dtype=np.int64)
    code = encoded.indices.to_numpy()
    order = np.argsort(code, kind="stable")
    before = np.empty(len(name), dtype=np.int64)
    before[order] = np.arange(len(name)) - np.searchsorted(code[order], code[order])
    return before


def _objects(name: pa.Array) -> NameArray:
    return np.asarray(name.to_numpy(zero_copy_only=False), dtype=object)
