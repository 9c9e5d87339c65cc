"""Synthetic hub-and-spoke days of three sizes, for timing.

``python -m benchmarks.synthetic_days --size large --out DIR [--format parquet] [--seed N]``

A day has a few hubs; at each, banks of arrivals are followed by departures to the same kind of spokes, and
hubs are joined by trunk legs. Itineraries are all the legs alone and the best of the connections (two legs
and a few of three). Demand follows a gravity rule and is balanced until every leg carries about what it
should; it is Poisson for some products and over-dispersed for others. Everything is invented; one seed gives
the same day every time.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import click
import numpy as np
import pandas as pd

from network.arrays import NameArray
from tools.invented_traffic import (
    FloatArray,
    IntArray,
    TableFormat,
    great_circle,
    journeys,
    local_and_through,
    over_dispersed,
    write_folder,
)

__all__ = ["CLASSES", "CLASS_CURVES", "SIZES", "Day", "DaySize", "instants", "invented_day", "leg_names", "write_day"]


@dataclass(frozen=True)
class DaySize:
    """How large a synthetic day is.

    Attributes
    ----------
    hubs, spokes, banks
        Stations of both kinds, and banks a day at each hub.
    trunks
        Legs a day from each hub to each other hub.
    legs, itineraries
        Legs of the day, an even number, and itineraries, the legs alone among them.
    first_bank, last_bank
        Middles of the first and the last bank, minutes after midnight.
    longest_connection, widest_detour
        Minutes, and length of the way as a multiple of the great circle.
    """

    hubs: int
    spokes: int
    banks: int
    trunks: int
    legs: int
    itineraries: int
    first_bank: int = 8 * 60
    last_bank: int = 20 * 60
    longest_connection: int = 240
    widest_detour: float = 1.8


SIZES = {
    "small": DaySize(hubs=1, spokes=48, banks=2, trunks=0, legs=160, itineraries=1_625),
    "regional": DaySize(
        hubs=1,
        spokes=60,
        banks=2,
        trunks=0,
        legs=200,
        itineraries=6_000,
        first_bank=10 * 60,
        last_bank=15 * 60 + 30,
        longest_connection=480,
        widest_detour=2.5,
    ),
    "middle": DaySize(hubs=2, spokes=60, banks=3, trunks=3, legs=500, itineraries=8_000),
    "broad": DaySize(hubs=2, spokes=90, banks=4, trunks=4, legs=1_000, itineraries=26_000),
    "large": DaySize(hubs=2, spokes=120, banks=6, trunks=4, legs=1_826, itineraries=87_120),
}
"""The sizes; with `CLASSES` they give 13,000, 48,000, 64,000, 208,000 and 696,960 products."""

CLASSES = ("A", "B", "C", "D", "E", "F", "G", "H")
LADDER = np.array([1.0, 0.84, 0.70, 0.58, 0.48, 0.39, 0.32, 0.26])
CLASS_MIX = np.array([0.06, 0.08, 0.10, 0.12, 0.14, 0.16, 0.17, 0.17])
CLASS_CURVES = ("late", "late", "late", "middle", "middle", "early", "early", "early")
CURVES = {
    "late": (0.02, 0.08, 0.15, 0.28, 0.45, 0.72, 0.88, 1.0),
    "middle": (0.08, 0.25, 0.42, 0.60, 0.75, 0.90, 0.96, 1.0),
    "early": (0.20, 0.50, 0.72, 0.85, 0.93, 0.98, 0.99, 1.0),
}
READING_DAYS = (90, 45, 28, 14, 7, 3, 1, 0)

BLOCK_SPEED = 700
"""Kilometres per hour; `GROUND_MINUTES` come on top."""
GROUND_MINUTES = 30
MINIMUM_CONNECTION = 40
LOAD = 1.1
THROUGH_SHARE = 0.5
"""Part of the passengers of a leg that connects."""
STEADY_PART = 0.5
"""Part of the products whose demand is plain Poisson; the others are over-dispersed."""

SETTINGS = f"""name = "Synthetic day, {{size}}, seed {{seed}}"
currency = "EUR"
as_of = "2027-05-02T02:00+00:00"
fare_classes = [{", ".join(f'"{name}"' for name in CLASSES)}]

[defaults]
minimum_connection = {MINIMUM_CONNECTION}
demand_family = "auto"
"""
MIDNIGHT = np.datetime64("2027-06-01T00:00", "m")
"""Start of the day of operation, UTC."""


@dataclass(frozen=True)
class _Stations:
    """Stations by position, hubs first: names, degrees, and what draws people there."""

    name: list[str]
    at: FloatArray
    pull: FloatArray


@dataclass(frozen=True)
class _Legs:
    """Legs by departure: stations by position, minutes after midnight, kilometres."""

    o: IntArray
    d: IntArray
    start: IntArray
    end: IntArray
    km: FloatArray


@dataclass(frozen=True, eq=False)
class Day:
    """A day of operation before a seat is sold, the legs alone first among the itineraries.

    Attributes
    ----------
    stations
        Table ``stations``.
    origin, destination, start, end
        (L,) station names, and minutes after midnight.
    capacity
        (L,) seats.
    paths
        (I, 3) legs of every itinerary, padded with -1.
    fares
        (I, C) currency.
    mean, deviation
        (I, C) passengers.
    """

    stations: pd.DataFrame
    origin: NameArray
    destination: NameArray
    start: IntArray
    end: IntArray
    capacity: IntArray
    paths: IntArray
    fares: FloatArray
    mean: FloatArray
    deviation: FloatArray


def write_day(folder: Path, size: str, seed: int = 1, table_format: TableFormat = "csv") -> dict[str, int]:
    """Write one synthetic day as a network folder.

    Parameters
    ----------
    folder
        Made if missing.
    size
        A key of `SIZES`.
    seed
        Seed of the random generator.
    table_format
        ``csv`` or ``parquet``.

    Returns
    -------
    dict of int
        Rows of every table written.
    """
    day = invented_day(SIZES[size], np.random.default_rng(seed))
    tables = {"stations": day.stations, "legs": _leg_table(day), **_product_tables(day)}
    write_folder(folder, SETTINGS.format(size=size, seed=seed), tables, table_format)
    return {name: len(table) for name, table in tables.items()}


def invented_day(plan: DaySize, rng: np.random.Generator) -> Day:
    """Invent a day of a given size."""
    stations = _stations(plan, rng)
    legs = _legs(plan, stations, rng)
    paths, prior, direct = _itineraries(plan, stations, legs)
    capacity = 10 * rng.integers(10, 19, len(legs.o))
    target: FloatArray = capacity.astype(np.float64) * np.clip(
        LOAD * rng.lognormal(-0.03, 0.24, len(capacity)), 0.55, 1.8
    )
    through: FloatArray = np.clip(rng.normal(THROUGH_SHARE, 0.1, len(capacity)), 0.15, 0.8)
    total = local_and_through(paths, prior, target, through)

    shape = (len(paths), len(CLASSES))
    mix = CLASS_MIX * rng.gamma(6.0, size=shape)
    mean = np.maximum((total[:, None] * mix / mix.sum(axis=1, keepdims=True)).round(4), 0.0005)
    spread = np.where(
        rng.random(shape) < STEADY_PART, 0.0, rng.uniform(0.25, 0.8, shape) * np.maximum(mean, 0.3) ** -0.15
    )
    name = np.array(stations.name, dtype=object)
    return Day(
        stations=_station_table(stations),
        origin=name[legs.o],
        destination=name[legs.d],
        start=legs.start,
        end=legs.end,
        capacity=capacity,
        paths=paths,
        fares=_fares(paths, legs, direct, rng),
        mean=mean,
        deviation=over_dispersed(mean, spread).round(4),
    )


def _stations(plan: DaySize, rng: np.random.Generator) -> _Stations:
    """Place the hubs on a ring and the spokes at random in a square of about 2,000 km."""
    turn = 2 * np.pi * np.arange(plan.hubs) / plan.hubs
    ring = 4.0 if plan.hubs > 1 else 0.0
    hubs = np.column_stack([45 + ring * np.sin(turn), 10 + 1.4 * ring * np.cos(turn)])
    spokes = np.column_stack([rng.uniform(36, 54, plan.spokes), rng.uniform(-3, 23, plan.spokes)])
    name = [f"H{k + 1}" for k in range(plan.hubs)] + [f"S{k + 1:03d}" for k in range(plan.spokes)]
    pull = np.concatenate([np.full(plan.hubs, 4.0), rng.lognormal(0.0, 0.8, plan.spokes)])
    return _Stations(name, np.concatenate([hubs, spokes]), pull)


def _legs(plan: DaySize, stations: _Stations, rng: np.random.Generator) -> _Legs:
    """Fill the banks of every hub with round trips to its nearer spokes, and add the trunk legs."""
    hub_at, spoke_at = stations.at[: plan.hubs], stations.at[plan.hubs :]
    others = [(a, b) for a in range(plan.hubs) for b in range(plan.hubs) if a != b]
    n_slots = plan.hubs * plan.banks
    trips = np.full(n_slots, (plan.legs - len(others) * plan.trunks) // 2 // n_slots)
    trips[: (plan.legs - len(others) * plan.trunks) // 2 % n_slots] += 1
    middles = np.linspace(plan.first_bank, plan.last_bank, plan.banks)
    o, d, minute, inbound = [], [], [], []
    for slot, n in enumerate(trips):
        bank, hub = divmod(slot, plan.hubs)
        km = great_circle(*hub_at[hub], *spoke_at.T)
        nearer = np.argsort(km)[: max(int(n), 3 * plan.spokes // 4)]
        for arrives in (True, False):
            spokes = plan.hubs + rng.choice(nearer, n, replace=False)
            here = np.full(n, hub)
            o.append(spokes if arrives else here)
            d.append(here if arrives else spokes)
            minute.append(middles[bank] + (rng.uniform(-40, 0, n) if arrives else rng.uniform(40, 75, n)))
            inbound.append(np.full(n, arrives))
    for a, b in others:
        served = np.unique(np.linspace(0, plan.banks - 1, plan.trunks).round().astype(int))
        o.append(np.full(len(served), a))
        d.append(np.full(len(served), b))
        minute.append(middles[served] - rng.uniform(10, 40, len(served)))
        inbound.append(np.ones(len(served), dtype=bool))
    origin, destination = np.concatenate(o), np.concatenate(d)
    km = great_circle(*stations.at[origin].T, *stations.at[destination].T)
    minutes = np.round(km / BLOCK_SPEED * 60 + GROUND_MINUTES).astype(np.int64)
    start = np.concatenate(minute).astype(np.int64) - np.where(np.concatenate(inbound), minutes, 0)
    order = np.lexsort((destination, origin, start))
    return _Legs(origin[order], destination[order], start[order], (start + minutes)[order], km[order])


def _itineraries(plan: DaySize, stations: _Stations, legs: _Legs) -> tuple[IntArray, FloatArray, FloatArray]:
    """Return the paths, (I, 3) padded with -1, their weight, and the great circles from end to end, (I,).

    The legs alone come first, then the connections of greatest weight, in the order of their legs. Weight is gravity
    (pull of both ends over distance), less for each stop, for detours and for time spent waiting.
    """
    n = len(legs.o)
    minimum = np.full(len(stations.name), plan.longest_connection + 1)
    minimum[: plan.hubs] = MINIMUM_CONNECTION
    paths = journeys(legs.o, legs.d, legs.start, legs.end, minimum, maximum=plan.longest_connection)
    count = (paths >= 0).sum(axis=1)
    first, last = paths[:, 0], paths[np.arange(len(paths)), count - 1]
    direct = great_circle(*stations.at[legs.o[first]].T, *stations.at[legs.d[last]].T)
    km = np.where(paths >= 0, legs.km[paths], 0.0).sum(axis=1)
    moving = np.where(paths >= 0, (legs.end - legs.start)[paths], 0).sum(axis=1)
    waiting = legs.end[last] - legs.start[first] - moving
    pull = stations.pull[legs.o[first]] * stations.pull[legs.d[last]]
    weight = np.sqrt(pull) / (300 + direct) ** 0.5
    weight *= np.exp(-1.2 * np.maximum(count - 2, 0) - (km / direct - 1) - waiting / 120)
    through = np.flatnonzero((count > 1) & (km <= plan.widest_detour * direct))
    best = through[np.argsort(-weight[through], kind="stable")[: plan.itineraries - n]]
    keep = np.concatenate([np.arange(n), best[np.lexsort(paths[best].T[::-1])]])
    return paths[keep], weight[keep], direct[keep]


def _fares(paths: IntArray, legs: _Legs, direct: FloatArray, rng: np.random.Generator) -> FloatArray:
    """Return fares, (I, C): less than proportional to distance; a through fare is below its local ones."""
    n = len(legs.o)
    top = (40 + 4.2 * direct**0.72) * rng.lognormal(0.0, 0.08, len(paths))
    sums = np.where(paths >= 0, top[:n][paths], 0.0).sum(axis=1)
    top[n:] = np.minimum(top[n:], 0.9 * sums[n:])
    fares: FloatArray = np.round(top[:, None] * LADDER)
    return fares


def _station_table(stations: _Stations) -> pd.DataFrame:
    """Return ``stations``."""
    return pd.DataFrame(
        {
            "station": stations.name,
            "name": [name.replace("H", "Hub ").replace("S", "Spoke ") for name in stations.name],
            "latitude": stations.at[:, 0].round(3),
            "longitude": stations.at[:, 1].round(3),
            "minimum_connection": pd.array([None] * len(stations.name), dtype="Int64"),
        }
    )


def _leg_table(day: Day) -> pd.DataFrame:
    """Return ``legs``, nothing sold."""
    return pd.DataFrame(
        {
            "leg": leg_names(len(day.origin)),
            "origin": day.origin,
            "destination": day.destination,
            "departs": instants(day.start),
            "arrives": instants(day.end),
            "capacity": day.capacity,
            "sold": 0,
        }
    )


def _product_tables(day: Day) -> dict[str, pd.DataFrame]:
    """Return ``itineraries``, ``fares``, ``demand`` and ``booking_curves``."""
    paths = day.paths
    leg = np.array([*leg_names(len(day.origin)), ""], dtype=object)
    legs = leg[paths[:, 0]]
    for step in (1, 2):
        legs = legs + np.where(paths[:, step] >= 0, " ", "") + leg[paths[:, step]]
    itinerary = np.array([f"I{k:05d}" for k in range(len(paths))], dtype=object)
    product = {
        "itinerary": np.repeat(itinerary, len(CLASSES)),
        "fare_class": np.tile(np.array(CLASSES, dtype=object), len(paths)),
    }
    curve = np.tile(np.array(CLASS_CURVES, dtype=object), len(paths))
    readings = [(name, *row) for name in CURVES for row in zip(READING_DAYS, CURVES[name], strict=True)]
    return {
        "itineraries": pd.DataFrame({"itinerary": itinerary, "legs": legs}),
        "fares": pd.DataFrame(product | {"fare": day.fares.ravel().astype(np.int64)}),
        "demand": pd.DataFrame(
            product | {"mean": day.mean.ravel(), "deviation": day.deviation.ravel(), "curve": curve}
        ),
        "booking_curves": pd.DataFrame(readings, columns=["curve", "days_before", "share"]),
    }


def leg_names(n: int) -> list[str]:
    """Return the names of the legs by position."""
    return [f"L{k:04d}" for k in range(n)]


def instants(minutes: IntArray) -> list[str]:
    """Write minutes after midnight as ISO 8601 instants."""
    return [f"{instant}+00:00" for instant in MIDNIGHT + minutes.astype("timedelta64[m]")]


@click.command()
@click.option("--size", type=click.Choice(list(SIZES)), required=True, help="How large the day is.")
@click.option("--out", type=click.Path(path_type=Path), required=True, help="Folder to write.")
@click.option("--seed", default=1, show_default=True, help="Seed of the random generator.")
@click.option("--format", "table_format", type=click.Choice(["csv", "parquet"]), default="csv", show_default=True)
def main(size: str, out: Path, seed: int, table_format: TableFormat) -> None:
    """Write a synthetic day as a network folder."""
    for name, rows in write_day(out, size, seed, table_format).items():
        click.echo(f"{name}: {rows} rows")


if __name__ == "__main__":
    main()
