"""Connections as a table, and the city pairs that a folder already sells."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

from legworth.schedules.connections import Connections
from network import Legs, Stations, input_schemas
from network.arrays import IntArray
from network.faults import Faults
from network.reading import TableData, read_table
from network.routes import positions

__all__ = ["itinerary_table", "wanted_pairs"]


def itinerary_table(connections: Connections, legs: Legs) -> pd.DataFrame:
    """Return ``itineraries.csv``: ``itinerary``, ``legs`` and ``history_name`` of every connection."""
    name = legs.name[connections.path_leg]
    start, length = connections.path_start[:-1], np.diff(connections.path_start)
    text = name[start]
    for place in range(1, int(length.max(initial=1))):
        more = np.flatnonzero(length > place)
        text[more] += " " + name[start[more] + place]
    return pd.DataFrame({"itinerary": connections.itinerary, "legs": text, "history_name": connections.history_name})


def wanted_pairs(folder: Path, stations: Stations, faults: Faults) -> IntArray | None:
    """Find between which stations a network folder sells or expects anybody.

    Looked up before itineraries and legs are replaced: the ends of those itineraries, as the folder's present tables
    give them, that have a fare or demand.

    Parameters
    ----------
    folder
        A network folder; tables may be missing.
    stations
        The stations of which positions are wanted.
    faults
        Receives the faults of the tables looked at.

    Returns
    -------
    ndarray or None
        (p, 2) positions of the stations of departure and destination; None without itineraries and legs, or without
        fares and demand, or where one of them cannot be read: nothing then limits the city pairs.
    """
    tables = {
        name: read_table(folder, input_schemas()[name], faults)
        for name in ("fares", "demand", "itineraries", "legs")
        if any((folder / f"{name}.{ending}").exists() for ending in ("csv", "parquet"))
    }
    sold = [table for name in ("fares", "demand") if (table := tables.get(name))]
    itineraries, legs = tables.get("itineraries"), tables.get("legs")
    if not (sold and itineraries and legs):
        return None
    named = set().union(*(table.frame["itinerary"].dropna().unique() for table in sold))
    rows = itineraries.frame[itineraries.frame["itinerary"].isin(named)]
    split = rows["legs"].astype("str").str.split()
    ends = [
        _of_legs(legs, split.str[which], column, stations) for which, column in ((0, "origin"), (-1, "destination"))
    ]
    pairs = np.column_stack(ends)
    return np.unique(pairs[np.all(pairs >= 0, axis=1)], axis=0)


def _of_legs(legs: TableData, names: pd.Series, column: str, stations: Stations) -> IntArray:
    """Position of the station at one end of some legs, given by name; -1 where leg or station is not known."""
    row, _ = positions(names.astype("category"), legs.frame["leg"].to_numpy(dtype=object))
    station, _ = positions(legs.frame[column], stations.name)
    return np.append(station, -1)[row]
