"""Assumed seats, fares and demand for a real schedule: ``python -m tools.assumed_market FOLDER``.

What a carrier knows of its market is in no public table, so it is assumed, by these rules:

- *Seats*: drawn per flight from the vehicles of its distance (`SEATS`); nothing is sold yet.
- *Fares*, net: highest 55 + 1.9 * miles^0.75 per pair of stations, varied by 8 % and the same in both directions, less
  by class (`LADDER`); a through fare is at most about 92 % of the sum of its local ones.
- *Demand*: each leg is asked for by `LOAD` times its seats on average, varied by leg; about half of it
  connects, spread by the square root of the traffic of both ends, and less for long waits and detours.
  Deviations lie above Poisson by a forecast spread of 30 to 90 %, less for large flows.

The program writes ``fares.csv`` and ``demand.csv`` of every itinerary that a network folder has; seats come
with the schedule.
"""

from __future__ import annotations

from pathlib import Path

import click
import numpy as np
import pandas as pd

from network import Legs, Stations, input_schemas
from network.faults import Faults
from network.great_circle import great_circle
from network.reading import read_table
from network.routes import Paths, assemble_legs, assemble_paths, assemble_stations, assemble_through
from network.settings import read_settings
from tools.invented_traffic import FloatArray, IntArray, local_and_through, over_dispersed

__all__ = ["FARE_CLASSES", "assume_market", "assumed_demand", "assumed_fares", "assumed_seats", "product_columns"]

KM_PER_MILE = 1.609344
SEATS = {0: (50, 50, 70), 400: (50, 110, 142), 800: (110, 142, 180), 1400: (142, 180)}
"""Seats that may serve a flight, by the miles from which they hold."""
FARE_CLASSES = ("A", "B", "C", "D", "E", "F")
LADDER = np.array([1.0, 0.80, 0.62, 0.47, 0.35, 0.25])
CLASS_MIX = np.array([0.08, 0.11, 0.15, 0.19, 0.23, 0.24])
LOAD = 1.1


def assumed_seats(miles: IntArray, rng: np.random.Generator) -> IntArray:
    """Draw assumed seats for every flight."""
    band = np.searchsorted(list(SEATS), miles, side="right") - 1
    choices = list(SEATS.values())
    return np.array([rng.choice(choices[k]) for k in band])


def assumed_fares(itineraries: pd.DataFrame, paths: IntArray, rng: np.random.Generator) -> FloatArray:
    """Return assumed fares, (I, C), in whole units, one ladder per pair of stations.

    Parameters
    ----------
    itineraries
        (I,) positions ``o`` and ``d`` of the stations, ``direct`` and ``flown`` in kilometres, ``wait`` in minutes,
        ``through`` where there is more than one leg. Row ``l < L`` is leg ``l`` alone.
    paths
        (I, K) legs of each, padded with -1.
    rng
        Random generator.
    """
    ends = np.sort(itineraries[["o", "d"]].to_numpy(), axis=1)
    _, first, market = np.unique(ends, axis=0, return_index=True, return_inverse=True)
    miles = itineraries["direct"].to_numpy()[first] / KM_PER_MILE
    top = ((55 + 1.9 * miles**0.75) * rng.lognormal(0.0, 0.08, len(first)))[market.ravel()]
    through = itineraries["through"].to_numpy()
    local = np.where(paths >= 0, top[paths], 0.0).sum(axis=1)
    top = np.where(through, np.minimum(top, 0.92 * local), top)
    fares: FloatArray = np.round(top[:, None] * LADDER)
    return fares


def assumed_demand(
    itineraries: pd.DataFrame, paths: IntArray, seats: IntArray, rng: np.random.Generator
) -> tuple[FloatArray, FloatArray]:
    """Return assumed means and deviations of demand, both (I, C); otherwise as `assumed_fares`, with (L,) seats."""
    count = max(itineraries["o"].max(), itineraries["d"].max()) + 1
    traffic = sum(np.bincount(itineraries[end][: len(seats)], minlength=count) for end in ("o", "d"))
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


def product_columns(names: np.ndarray) -> dict[str, np.ndarray]:
    """Columns ``itinerary`` and ``fare_class`` of all products of some itineraries."""
    classes = np.array(FARE_CLASSES)
    return {"itinerary": np.repeat(names, len(classes)), "fare_class": np.tile(classes, len(names))}


def assume_market(folder: Path, seed: int) -> int:
    """Write ``fares.csv`` and ``demand.csv`` of a network folder; return the number of products.

    Raises
    ------
    InputError
        If stations, legs, itineraries or settings of the folder are at fault.
    click.ClickException
        If a leg is no itinerary by itself, or a station has no coordinates.
    """
    stations, legs, paths = _read(folder)
    itineraries, padded = _itineraries(stations, legs, paths)
    rng = np.random.default_rng(seed)
    fares = assumed_fares(itineraries, padded, rng)
    mean, deviation = assumed_demand(itineraries, padded, legs.capacity, rng)
    product = product_columns(itineraries["itinerary"].to_numpy())
    tables = {"fares": {"fare": fares.ravel()}, "demand": {"mean": mean.ravel(), "deviation": deviation.ravel()}}
    for name, figures in tables.items():
        pd.DataFrame(product | figures).to_csv(folder / f"{name}.csv", index=False, lineterminator="\n")
    return fares.size


def _read(folder: Path) -> tuple[Stations, Legs, Paths]:
    faults = Faults()
    settings = read_settings(folder, faults)
    tables = {name: read_table(folder, input_schemas()[name], faults) for name in ("stations", "legs", "itineraries")}
    stations = assemble_stations(tables["stations"], settings)
    legs = assemble_legs(tables["legs"], stations, faults)
    through = assemble_through(tables["legs"], legs, faults)
    paths = assemble_paths(tables["itineraries"], legs, stations, faults, through)
    faults.raise_errors()
    assert stations is not None and legs is not None and paths is not None
    return stations, legs, paths


def _itineraries(stations: Stations, legs: Legs, paths: Paths) -> tuple[pd.DataFrame, IntArray]:
    """Itineraries as `assumed_fares` wants them, each leg alone first, and their padded paths."""
    length = np.diff(paths.start)
    padded = np.full((len(length), int(length.max())), -1)
    padded[np.arange(padded.shape[1]) < length[:, None]] = paths.leg
    order = np.lexsort((padded[:, 0], length))
    padded, length = padded[order], length[order]
    if not np.array_equal(padded[length == 1, 0], np.arange(len(legs))):
        raise click.ClickException("every leg must be one itinerary by itself")
    first, last = padded[:, 0], padded[np.arange(len(padded)), length - 1]
    lat, lon = stations.latitude, stations.longitude
    o, d = legs.origin, legs.destination
    km = great_circle(lat[o], lon[o], lat[d], lon[d])
    minutes = (legs.arrives - legs.departs).astype("timedelta64[m]").astype(np.int64)
    o, d = o[first], d[last]
    aboard = np.where(padded >= 0, minutes[padded], 0).sum(axis=1)
    table = pd.DataFrame(
        {
            "itinerary": paths.name[order],
            "o": o,
            "d": d,
            "through": length > 1,
            "direct": great_circle(lat[o], lon[o], lat[d], lon[d]),
            "flown": np.where(padded >= 0, km[padded], 0.0).sum(axis=1),
            "wait": (legs.arrives[last] - legs.departs[first]).astype("timedelta64[m]").astype(np.int64) - aboard,
        }
    )
    if table["direct"].isna().any():
        raise click.ClickException("every station needs coordinates")
    return table, padded


@click.command()
@click.argument("folder", type=click.Path(path_type=Path, exists=True, file_okay=False))
@click.option("--seed", default=20010110, show_default=True, help="Seed of the random generator.")
def main(folder: Path, seed: int) -> None:
    """Write assumed fares and demand for every itinerary of FOLDER."""
    click.echo(f"{assume_market(folder, seed):,} products")


if __name__ == "__main__":
    main()
