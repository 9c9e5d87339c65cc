"""The invented world of the demo carrier: islands, routes, timetable, fares and how people book.

The Vendamar Isles, their towns and the carrier Vendamar Isles Link exist nowhere, and every figure is
invented. Two hubs, Orvenholm in the west and Sallivane in the east, tie fifteen smaller islands together by small
aircraft, and by fast ferry where the crossing is short.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime, timedelta, timezone

ZONE = timezone(timedelta(hours=-2))
FIRST_DAY = datetime(2027, 3, 1, tzinfo=ZONE)
"""A Monday."""
N_DAYS = 7
AS_OF = datetime(2027, 2, 26, 2, 30, tzinfo=ZONE)
"""The night of the snapshot, three to ten days before the departures on sale."""

MINIMUM_CONNECTION = 30
LONGEST_CONNECTION = 240
LONGEST_WAIT = 210
"""Minutes by which a journey may take longer than the quickest of the day between the same ends."""
WIDEST_DETOUR = 1.6
"""Widest ratio of kilometres travelled to the great circle from end to end."""

STATION_COLUMNS = ("station", "name", "latitude", "longitude", "minimum_connection", "pull", "business")
"""`pull` is thousand people, visitors included; `business` the part of them who travel for work."""

STATIONS = (
    ("ORV", "Orvenholm", 47.62, -31.40, 35, 210, 0.60),
    ("SAL", "Sallivane", 46.95, -27.75, 30, 160, 0.55),
    ("BRO", "Brossevik", 48.71, -33.02, None, 64, 0.55),
    ("DUN", "Dunmarrec", 48.93, -30.94, None, 41, 0.45),
    ("FEN", "Fennigarth", 47.31, -31.95, None, 38, 0.40),
    ("ISK", "Iskavoe", 49.28, -31.66, None, 22, 0.50),
    ("PEL", "Pellnaze", 46.33, -33.41, None, 12, 0.20),
    ("QUE", "Quelmar", 47.05, -33.90, None, 30, 0.35),
    ("TIN", "Tindrath", 46.37, -32.08, None, 88, 0.60),
    ("ULL", "Ullsker", 47.98, -31.01, None, 16, 0.25),
    ("COR", "Corrivane", 48.12, -26.18, None, 52, 0.30),
    ("GRI", "Grisselby", 45.62, -28.61, None, 71, 0.55),
    ("HAL", "Hallorby", 46.72, -27.14, None, 33, 0.35),
    ("KES", "Kestervoe", 45.88, -25.92, None, 27, 0.45),
    ("MOR", "Morrinsay", 48.52, -27.43, None, 25, 0.40),
    ("WEX", "Wexaltre", 44.74, -26.85, None, 10, 0.15),
    ("ZEN", "Zennick", 46.87, -25.02, None, 24, 0.20),
)


@dataclass(frozen=True)
class Vehicle:
    """What runs on a route.

    Attributes
    ----------
    seats
        Seats authorised for sale.
    speed, added
        Speed on the way, km/h, and minutes added for leaving and arriving.
    fare_level
        Fares against those of an aircraft over the same distance.
    through
        Part of the passengers that connects.
    """

    seats: int
    speed: float
    added: int
    fare_level: float
    through: float


SMALL = Vehicle(34, 400, 20, 1.0, 0.72)
MIDDLE = Vehicle(50, 450, 20, 1.0, 0.68)
LARGE = Vehicle(72, 480, 22, 1.0, 0.60)
TRUNK = Vehicle(98, 520, 24, 1.0, 0.74)
FERRY = Vehicle(140, 62, 10, 0.42, 0.40)

BANKS = {"ORV": (490, 750, 1040, 1245), "SAL": (600, 870, 1150)}
"""Middle of the banks of each hub, minutes after midnight: arrivals come before it, departures after."""

ROUTES = {
    "BRO": ("ORV", LARGE, (0, 1, 2)),
    "DUN": ("ORV", MIDDLE, (0, 1, 2)),
    "FEN": ("ORV", FERRY, (0, 2)),
    "ISK": ("ORV", SMALL, (0, 2)),
    "PEL": ("ORV", SMALL, (1,)),
    "QUE": ("ORV", SMALL, (0, 1, 2)),
    "TIN": ("ORV", LARGE, (0, 1, 2, 3)),
    "ULL": ("ORV", FERRY, (1,)),
    "COR": ("SAL", MIDDLE, (0, 1, 2)),
    "GRI": ("SAL", LARGE, (0, 1, 2)),
    "HAL": ("SAL", FERRY, (0, 2)),
    "KES": ("SAL", SMALL, (0, 1, 2)),
    "MOR": ("SAL", SMALL, (0, 2)),
    "WEX": ("SAL", SMALL, (1,)),
    "ZEN": ("SAL", SMALL, (0, 2)),
}
"""Hub, vehicle and banks served, by smaller island."""

TRUNK_DEPARTURES = {"ORV": (410, 515, 775, 900, 1065, 1270), "SAL": (405, 625, 760, 895, 1020, 1175)}
"""Departures from each hub to the other, minutes after midnight."""

WEEKDAY_LEVEL = (1.10, 0.93, 0.95, 1.05, 1.24, 0.80, 1.08)
"""Demand by day of the week, Monday first."""
HOUR_LEVEL = {0: 1.06, 9: 0.98, 12: 0.90, 15: 1.10, 19: 0.88}
"""Demand by the hour from which the level holds."""

FARE_CLASSES = ("A", "B", "C", "D", "E", "F")
LADDER = (1.0, 0.79, 0.62, 0.47, 0.35, 0.25)
"""Fares of the classes against the highest."""
BUSINESS_MIX = (0.15, 0.19, 0.21, 0.20, 0.15, 0.10)
LEISURE_MIX = (0.02, 0.05, 0.12, 0.22, 0.28, 0.31)
"""Shares of the whole demand by class, for a market of work trips and for one of holidays."""

READING_DAYS = (120, 90, 60, 45, 30, 21, 14, 10, 7, 5, 3, 2, 1, 0)
CURVES = {"last_days": (4, 0.9), "late": (6, 1.0), "middle": (9, 1.1), "early": (14, 1.2), "very_early": (22, 1.3)}
"""Scale in days and shape of each booking curve; share arrived d days out = exp(-(d / scale) ** shape)."""
BUSINESS_CURVES = ("last_days", "late", "late", "middle", "early", "very_early")
LEISURE_CURVES = ("late", "late", "middle", "early", "early", "very_early")
"""Booking curve of each class, for the two kinds of market."""
