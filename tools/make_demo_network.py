"""Make the tables of the demo carrier: ``python -m tools.make_demo_network --out demo_network``.

`tools.demo_scenario` holds the invented world; this program turns it into a timetable, itineraries, fares,
and demand to come as it stands on the night of the snapshot: most of the early, cheap demand has booked, most
of the late, dear demand is still to come. One seed gives the same tables every time.
"""

from __future__ import annotations

from datetime import timedelta
from pathlib import Path

import click
import numpy as np
import numpy.typing as npt
import pandas as pd

from tools import demo_scenario as world
from tools.demo_timetable import make_itineraries, make_legs
from tools.invented_traffic import (
    FloatArray,
    IntArray,
    leg_sums,
    local_and_through,
    over_dispersed,
    write_folder,
)

__all__ = ["main", "make_tables"]

SEED = 20270226
LOAD = 1.07
"""Usual demand to come over remaining seats; by leg it stays within `LOAD_LIMITS`."""
LOAD_LIMITS = (0.6, 1.7)
SOLD_OUT = 3
"""Legs without a seat left."""

SETTINGS = f"""name = "Vendamar Isles Link"
currency = "EUR"
as_of = "{world.AS_OF.isoformat(timespec="minutes")}"
fare_classes = [{", ".join(f'"{name}"' for name in world.FARE_CLASSES)}]

[defaults]
minimum_connection = {world.MINIMUM_CONNECTION}
demand_family = "auto"
"""


def make_tables(seed: int = SEED) -> dict[str, pd.DataFrame]:
    """Make all tables of the demo network.

    Returns
    -------
    dict of DataFrame
        By table name, ready to be written: columns and rows in their order, figures rounded.
    """
    rng = np.random.default_rng(seed)
    stations = pd.DataFrame(world.STATIONS, columns=list(world.STATION_COLUMNS))
    stations = stations.astype({"minimum_connection": "Int64"})
    legs = make_legs(stations, rng)
    itineraries, paths = make_itineraries(legs, stations)
    pull, for_work = stations["pull"].to_numpy(dtype=np.float64), stations["business"].to_numpy()
    ends = itineraries["o"], itineraries["d"]
    itineraries["pull"] = np.sqrt(pull[ends[0]] * pull[ends[1]])
    itineraries["business"] = (for_work[ends[0]] + for_work[ends[1]]) / 2
    fares = _fares(itineraries, paths, legs, rng)
    means, curve, legs["sold"] = _demand(itineraries, paths, legs, rng)
    deviation = over_dispersed(means, _forecast_spread(means, rng)).round(3)

    order = itineraries.sort_values(["day", "o", "d", "choice"]).index
    itineraries = itineraries.loc[order, ["itinerary", "legs"]]
    product = {
        "itinerary": np.repeat(itineraries["itinerary"].to_numpy(), len(world.FARE_CLASSES)),
        "fare_class": np.tile(np.array(world.FARE_CLASSES), len(itineraries)),
    }
    figures = {"mean": means[order].ravel(), "deviation": deviation[order].ravel(), "curve": curve[order].ravel()}
    return {
        "stations": stations.drop(columns=["pull", "business"]),
        "legs": legs[["leg", "origin", "destination", "departs", "arrives", "capacity", "sold"]],
        "itineraries": itineraries,
        "fares": pd.DataFrame(product | {"fare": [f"{fare:g}" for fare in fares[order].ravel()]}),
        "demand": pd.DataFrame(product | figures),
        "booking_curves": _booking_curves(),
    }


def _booking_curves() -> pd.DataFrame:
    """Return the readings of every booking curve."""
    days = np.array(world.READING_DAYS, dtype=np.float64)
    tables = [
        pd.DataFrame({"curve": name, "days_before": world.READING_DAYS, "share": _share_arrived(name, days).round(3)})
        for name in world.CURVES
    ]
    return pd.concat(tables, ignore_index=True)


def _forecast_spread(means: FloatArray, rng: np.random.Generator) -> FloatArray:
    """Return the coefficient of variation of each forecast, beyond chance; large flows are steadier."""
    return np.clip(rng.lognormal(np.log(0.9), 0.3, means.shape) * np.maximum(means, 0.3) ** -0.15, 0.25, 1.5)


def _fares(itineraries: pd.DataFrame, paths: IntArray, legs: pd.DataFrame, rng: np.random.Generator) -> FloatArray:
    """Return net fares, (I, C): one ladder per pair of ends, less than proportional to distance.

    A through fare is at most 92 % of the sum of the local fares of its path, class by class.
    """
    first = itineraries.assign(path=np.arange(len(itineraries))).groupby(["o", "d"])["path"].first()
    market = pd.Series(np.arange(len(first)), index=first.index)
    which: IntArray = market[pd.MultiIndex.from_frame(itineraries[["o", "d"]])].to_numpy()
    rows, path = itineraries.iloc[first], paths[first]
    used = path >= 0
    km = np.where(used, legs["km"].to_numpy()[path], 0.0)
    level = (km * legs["fare_level"].to_numpy()[path]).sum(axis=1) / km.sum(axis=1)
    billed = (rows["direct"].to_numpy() + rows["km"].to_numpy()) / 2
    noise = rng.lognormal(0.0, 0.06, len(rows)) * (0.85 + 0.3 * rows["business"].to_numpy())
    top = (14 + 3.4 * billed**0.70) * level * noise
    ladder = np.array(world.LADDER) * rng.lognormal(0.0, 0.03, (len(rows), len(world.LADDER)))
    fares = _rounded(top[:, None] * ladder)
    local = fares[which[: len(legs)]]
    ceiling = 0.92 * np.where(used[:, :, None], local[path], 0.0).sum(axis=1)
    through = (rows["n"].to_numpy() > 1)[:, None]
    capped: FloatArray = np.where(through & (fares > ceiling), _rounded(ceiling - 0.5), fares)
    return capped[which]


def _rounded(fares: FloatArray) -> FloatArray:
    """Round fares as a tariff would: whole units, halves below 20."""
    return np.where(fares >= 20, np.round(fares), np.round(2 * fares) / 2)


def _share_arrived(curve: str, days: FloatArray) -> FloatArray:
    """Share of the whole demand that has arrived so many days before departure."""
    scale, shape = world.CURVES[curve]
    return np.asarray(np.exp(-((days / scale) ** shape)))


def _demand(
    itineraries: pd.DataFrame,
    paths: IntArray,
    legs: pd.DataFrame,
    rng: np.random.Generator,
) -> tuple[FloatArray, npt.NDArray[np.str_], IntArray]:
    """Return mean demand to come, (I, C), its booking curve, (I, C), and the seats sold, (L,).

    Seats sold and demand to come follow from one whole demand and its booking curves: what has arrived is
    sold.
    """
    for_work = itineraries["business"].to_numpy() + rng.normal(0, 0.05, len(itineraries))
    days_left = (itineraries["start"] / 1440 + (world.FIRST_DAY - world.AS_OF) / timedelta(days=1)).to_numpy()
    curve = np.where(for_work[:, None] >= 0.45, np.array(world.BUSINESS_CURVES), np.array(world.LEISURE_CURVES))
    arrived = np.zeros(curve.shape)
    for name in world.CURVES:
        share = _share_arrived(name, days_left)
        arrived = np.where(curve == name, share[:, None], arrived)
    mix = for_work[:, None] * np.array(world.BUSINESS_MIX) + (1 - for_work[:, None]) * np.array(world.LEISURE_MIX)
    mix = mix * rng.lognormal(0.0, 0.15, mix.shape)
    mix /= mix.sum(axis=1, keepdims=True)
    to_come = (mix * (1 - arrived)).sum(axis=1)

    prior = (itineraries["pull"] * np.exp(-itineraries["longer"] / 90) * 0.45 ** (itineraries["n"] - 2)).to_numpy()
    load = _wanted_load(legs, rng)
    through = np.clip(legs["through"].to_numpy() + rng.normal(0, 0.06, len(legs)), 0.1, 0.8)
    seats = legs["capacity"].to_numpy(dtype=np.float64)
    left = np.full(len(legs), 0.5)
    for _ in range(4):
        # of a whole demand W a part `left` is to come and the rest is sold, so that
        # load = left * W / (seats - (1 - left) * W)
        whole = load * seats / (left + load * (1 - left))
        total = local_and_through(paths, prior, whole, through)
        left = leg_sums(paths, total * to_come, len(legs)) / leg_sums(paths, total, len(legs))
    means = np.maximum((total[:, None] * mix * (1 - arrived)).round(3), 0.001)

    coming = leg_sums(paths, means.sum(axis=1), len(legs))
    sold = leg_sums(paths, total * (1 - to_come), len(legs)) * rng.normal(1, 0.04, len(legs))
    remaining = np.clip(np.round(seats - sold), np.ceil(coming / LOAD_LIMITS[1]), np.floor(coming / LOAD_LIMITS[0]))
    remaining = np.minimum(remaining, seats)
    full = rng.choice(np.flatnonzero((legs["day"].to_numpy() <= 1) & (load > 1.2)), SOLD_OUT, replace=False)
    remaining[full] = 0
    return means, curve, (seats - remaining).astype(np.int64)


def _wanted_load(legs: pd.DataFrame, rng: np.random.Generator) -> FloatArray:
    """Return demand to come over remaining seats wanted on every leg, by weekday, hour and chance."""
    hour = legs["start"].to_numpy() % 1440 // 60
    begins = np.array(list(world.HOUR_LEVEL))
    by_hour = np.array(list(world.HOUR_LEVEL.values()))[np.searchsorted(begins, hour, side="right") - 1]
    by_day = np.array(world.WEEKDAY_LEVEL)[legs["day"].to_numpy()]
    load: FloatArray = LOAD * by_hour * by_day * rng.lognormal(0.0, 0.16, len(legs))
    return np.clip(load, LOAD_LIMITS[0] + 0.03, LOAD_LIMITS[1] - 0.05)


@click.command()
@click.option("--out", type=click.Path(path_type=Path), required=True, help="Folder to write.")
@click.option("--seed", default=SEED, show_default=True, help="Seed of the random generator.")
def main(out: Path, seed: int) -> None:
    """Write the demo network as a folder of CSV tables."""
    tables = make_tables(seed)
    write_folder(out, SETTINGS, tables)
    for name, table in tables.items():
        click.echo(f"{name}: {len(table)} rows")


if __name__ == "__main__":
    main()
