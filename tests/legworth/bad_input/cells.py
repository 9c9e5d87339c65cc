"""Values that break their type, a limit or the key of their table."""

from __future__ import annotations

from tests.folders import Folder
from tests.legworth.bad_input.kinds import Cases, in_cells

__all__ = ["CELLS"]


def leg_twice(folder: Folder) -> Folder:
    """Put L1 in the place of L5, and take out what was sold on L5."""
    for file, word in (("itineraries.csv", "SUD-HUB"), ("fares.csv", "SUD-HUB"), ("demand.csv", "SUD-HUB")):
        folder.mutate(file, lambda text, word=word: "".join(x for x in text.splitlines(True) if word not in x))
    return folder.line("legs.csv", 6, folder.text("legs.csv").splitlines()[1])


CELLS: Cases = {
    "stations: duplicate key": (lambda f: f.add("stations.csv", "HUB,Again,1,1,"), [("stations.csv", 6, "station")]),
    "legs: duplicate key": (leg_twice, [("legs.csv", 6, "leg")]),
    "itineraries: duplicate key": (
        lambda f: f.add("itineraries.csv", "NOR-HUB,L1"),
        [("itineraries.csv", 9, "itinerary")],
    ),
    "fares: duplicate key": (
        lambda f: f.add("fares.csv", "HUB-OST,B,95"),
        [("fares.csv", 19, "itinerary and fare_class")],
    ),
    "demand: duplicate key, three times": (
        lambda f: f.add("demand.csv", *["HUB-OST,B,1,1,"] * 3),
        [("demand.csv", line, "itinerary and fare_class") for line in (19, 20, 21)],
    ),
    "booking curves: duplicate key": (
        lambda f: f.add("booking_curves.csv", "late,7.0,0.25"),
        [("booking_curves.csv", 9, "curve and days_before")],
    ),
    "NaN in words": in_cells(("fares", 5, "fare", "NaN"), ("stations", 3, "minimum_connection", "nan")),
    "words for nothing": in_cells(
        ("demand", 5, "mean", "NULL"), ("demand", 6, "mean", "None"), ("demand", 7, "mean", "-")
    ),
    "infinities": in_cells(
        ("fares", 5, "fare", "inf"), ("demand", 2, "mean", "-Infinity"), ("demand", 3, "mean", "1e999")
    ),
    "an infinity that overflows": in_cells(("fares", 5, "fare", "1e400")),
    "negative figures": in_cells(
        ("fares", 2, "fare", "-120"),
        ("demand", 2, "mean", "-1"),
        ("demand", 3, "deviation", "-0.5"),
        ("legs", 2, "capacity", "-24"),
        ("legs", 3, "sold", "-1"),
        ("booking_curves", 2, "days_before", "-60"),
        ("booking_curves", 6, "share", "-0.1"),
        ("stations", 4, "minimum_connection", "-20"),
    ),
    "figures beyond their limits": in_cells(
        ("fares", 2, "fare", "1e10"),
        ("legs", 2, "capacity", "100001"),
        ("stations", 2, "latitude", "90.5"),
        ("stations", 4, "longitude", "-181"),
        ("stations", 5, "minimum_connection", "2881"),
        ("demand", 2, "mean", "1000001"),
    ),
    "share above 1": in_cells(("booking_curves", 4, "share", "90")),
    "a whole number beyond every machine": in_cells(("legs", 2, "capacity", "9" * 40)),
    "text in a number": in_cells(
        ("fares", 4, "fare", "forty"),
        ("fares", 5, "fare", "110 EUR"),
        ("demand", 4, "mean", "1_000"),
        ("demand", 5, "mean", "２"),  # noqa: RUF001 - a digit of full width
        ("legs", 2, "sold", "twelve"),
    ),
    "decimal and thousands commas": in_cells(("fares", 4, "fare", "45,5"), ("fares", 5, "fare", "1,100.00")),
    "hexadecimal figures": in_cells(("legs", 2, "capacity", "0x20"), ("fares", 2, "fare", "0X78")),
    "fraction in a whole number": in_cells(("legs", 2, "capacity", "24.5"), ("legs", 3, "sold", "1e-1")),
    "missing values": in_cells(
        ("legs", 2, "capacity", ""),
        ("legs", 3, "arrives", ""),
        ("fares", 2, "fare", ""),
        ("demand", 2, "deviation", ""),
        ("booking_curves", 3, "share", ""),
        ("booking_curves", 8, "days_before", ""),
        ("itineraries", 8, "legs", ""),
    ),
    "missing names": in_cells(
        ("legs", 2, "origin", ""),
        ("fares", 8, "fare_class", ""),
        ("demand", 8, "fare_class", ""),
        ("booking_curves", 4, "curve", ""),
    ),
    "a missing station, and the legs that need it": (
        lambda f: f.cell("stations.csv", 5, "station", ""),
        [("stations.csv", 5, "station"), ("legs.csv", 4, "destination"), ("legs.csv", 5, "origin")],
    ),
    "a row of nothing but commas": (
        lambda f: f.add("fares.csv", ",,"),
        [("fares.csv", 19, name) for name in ("itinerary", "fare_class", "fare")],
    ),
    "names with spaces": (
        lambda f: f.cell("stations.csv", 5, "station", "OST ").mutate("legs.csv", lambda t: t.replace("OST", "OST ")),
        [("stations.csv", 5, "station")],
    ),
    "legs separated by other than one space": in_cells(
        ("itineraries", 5, "legs", "L1  L2"), ("itineraries", 6, "legs", " L1 L3")
    ),
    "dates without offset": in_cells(
        ("legs", 2, "departs", "2030-03-01T06:00"), ("legs", 5, "arrives", "2030-03-02 14:30:00")
    ),
    "impossible dates": in_cells(
        ("legs", 2, "departs", "2030-02-30T06:00+01:00"),
        ("legs", 3, "departs", "2030-03-01T24:01+01:00"),
        ("legs", 4, "departs", "2029-02-29T08:15+01:00"),
        ("legs", 5, "departs", "2030-03-02T12:00+25:00"),
        ("legs", 6, "departs", "2030-13-03T18:00+01:00"),
        ("legs", 6, "arrives", "2030-03-03T19:30:61+01:00"),
    ),
    "dates in other forms": in_cells(
        ("legs", 2, "departs", "01/03/2030 06:00 +01:00"),
        ("legs", 3, "departs", "2030-03-01"),
        ("legs", 4, "departs", "1898580000"),
        ("legs", 5, "departs", "tomorrow"),
    ),
}
