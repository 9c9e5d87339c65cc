"""The timetable of the demo carrier: a week of legs, and the journeys that can be sold on them."""

from __future__ import annotations

from datetime import timedelta

import numpy as np
import pandas as pd

from tools import demo_scenario as world
from tools.invented_traffic import IntArray, great_circle, journeys

__all__ = ["make_itineraries", "make_legs"]


def _pattern(rng: np.random.Generator) -> list[tuple[int, str, str, int, bool, world.Vehicle, bool, bool]]:
    """Return one day's timetable.

    Each row: number, origin, destination, minute, whether that minute is the arrival, vehicle, whether
    it is left out on Sunday, whether on Saturday.
    """
    rows = []
    for hub, other in (("ORV", "SAL"), ("SAL", "ORV")):
        departures = world.TRUNK_DEPARTURES[hub]
        for k, minute in enumerate(departures):
            number = 10 + 2 * k + (hub == "SAL")
            rows.append((number, hub, other, minute, False, world.TRUNK, k == 0, k == len(departures) - 1))
    for k, (spoke, (hub, vehicle, banks)) in enumerate(world.ROUTES.items()):
        for bank in banks:
            number = 100 + 20 * k + 2 * bank
            early = bank == 0 and vehicle in (world.SMALL, world.FERRY)
            late = len(banks) > 1 and bank == banks[-1]
            before, after = (
                world.BANKS[hub][bank] - rng.integers(4, 9) * 5,
                world.BANKS[hub][bank] + rng.integers(3, 8) * 5,
            )
            rows.append((number, spoke, hub, int(before), True, vehicle, early, late))
            rows.append((number + 1, hub, spoke, int(after), False, vehicle, early, late))
    return rows


def make_legs(stations: pd.DataFrame, rng: np.random.Generator) -> pd.DataFrame:
    """Return the legs of the week by departure; ``start`` and ``end`` are minutes after the first midnight."""
    columns = [
        "number",
        "origin",
        "destination",
        "minute",
        "is_arrival",
        "vehicle",
        "no_sunday",
        "no_saturday",
    ]
    pattern = pd.DataFrame(_pattern(rng), columns=columns)
    at = stations.set_index("station")
    o, d = at.loc[pattern["origin"]], at.loc[pattern["destination"]]
    pattern["km"] = great_circle(
        o["latitude"].to_numpy(),
        o["longitude"].to_numpy(),
        d["latitude"].to_numpy(),
        d["longitude"].to_numpy(),
    )
    for name in ("seats", "speed", "added", "fare_level", "through"):
        pattern[name] = [getattr(vehicle, name) for vehicle in pattern["vehicle"]]
    minutes = 5 * (pattern["km"] / pattern["speed"] * 12 + pattern["added"] / 5).round().astype(int)
    pattern["start"] = pattern["minute"] - minutes.where(pattern["is_arrival"], 0)
    pattern["end"] = pattern["start"] + minutes
    legs = pd.concat([pattern.assign(day=day) for day in range(world.N_DAYS)], ignore_index=True)
    legs = legs[~((legs["day"] == 5) & legs["no_saturday"]) & ~((legs["day"] == 6) & legs["no_sunday"])]
    legs[["start", "end"]] += legs[["day"]].to_numpy() * 1440
    legs = legs.sort_values(["start", "number"], ignore_index=True)
    legs["departs"], legs["arrives"] = (
        [(world.FIRST_DAY + timedelta(minutes=int(m))).isoformat(timespec="minutes") for m in legs[name]]
        for name in ("start", "end")
    )
    legs["leg"] = [
        f"VL{number}-{departs[5:7]}{departs[8:10]}"
        for number, departs in zip(legs["number"], legs["departs"], strict=True)
    ]
    return legs.rename(columns={"seats": "capacity"})


def make_itineraries(legs: pd.DataFrame, stations: pd.DataFrame) -> tuple[pd.DataFrame, IntArray]:
    """Find everything that is sold: each leg alone, and the connections over one hub or both.

    A connection is dropped where it is a wide detour or takes far longer than the quickest journey of its
    day.

    Returns
    -------
    itineraries : DataFrame
        Names, ends ``o`` and ``d`` by position, number of legs ``n``, kilometres, times; row ``l < L`` is leg ``l``.
    paths : IntArray
        (I, 3) legs of each, padded with -1.
    """
    position = pd.Series(np.arange(len(stations)), index=stations["station"])
    o, d = position[legs["origin"]].to_numpy(), position[legs["destination"]].to_numpy()
    minimum = stations["minimum_connection"].fillna(world.MINIMUM_CONNECTION).to_numpy(dtype=np.int64)
    start, end = legs["start"].to_numpy(), legs["end"].to_numpy()
    paths = journeys(o, d, start, end, minimum, maximum=world.LONGEST_CONNECTION)
    n = (paths >= 0).sum(axis=1)
    last = paths[np.arange(len(paths)), n - 1]
    table = pd.DataFrame({"o": o[paths[:, 0]], "d": d[last], "n": n})
    table["day"] = legs["day"].to_numpy()[paths[:, 0]]
    table["start"], table["end"] = start[paths[:, 0]], end[last]
    at = stations[["latitude", "longitude"]].to_numpy()
    table["direct"] = great_circle(*at[table["o"]].T, *at[table["d"]].T)
    table["km"] = np.where(paths >= 0, legs["km"].to_numpy()[paths], 0.0).sum(axis=1)
    elapsed = table["end"] - table["start"]
    table["longer"] = elapsed - elapsed.groupby([table["day"], table["o"], table["d"]]).transform("min")
    short = (table["km"] <= world.WIDEST_DETOUR * table["direct"]) & (table["longer"] <= world.LONGEST_WAIT)
    keep = ((table["n"] == 1) | short).to_numpy()
    table, paths = table[keep].reset_index(drop=True), paths[keep]

    table["choice"] = table.sort_values(["start", "end"]).groupby(["day", "o", "d"]).cumcount() + 1
    names, leg = stations["station"].to_numpy(), legs["leg"].to_numpy()
    dates = np.array([f"{world.FIRST_DAY + timedelta(days=day):%m%d}" for day in range(world.N_DAYS)])
    parts = zip(names[table["o"]], names[table["d"]], dates[table["day"]], table["choice"], strict=True)
    table["itinerary"] = ["-".join(map(str, part)) for part in parts]
    table["legs"] = [" ".join(leg[path[path >= 0]]) for path in paths]
    return table, paths
