"""A real day at a real hub: the flights of 10 January 2001 at Cincinnati (CVG), as a network folder.

Real, from ``data/`` (source in ``data/README.md``): which flights there were, when they left, how many miles
they flew, and where the airports are. Everything else is assumed, by these rules:

- *Offsets from UTC and arrivals*: by the rules of `tools.reported_day`.
- *Connections*: at the hub, 40 to 180 minutes, no return to the origin, and great circles over the
  hub at most `WIDEST_DETOUR` times the great circle from end to end.
- *Seats, fares in US dollars, and demand*: by the rules of `tools.assumed_market`.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

from network.great_circle import great_circle
from tools.assumed_market import FARE_CLASSES, assumed_demand, assumed_fares, assumed_seats, product_columns
from tools.invented_traffic import IntArray, journeys, write_folder
from tools.reported_day import DAY, read_day

__all__ = ["FARE_CLASSES", "HUB", "write_hub_day"]

DATA = Path(__file__).with_name("data")
HUB = "CVG"

SHORTEST_CONNECTION, LONGEST_CONNECTION = 40, 180
WIDEST_DETOUR = 1.5

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
    flights, airports = read_day(DATA / "cvg_flights_2001-01-10.csv", DATA / "cvg_airports.csv")
    itineraries, paths = _itineraries(flights, airports)
    seats = assumed_seats(flights["miles"].to_numpy(), rng)
    fares = assumed_fares(itineraries, paths, rng)
    mean, deviation = assumed_demand(itineraries, paths, seats, rng)
    product = product_columns(itineraries["itinerary"].to_numpy())
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
