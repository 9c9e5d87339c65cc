"""Stations of a GTFS feed: parent stations where stops have one, their zones and transfer times."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from legworth.schedules.gtfs_tables import GtfsTable, GtfsTables
from legworth.schedules.places import Places
from network.arrays import IntArray, NameArray
from network.time_zones import zone_named

__all__ = ["FeedStations", "feed_stations"]

STATION = 1
NEEDS_TIME = 2
"""Transfer type of transfers that need a time."""


@dataclass(frozen=True, eq=False)
class FeedStations:
    """Stations of the feed, the station of every row of stops.txt, and the zone of all times."""

    places: Places
    of_stop: IntArray
    zone: str


def feed_stations(tables: GtfsTables) -> FeedStations:
    """Make stations of stops.

    A stop with a parent station stands for it; a boarding area for the parent of its platform. White space in names
    becomes an underscore. Transfers within a station that need a time (transfers.txt) give its connection time: the
    longest of them.
    """
    stops = tables["stops"]
    zone = _agency_zone(tables["agency"])
    root = _roots(stops)
    stations, of_stop = np.unique(root, return_inverse=True)
    names = np.array(["_".join(name.split()) for name in stops.texts("stop_id")[stations].tolist()], dtype=object)
    twice = pd.Series(names, dtype=object).duplicated().to_numpy()
    stops.note(
        stations[twice],
        "stop_id",
        lambda row: "differs from another stop in white space alone; rename one of the two",
    )
    zones = stops.texts("stop_timezone")
    unknown = {name for name in set(zones.tolist()) - {""} if zone_named(name) is None}
    stops.note(
        np.flatnonzero(np.isin(zones.astype(str), list(unknown))),
        "stop_timezone",
        lambda row: f"{zones[row]!r} is no time zone of the IANA database; write one like Europe/Berlin",
    )
    own = zones[stations]
    places = Places(
        name=names,
        label=stops.texts("stop_name")[stations],
        latitude=stops.figures("stop_lat")[stations],
        longitude=stops.figures("stop_lon")[stations],
        minimum_connection=_connection_times(tables, root, stations),
        timezone=np.where((own == "") | np.isin(own.astype(str), list(unknown)), zone, own),
    )
    return FeedStations(places, of_stop, zone)


def _agency_zone(agency: GtfsTable) -> str:
    """Zone of all agencies; notes zones that are not known or not the same, and then gives UTC."""
    zones: NameArray = agency.texts("agency_timezone")
    rows = np.flatnonzero([zone_named(name) is None for name in zones.tolist()])
    agency.note(
        rows,
        "agency_timezone",
        lambda row: f"{zones[row]!r} is no time zone of the IANA database; write one like Europe/Berlin",
    )
    other = np.flatnonzero(zones != zones[0])
    agency.note(
        other,
        "agency_timezone",
        lambda row: (
            f"{zones[row]!r} is not the {zones[0]!r} of the first agency; all agencies of a feed share one zone"
        ),
    )
    return "UTC" if zone_named(str(zones[0])) is None else str(zones[0])


def _roots(stops: GtfsTable) -> IntArray:
    """Row of the station of every row of stops.txt."""
    parent = stops.find("parent_station", stops, "stop_id")
    root = np.arange(len(stops))
    for _ in range(3):
        above = parent[root]
        root = np.where(above >= 0, above, root)
    circle = parent[root] >= 0
    stops.note(
        np.flatnonzero(circle), "parent_station", lambda row: "leads back to itself or too far up; name the station"
    )
    kinds = stops.numbers("location_type")
    odd = (parent >= 0) & ~circle & (kinds == STATION)
    stops.note(
        np.flatnonzero(odd), "parent_station", lambda row: "a station (location_type 1) has no parent; leave it blank"
    )
    return root


def _connection_times(tables: GtfsTables, root: IntArray, stations: IntArray) -> np.ndarray:
    minutes = np.full(len(stations), np.nan)
    transfers = tables.get("transfers")
    if transfers is None:
        return minutes
    ends = [transfers.find(column, tables["stops"], "stop_id") for column in ("from_stop_id", "to_stop_id")]
    seconds = transfers.numbers("min_transfer_time", -1)
    known = (ends[0] >= 0) & (ends[1] >= 0) & (transfers.numbers("transfer_type") == NEEDS_TIME) & (seconds >= 0)
    one, other = (root[end[known]] for end in ends)
    within = one == other
    at = np.searchsorted(stations, one[within])
    np.fmax.at(minutes, at, np.ceil(seconds[known][within] / 60))
    return minutes
