"""Tables that are sound by themselves but do not fit each other, and folders with faults of many kinds."""

from __future__ import annotations

from tests.folders import Folder
from tests.legworth.bad_input.kinds import Cases, in_cells

__all__ = ["RELATIONS", "SEVERAL"]

RELATIONS: Cases = {
    "unknown stations": in_cells(("legs", 5, "origin", "ÖST"), ("legs", 6, "destination", "hub")),
    "unknown legs": (
        in_cells(("itineraries", 7, "legs", "L9"), ("itineraries", 5, "legs", "L1 l2 L8"))[0],
        [("itineraries.csv", 5, "legs"), ("itineraries.csv", 5, "legs"), ("itineraries.csv", 7, "legs")],
    ),
    "unknown itineraries": (
        lambda f: f.add("fares.csv", "SUD-NOR,A,99").add("demand.csv", "SUD-NOR,A,1,1,"),
        [("fares.csv", 19, "itinerary"), ("demand.csv", 19, "itinerary")],
    ),
    "unknown curve": in_cells(("demand", 3, "curve", "latest")),
    "curves named but no table": (
        lambda f: f.drop("booking_curves.csv").mutate("demand.csv", lambda t: t.replace(",early", ",")),
        [("demand.csv", line, "curve") for line in (2, 3, 5, 6, 8, 10, 11, 13, 15)],
    ),
    "a leg twice running": in_cells(("itineraries", 2, "legs", "L1 L1")),
    "a leg again at the end": in_cells(("itineraries", 5, "legs", "L1 L2 L5 L2")),
    "legs that do not meet": in_cells(("itineraries", 5, "legs", "L2 L1")),
    "a leg that ends where it begins": in_cells(("legs", 6, "destination", "SUD")),
    "connection too short by a second": (
        in_cells(("legs", 4, "departs", "2030-03-01T08:04:59+01:00"))[0],
        [("itineraries.csv", 6, "legs")],
    ),
    "connection before the arrival": (
        in_cells(("legs", 4, "departs", "2030-03-01T07:00+01:00"))[0],
        [("itineraries.csv", 6, "legs")],
    ),
    "connection shorter than the default": (
        lambda f: f.cell("stations.csv", 2, "minimum_connection", "").replace("network.toml", "= 40", "= 61"),
        [("itineraries.csv", 5, "legs"), ("itineraries.csv", 6, "legs")],
    ),
    "arrives before it departs": in_cells(
        ("legs", 5, "arrives", "2030-03-02T12:30+03:00"), ("legs", 6, "arrives", "2030-03-03T18:00+01:00")
    ),
    "falling curve": in_cells(("booking_curves", 4, "share", "0.4")),
    "curve that does not end at 1": in_cells(("booking_curves", 5, "share", "0.95")),
    "curve that does not end at day 0": (
        in_cells(("booking_curves", 8, "days_before", "1"))[0],
        [("booking_curves.csv", 8, "share")],
    ),
    "demand without fare": (
        lambda f: f.line("fares.csv", 18, None).cell("demand.csv", 9, "fare_class", "C"),
        [("demand.csv", 9, "fare_class"), ("demand.csv", 18, "fare_class")],
    ),
    "classes that the settings do not name": (
        lambda f: f.replace("network.toml", '["A", "B", "C"]', '["A"]'),
        [("fares.csv", 3, "fare_class"), ("fares.csv", 4, "fare_class")],
    ),
}


def without_stations(folder: Folder) -> Folder:
    folder.header("stations.csv", "station", "code").cell("itineraries.csv", 7, "legs", "L7")
    return folder.cell("legs.csv", 6, "arrives", "2030-03-03T17:30+01:00").line("fares.csv", 18, None)


def without_itineraries(folder: Folder) -> Folder:
    folder.drop("itineraries.csv").cell("legs.csv", 5, "origin", "WEST").line("fares.csv", 18, None)
    return folder.cell("demand.csv", 2, "curve", "never")


def without_fares(folder: Folder) -> Folder:
    folder.put("fares.csv", "").cell("demand.csv", 2, "curve", "never")
    return folder.cell("demand.csv", 3, "itinerary", "X-Y")


SEVERAL: Cases = {
    "one in every table": in_cells(
        ("stations", 5, "latitude", "north"),
        ("legs", 3, "sold", "x"),
        ("itineraries", 7, "legs", "L7"),
        ("fares", 9, "fare", "-90"),
        ("demand", 9, "curve", "never"),
        ("booking_curves", 7, "share", "2"),
    ),
    "no stations, and faults elsewhere": (
        without_stations,
        [
            ("stations.csv", 1, "code"),
            ("stations.csv", 1, "station"),
            ("itineraries.csv", 7, "legs"),
            ("legs.csv", 6, "arrives"),
            ("demand.csv", 18, "fare_class"),
        ],
    ),
    "no itineraries, and faults elsewhere": (
        without_itineraries,
        [
            ("itineraries.csv", 0, ""),
            ("legs.csv", 5, "origin"),
            ("demand.csv", 18, "fare_class"),
            ("demand.csv", 2, "curve"),
        ],
    ),
    "no legs, and faults elsewhere": (
        lambda f: f.put("legs.csv", "").cell("fares.csv", 2, "itinerary", "X-Y"),
        [("legs.csv", 0, ""), ("fares.csv", 2, "itinerary"), ("demand.csv", 2, "fare_class")],
    ),
    "no fares, and faults in demand": (
        without_fares,
        [("fares.csv", 0, ""), ("demand.csv", 2, "curve"), ("demand.csv", 3, "itinerary")],
    ),
    "no settings, and faults elsewhere": (
        lambda f: f.drop("network.toml").cell("legs.csv", 4, "departs", "2030-03-01T08:04+01:00"),
        [("network.toml", 0, ""), ("itineraries.csv", 6, "legs")],
    ),
    "several in one row": (
        lambda f: f.line("legs.csv", 4, "L3,NOWHERE,OST,2030-03-01T08:15,2030-02-30T10:45+02:00,-1,many"),
        [("legs.csv", 4, name) for name in ("origin", "departs", "arrives", "capacity", "sold")],
    ),
    "nothing but an empty folder": (
        lambda f: f.drop(*f.files),
        [
            ("network.toml", 0, ""),
            *((f"{table}.csv", 0, "") for table in ("stations", "legs", "itineraries", "fares", "demand")),
        ],
    ),
}
