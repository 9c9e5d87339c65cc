"""A real day at a real hub: the flights of 10 January 2001 at Cincinnati (CVG), as a network folder.

Real, from ``data/`` (source in ``data/README.md``): which flights there were, when they left, how many miles
they flew, and where the airports are. Everything else is assumed, by these rules:

- *Offset from UTC*, fixed by bands of longitude: east of 86.5 W -05:00, to 102 W -06:00, to 114 W -07:00,
  farther west -08:00. The bands give every one of the 58 airports its standard time (from memory); no
  summer time in January.
- *Arrival*: departure + miles at 430 knots + 30 minutes, rounded to the minute, in the offset of the
  destination; so a late flight arrives on the next date.
- *Connections*: at the hub, 40 to 180 minutes, no return to the origin, and great circles over the
  hub at most `WIDEST_DETOUR` times the great circle from end to end.
- *Seats*: drawn per flight from the vehicles of its distance (`SEATS`); nothing is sold yet.
- *Fares*, US dollars, net: highest 55 + 1.9 * miles^0.75 per pair of airports, varied by 8 % and the same in
  both directions, less by class (`LADDER`); a through fare is at most about 92 % of the sum of its local ones.
- *Demand*: each flight is asked for by `LOAD` times its seats on average, varied by flight; about half of it
  connects, spread by the square root of the traffic of both ends, and less for long waits and detours.
  Deviations lie above Poisson by a forecast spread of 30 to 90 %, less for large flows.
"""

from __future__ import annotations

from datetime import date
from pathlib import Path

import numpy as np
import pandas as pd

from tools.invented_traffic import (
    FloatArray,
    IntArray,
    great_circle,
    journeys,
    local_and_through,
    over_dispersed,
    write_folder,
)

__all__ = ["HUB", "write_hub_day"]

DATA = Path(__file__).with_name("data")
DAY = date(2001, 1, 10)
HUB = "CVG"

KNOTS = 430
GROUND_MINUTES = 30
STATUTE_PER_NAUTICAL_MILE = 1.852 / 1.609344
"""Exact by definition of both miles."""
BAND_EDGES = (-114.0, -102.0, -86.5)
"""Degrees of longitude; west of the first the offset is -8 hours, and one hour more past each edge."""

SHORTEST_CONNECTION, LONGEST_CONNECTION = 40, 180
WIDEST_DETOUR = 1.5

SEATS = {0: (50, 50, 70), 400: (50, 110, 142), 800: (110, 142, 180), 1400: (142, 180)}
"""Seats that may serve a flight, by the miles from which they hold."""
FARE_CLASSES = ("A", "B", "C", "D", "E", "F")
LADDER = np.array([1.0, 0.80, 0.62, 0.47, 0.35, 0.25])
CLASS_MIX = np.array([0.08, 0.11, 0.15, 0.19, 0.23, 0.24])
LOAD = 1.1

SETTINGS = f"""name = "{HUB}, {DAY.day} {DAY:%B %Y}: real flights, assumed seats, fares and demand"
currency = "USD"
as_of = "2000-12-27T02:00-05:00"
fare_classes = [{", ".join(f'"{name}"' for name in FARE_CLASSES)}]

[defaults]
minimum_connection = {SHORTEST_CONNECTION}
demand_family = "auto"
"""


def write_hub_day(folder: Path, seed: int = 20010110) -> None:
    """Write the hub day as a network folder of CSV tables.

    Parameters
    ----------
    folder
        Made if missing.
    seed
        Seed of the assumed seats, fares and demand; the flights do not depend on it.
    """
    rng = np.random.default_rng(seed)
    airports = pd.read_csv(DATA / "cvg_airports.csv").sort_values("airport", ignore_index=True)
    flights = _flights(pd.read_csv(DATA / "cvg_flights_2001-01-10.csv"), airports)
    itineraries, paths = _itineraries(flights, airports)
    seats = _seats(flights["miles"].to_numpy(), rng)
    fares = _fares(itineraries, paths, rng)
    mean, deviation = _demand(itineraries, paths, flights, seats, rng)
    product = {
        "itinerary": np.repeat(itineraries["itinerary"].to_numpy(), len(FARE_CLASSES)),
        "fare_class": np.tile(np.array(FARE_CLASSES), len(itineraries)),
    }
    stations = airports.rename(columns={"airport": "station", "city": "name"})
    stations["minimum_connection"] = np.where(stations["station"] == HUB, str(SHORTEST_CONNECTION), "")
    tables = {
        "stations": stations,
        "legs": flights[["leg", "origin", "destination", "departs", "arrives"]].assign(capacity=seats, sold=0),
        "itineraries": itineraries[["itinerary", "legs"]],
        "fares": pd.DataFrame(product | {"fare": fares.ravel().astype(np.int64)}),
        "demand": pd.DataFrame(product | {"mean": mean.ravel(), "deviation": deviation.ravel()}),
    }
    write_folder(folder, SETTINGS, tables)


def _flights(reported: pd.DataFrame, airports: pd.DataFrame) -> pd.DataFrame:
    """Give the flights names, and instants with assumed arrivals and offsets; ``start`` and ``end`` are UTC minutes."""
    flights = reported.rename(columns={"departs": "clock"})
    offset = pd.Series(
        60 * (np.searchsorted(BAND_EDGES, airports["longitude"], side="right") - 8), index=airports["airport"]
    )
    clock = flights["clock"].str.split(":", expand=True).astype(int)
    nautical = flights["miles"] / STATUTE_PER_NAUTICAL_MILE
    minutes = (nautical / KNOTS * 60 + GROUND_MINUTES).round().astype(int)
    from_utc, to_utc = (offset[flights[end]].to_numpy() for end in ("origin", "destination"))
    flights["start"] = clock[0] * 60 + clock[1] - from_utc
    flights["end"] = flights["start"] + minutes
    flights["departs"] = _instants(flights["start"].to_numpy(), from_utc)
    flights["arrives"] = _instants(flights["end"].to_numpy(), to_utc)
    flights["leg"] = flights["origin"] + "-" + flights["destination"] + "-" + flights["clock"].str.replace(":", "")
    twin = flights.groupby("leg").cumcount()
    flights["leg"] += np.where(twin > 0, "-" + (twin + 1).astype(str), "")
    return flights.sort_values(["start", "leg"], ignore_index=True)


def _instants(utc: IntArray, offset: IntArray) -> list[str]:
    """Write minutes after midnight UTC as ISO 8601 in the given offsets, minutes west negative."""
    local = np.datetime64(DAY, "m") + (utc + offset).astype("timedelta64[m]")
    return [f"{instant}{hours:+03d}:00" for instant, hours in zip(local, offset // 60, strict=True)]


def _itineraries(flights: pd.DataFrame, airports: pd.DataFrame) -> tuple[pd.DataFrame, IntArray]:
    """Return each flight alone and the connections over the hub, and their paths, (I, 3) padded with -1."""
    position = pd.Series(np.arange(len(airports)), index=airports["airport"])
    o, d = position[flights["origin"]].to_numpy(), position[flights["destination"]].to_numpy()
    start, end = flights["start"].to_numpy(), flights["end"].to_numpy()
    minimum = np.where(airports["airport"] == HUB, SHORTEST_CONNECTION, LONGEST_CONNECTION + 1)
    paths = journeys(o, d, start, end, minimum, maximum=LONGEST_CONNECTION)
    through = paths[:, 1] >= 0
    first, last = paths[:, 0], np.where(through, paths[:, 1], paths[:, 0])
    table = pd.DataFrame({"o": o[first], "d": d[last], "through": through})
    at = airports[["latitude", "longitude"]].to_numpy()
    table["direct"] = great_circle(*at[table["o"]].T, *at[table["d"]].T)
    hub = at[position[HUB]]
    table["flown"] = great_circle(*at[table["o"]].T, *hub) + great_circle(*hub, *at[table["d"]].T)
    table["wait"] = np.where(through, start[last] - end[first], 0)
    leg = flights["leg"].to_numpy()
    table["itinerary"] = np.where(through, leg[first] + "_" + leg[last], leg[first])
    table["legs"] = np.where(through, leg[first] + " " + leg[last], leg[first])
    keep = (~table["through"] | (table["flown"] <= WIDEST_DETOUR * table["direct"])).to_numpy()
    return table[keep].reset_index(drop=True), paths[keep]


def _seats(miles: IntArray, rng: np.random.Generator) -> IntArray:
    """Draw assumed seats for every flight."""
    band = np.searchsorted(list(SEATS), miles, side="right") - 1
    choices = list(SEATS.values())
    return np.array([rng.choice(choices[k]) for k in band])


def _fares(itineraries: pd.DataFrame, paths: IntArray, rng: np.random.Generator) -> FloatArray:
    """Return assumed fares, (I, C), whole dollars, one ladder per pair of airports."""
    ends = np.sort(itineraries[["o", "d"]].to_numpy(), axis=1)
    _, first, market = np.unique(ends, axis=0, return_index=True, return_inverse=True)
    miles = itineraries["direct"].to_numpy()[first] / 1.609344
    top = ((55 + 1.9 * miles**0.75) * rng.lognormal(0.0, 0.08, len(first)))[market.ravel()]
    through = itineraries["through"].to_numpy()
    local = np.where(paths >= 0, top[paths], 0.0).sum(axis=1)
    top = np.where(through, np.minimum(top, 0.92 * local), top)
    fares: FloatArray = np.round(top[:, None] * LADDER)
    return fares


def _demand(
    itineraries: pd.DataFrame, paths: IntArray, flights: pd.DataFrame, seats: IntArray, rng: np.random.Generator
) -> tuple[FloatArray, FloatArray]:
    """Return assumed means and deviations of demand, both (I, C)."""
    traffic = np.bincount(itineraries["o"][: len(flights)]) + np.bincount(itineraries["d"][: len(flights)])
    detour = itineraries["flown"].to_numpy() / itineraries["direct"].to_numpy() - 1
    pull = np.sqrt(traffic[itineraries["o"]] * traffic[itineraries["d"]])
    prior = pull * np.exp(-detour - itineraries["wait"].to_numpy() / 120)
    target: FloatArray = seats.astype(np.float64) * np.clip(LOAD * rng.lognormal(-0.02, 0.22, len(seats)), 0.6, 1.7)
    share: FloatArray = np.clip(rng.normal(0.5, 0.1, len(seats)), 0.2, 0.8)
    total = local_and_through(paths, prior, target, share)
    mix = CLASS_MIX * rng.gamma(8.0, size=(len(total), len(CLASS_MIX)))
    mean = np.maximum((total[:, None] * mix / mix.sum(axis=1, keepdims=True)).round(3), 0.001)
    spread = rng.uniform(0.3, 0.9, mean.shape) * np.maximum(mean, 1.0) ** -0.15
    return mean, over_dispersed(mean, spread).round(3)
