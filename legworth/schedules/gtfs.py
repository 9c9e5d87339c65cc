"""Public transport feeds in the open GTFS format, read into a timetable.

The GTFS Schedule Reference is published at https://gtfs.org/documentation/schedule/reference/.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from legworth.schedules.gtfs_calendar import service_begins, service_days
from legworth.schedules.gtfs_calls import TripLegs, trip_legs
from legworth.schedules.gtfs_runs import Runs, runs_of
from legworth.schedules.gtfs_stations import feed_stations
from legworth.schedules.gtfs_tables import GtfsTable, GtfsTables, read_tables
from legworth.schedules.gtfs_through import through_legs
from legworth.schedules.local_time import offsets_at
from legworth.schedules.operating_days import Window
from legworth.schedules.places import Places
from legworth.schedules.seats import ANY_EQUIPMENT, UNKNOWN
from legworth.schedules.timetable import Timetable, leg_names
from legworth.schedules.traffic import Traffic
from network import SettingError
from network.arrays import BoolArray, IntArray, NameArray
from network.faults import Faults
from network.model import ranges

__all__ = ["KINDS", "GtfsOptions", "kind_of", "read_gtfs"]

BASIC = {
    0: "tram",
    1: "metro",
    2: "rail",
    3: "bus",
    4: "ferry",
    5: "tram",
    6: "lift",
    7: "funicular",
    11: "bus",
    12: "rail",
}
EXTENDED = {
    1: "rail",
    2: "coach",
    4: "metro",
    7: "bus",
    8: "bus",
    9: "tram",
    10: "ferry",
    11: "air",
    12: "ferry",
    13: "lift",
    14: "funicular",
    15: "taxi",
}
"""Kinds by hundreds of the extended route types (from memory)."""

KINDS = tuple(dict.fromkeys([*BASIC.values(), *EXTENDED.values()]))


@dataclass(frozen=True)
class GtfsOptions:
    """What is taken from a feed: kinds of routes, of `KINDS`; all if empty.

    Raises
    ------
    SettingError
        If a kind is not one of them.
    """

    kinds: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        for kind in self.kinds:
            if kind not in KINDS:
                raise SettingError(f"{kind!r} is no kind of route; known are {', '.join(KINDS)}")


def kind_of(route_type: int) -> str:
    """Kind of leg of a GTFS route type, basic or extended; "other" if it is not known.

    Examples
    --------
    >>> kind_of(2), kind_of(109), kind_of(200), kind_of(1200), kind_of(1700)
    ('rail', 'rail', 'coach', 'ferry', 'other')
    """
    return BASIC.get(route_type) or EXTENDED.get(route_type // 100) or "other"


def read_gtfs(
    path: Path, window: Window, places: Places, seats: Mapping[str, int], options: GtfsOptions, faults: Faults
) -> Timetable | None:
    """Read a feed.

    Parameters
    ----------
    path
        A zip file or a folder.
    window
        Days of service wanted.
    places
        Known stations, which add to what the feed says of its own.
    seats
        Seats by ``trip_id``, ``route_id`` or ``route_type``, the first of them that the table knows.
    options
        What is taken.
    faults
        Receives everything that is wrong, by file, line and column.

    Returns
    -------
    Timetable or None
        None if anything is wrong.

    Raises
    ------
    SettingError
        If there are too many legs.
    """
    tables = read_tables(path, faults)
    if tables is None:
        return None
    _warn_of_agencies(tables["agency"], tables["routes"])
    stations = feed_stations(tables)
    trips, routes = tables["trips"], tables["routes"]
    route = trips.find("route_id", routes, "route_id")
    types = routes.numbers("route_type")
    kinds = np.array([*(kind_of(int(one)) for one in types), "other"], dtype=object)[route]
    wanted = np.isin(kinds.astype(str), list(options.kinds)) if options.kinds else np.ones(len(trips), dtype=bool)
    left_out: dict[str, int] = {}
    if not wanted.all():
        left_out["trips of other kinds"] = int((~wanted).sum())
    service, active = service_days(tables, trips, window)
    legs = trip_legs(tables, stations, wanted, left_out)
    runs = runs_of(tables, service, active, legs, window)
    capacity = _seats_of_trips(tables, route, types, seats, runs)
    known = stations.places.overlaid(places)
    _note_unknown(tables, stations.of_stop, known, places, legs)
    if faults.errors:
        return None
    timetable = _timetable(tables, known, stations.zone, legs, runs, capacity, kinds, window, left_out)
    return None if faults.errors else timetable


def _warn_of_agencies(agency: GtfsTable, routes: GtfsTable) -> None:
    """Warn of routes of carriers that agency.txt does not have; no time or seat depends on it."""
    at, names = routes.codes("agency_id")
    known = set(agency.texts("agency_id").tolist())
    unknown = np.array([*(name not in known for name in names), False])
    routes.note(
        np.flatnonzero(unknown[at]),
        "agency_id",
        lambda row: (
            f"{names[at[row]]!r} is not an agency_id of agency.txt; correct the name or add the agency. The route is "
            "read all the same"
        ),
        warning=True,
    )


def _timetable(
    tables: GtfsTables,
    places: Places,
    zone: str,
    legs: TripLegs,
    runs: Runs,
    capacity: IntArray,
    kinds: NameArray,
    window: Window,
    left_out: dict[str, int],
) -> Timetable:
    count = np.diff(legs.start)[runs.trip]
    run = np.repeat(np.arange(len(runs)), count)
    leg = ranges(legs.start[runs.trip], count)
    begins = (service_begins(runs.day, zone) + runs.shift)[run]
    departs, arrives = begins + legs.departs[leg], begins + legs.arrives[leg]
    at_zone, zones = places.zones
    name, recurring = leg_names(runs.stem, runs.of_stem[run], runs.day[run], legs.number[leg], with_year=window.long)
    origin, destination = legs.origin[leg], legs.destination[leg]
    return Timetable(
        places=places,
        name=name,
        recurring=recurring,
        origin=origin,
        destination=destination,
        departs=departs,
        arrives=arrives,
        departs_offset=offsets_at(departs, at_zone[origin], zones) // 60,
        arrives_offset=offsets_at(arrives, at_zone[destination], zones) // 60,
        capacity=capacity[runs.trip][run],
        kind=kinds[runs.trip][run],
        through=through_legs(tables, runs, run, (origin, destination), (departs, arrives)),
        traffic=Traffic(legs.board[leg], legs.alight[leg], np.full(len(leg), -1), Traffic.free(0).codes),
        left_out=left_out,
    )


def _seats_of_trips(
    tables: GtfsTables, route: IntArray, types: IntArray, seats: Mapping[str, int], runs: Runs
) -> IntArray:
    """Seats of every trip; notes routes of trips that run and have none."""
    routes = tables["routes"]
    names = routes.texts("route_id").tolist()
    default = seats.get(ANY_EQUIPMENT, UNKNOWN)
    by_route = [
        seats.get(name, seats.get(str(kind), default)) for name, kind in zip(names, types.tolist(), strict=True)
    ]
    found = np.array([*by_route, UNKNOWN], dtype=np.int64)[route]
    if seats:
        own = [seats.get(name, UNKNOWN) for name in tables["trips"].texts("trip_id").tolist()]
        found = np.where(np.array(own, dtype=np.int64) >= 0, own, found)
    trips = np.unique(runs.trip)
    missing = np.unique(route[trips[(found[trips] < 0) & (route[trips] >= 0)]])
    routes.note(
        missing,
        "route_id",
        lambda row: (
            f"nothing gives the seats of route {names[row]!r} (route_type {types[row]}); add it to a table of seats "
            "(--seats)"
        ),
    )
    return found


def _note_unknown(tables: GtfsTables, of_stop: IntArray, known: Places, places: Places, legs: TripLegs) -> None:
    """Note stations that legs use and a complete table of stations does not have."""
    if not places.complete:
        return
    used = np.unique(np.concatenate([legs.origin, legs.destination]))
    missing = used[places.locate(known.name[used]) < 0]
    station: BoolArray = np.zeros(len(known), dtype=bool)
    station[missing] = True
    stops = tables["stops"]
    first = pd.Series(of_stop).drop_duplicates()
    rows = first.index.to_numpy()[station[first.to_numpy()]]
    stops.note(
        rows,
        "stop_id",
        lambda row: f"{known.name[of_stop[row]]!r} is not in the table of stations; add it or correct the name",
    )
