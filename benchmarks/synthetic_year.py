"""A synthetic regional carrier for a year of departures, and its next night.

``python -m benchmarks.synthetic_year --out DIR [--days N] [--seed N]`` writes the first night,
``python -m benchmarks.synthetic_year --out DIR2 --changed 0.05 --after DIR [--seed N]`` the next one.

The carrier repeats the ``regional`` day of `benchmarks.synthetic_days`: 200 legs and 6,000 itineraries in 8
classes. No passenger stays overnight, so every day is a component of its own. Demand and fares follow weekday and
season, and every day has its luck. Of the demand of a day the part that its booking curves leave at the
snapshot is still to come; the rest has been offered to the legs and is sold, as far as there was room.

A next night is one day later. The day that has departed is gone, a new day is for sale at the far end, and a share
of the others has new sales and new forecasts; all other rows are those of the night before. Tables are
Parquet, one row group a day, written and read day by day. Everything is invented; one seed of the random generator
gives the same year every time.
"""

from __future__ import annotations

import tomllib
from collections.abc import Iterator
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path

import click
import numpy as np
import pyarrow as pa
import pyarrow.parquet

from benchmarks.synthetic_days import CLASS_CURVES, CLASSES, SIZES, Day, invented_day, leg_names
from network.arrays import FloatArray
from tools.invented_traffic import leg_sums

__all__ = ["write_next_night", "write_year"]

FIRST_DAY = np.datetime64("2027-06-01", "D")
"""First day of operation of a first night, UTC."""

READING_DAYS = (365, 270, 180, 120, 90, 60, 45, 28, 14, 7, 3, 1, 0)
CURVES = {
    "late": (0.0, 0.002, 0.005, 0.01, 0.02, 0.05, 0.08, 0.15, 0.28, 0.45, 0.72, 0.88, 1.0),
    "middle": (0.0, 0.01, 0.025, 0.05, 0.08, 0.18, 0.25, 0.42, 0.60, 0.75, 0.90, 0.96, 1.0),
    "early": (0.0, 0.03, 0.07, 0.13, 0.20, 0.38, 0.50, 0.72, 0.85, 0.93, 0.98, 0.99, 1.0),
}
WEEKDAY = (1.02, 0.92, 0.95, 1.06, 1.16, 0.84, 1.05)
"""Demand of the days of the week beside their mean, Monday first."""

SEASON = 0.22
"""How far demand swings with the season; its crest is in the middle of July."""

LUCK = 0.10
"""Spread (of the logarithm) of the demand of a whole day, and twice that of single itineraries."""

PLACED = 0.9
"""Part of the arrived demand that was sold a seat."""

SETTINGS = """name = "Synthetic year"
currency = "EUR"
as_of = "{as_of}T02:00+00:00"
fare_classes = [{classes}]

[defaults]
minimum_connection = 40
demand_family = "auto"
"""

INSTANT = pa.timestamp("ms", tz="UTC")
COLUMNS = {
    "legs": {
        "leg": pa.string(),
        "origin": pa.string(),
        "destination": pa.string(),
        "departs": INSTANT,
        "arrives": INSTANT,
        "capacity": pa.int32(),
        "sold": pa.int32(),
    },
    "itineraries": {"itinerary": pa.string(), "legs": pa.string()},
    "fares": {"itinerary": pa.string(), "fare_class": pa.string(), "fare": pa.float64()},
    "demand": {
        "itinerary": pa.string(),
        "fare_class": pa.string(),
        "mean": pa.float64(),
        "deviation": pa.float64(),
        "curve": pa.string(),
    },
}
"""Tables that grow with the days, and the types of their columns."""


@dataclass(frozen=True, eq=False)
class Carrier:
    """What repeats every day.

    Attributes
    ----------
    day
        The day of operation as it would be on average.
    seed
        Seed of the random generator; every date has its own stream.
    """

    day: Day
    seed: int

    @classmethod
    def of(cls, seed: int) -> Carrier:
        """Invent a carrier."""
        return cls(invented_day(SIZES["regional"], np.random.default_rng(seed)), seed)

    def tables(self, date: np.datetime64, as_of: np.datetime64) -> dict[str, pa.Table]:
        """Return the rows of one day of operation as they stand at 02:00 of another."""
        day, stamp = self.day, str(date).replace("-", "")
        rng = np.random.default_rng([self.seed, int(date.astype(np.int64))])
        arrived = _arrived(float((date - as_of).astype(np.float64)))
        level = _level(date)
        luck = rng.lognormal(0.0, LUCK) * rng.lognormal(0.0, 2 * LUCK, (len(day.paths), 1))
        demand = day.mean * level * luck
        fares = np.round(day.fares * (0.6 + 0.4 * level) * rng.lognormal(0.0, 0.03, (len(day.paths), 1)))
        placed = leg_sums(day.paths, (PLACED * demand * arrived).sum(axis=1), len(day.capacity))
        sold = np.minimum(rng.poisson(placed), np.floor(0.97 * day.capacity)).astype(np.int32)
        mean = np.maximum((demand * (1.0 - arrived)).round(4), 0.0005)
        ratio = np.maximum(day.deviation**2 / day.mean - 1.0, 0.0)
        deviation = np.sqrt(mean * (1.0 + ratio * mean / day.mean)).round(4)

        leg = np.array([f"{name}.{stamp}" for name in leg_names(len(day.capacity))] + [""], dtype=object)
        legs = leg[day.paths[:, 0]]
        for step in range(1, day.paths.shape[1]):
            legs = legs + np.where(day.paths[:, step] >= 0, " ", "") + leg[day.paths[:, step]]
        itinerary = [f"I{k:04d}.{stamp}" for k in range(len(day.paths))]
        midnight = date.astype("datetime64[m]")
        product = {
            "itinerary": np.repeat(np.array(itinerary, dtype=object), len(CLASSES)),
            "fare_class": CLASSES * len(itinerary),
        }
        columns = {
            "legs": {
                "leg": leg[:-1],
                "origin": day.origin,
                "destination": day.destination,
                "departs": (midnight + day.start).astype("datetime64[ms]"),
                "arrives": (midnight + day.end).astype("datetime64[ms]"),
                "capacity": day.capacity,
                "sold": sold,
            },
            "itineraries": {"itinerary": itinerary, "legs": legs},
            "fares": product | {"fare": fares.ravel()},
            "demand": product
            | {"mean": mean.ravel(), "deviation": deviation.ravel(), "curve": CLASS_CURVES * len(itinerary)},
        }
        return {name: _table(name, values) for name, values in columns.items()}


def write_year(folder: Path, days: int = 365, seed: int = 1) -> dict[str, int]:
    """Write a first night.

    Parameters
    ----------
    folder
        Made if missing.
    days
        Days for sale; the first departs on the day of the snapshot.
    seed
        Seed of the random generator.

    Returns
    -------
    dict of int
        Rows of every table that grows with the days.
    """
    carrier = Carrier.of(seed)
    _write_frame(folder, carrier, FIRST_DAY)
    return _write_days(folder, (carrier.tables(FIRST_DAY + day, FIRST_DAY) for day in range(days)))


def write_next_night(folder: Path, after: Path, changed: float, seed: int = 1) -> dict[str, int]:
    """Write the night after another.

    Parameters
    ----------
    folder, after
        The new folder, and that of the night before, written here.
    changed
        Share of the days still for sale that have new sales and forecasts.
    seed
        Seed of the random generator, that of the night before.

    Returns
    -------
    dict of int
        Rows of every table that grows with the days.
    """
    carrier = Carrier.of(seed)
    as_of = np.datetime64(tomllib.loads((after / "network.toml").read_text(encoding="utf-8"))["as_of"][:10], "D") + 1
    _write_frame(folder, carrier, as_of)
    return _write_days(folder, _next_days(carrier, after, as_of, changed))


def _next_days(carrier: Carrier, after: Path, as_of: np.datetime64, changed: float) -> Iterator[dict[str, pa.Table]]:
    """Yield the days of the night before but for the first, some of them changed, and one more."""
    rng = np.random.default_rng([carrier.seed, int(as_of.astype(np.int64)), 1])
    with ExitStack() as stack:
        files = {name: stack.enter_context(pa.parquet.ParquetFile(after / f"{name}.parquet")) for name in COLUMNS}
        days = files["legs"].num_row_groups
        chosen = set(rng.choice(np.arange(1, days), round(changed * (days - 1)), replace=False).tolist())
        for day in range(1, days):
            tables = {name: file.read_row_group(day) for name, file in files.items()}
            yield _later(tables, rng) if day in chosen else tables
    yield carrier.tables(as_of + (days - 1), as_of)


def _later(tables: dict[str, pa.Table], rng: np.random.Generator) -> dict[str, pa.Table]:
    """Sell some seats of a day and forecast its demand anew."""
    legs, demand = tables["legs"], tables["demand"]
    capacity, sold = legs["capacity"].to_numpy(), legs["sold"].to_numpy()
    sold = np.minimum(sold + rng.poisson(1.5, len(sold)), np.maximum(capacity, sold)).astype(np.int32)
    factor = rng.uniform(0.9, 1.08, len(demand))
    mean = np.maximum((demand["mean"].to_numpy() * factor).round(4), 0.0005)
    deviation = (demand["deviation"].to_numpy() * np.sqrt(factor)).round(4)
    return tables | {
        "legs": legs.set_column(legs.column_names.index("sold"), "sold", pa.array(sold)),
        "demand": demand.set_column(demand.column_names.index("mean"), "mean", pa.array(mean)).set_column(
            demand.column_names.index("deviation"), "deviation", pa.array(deviation)
        ),
    }


def _arrived(days: float) -> FloatArray:
    """(C,) share of the demand of every class that has arrived by so many days before departure."""
    share = {name: np.interp(days, READING_DAYS[::-1], curve[::-1]) for name, curve in CURVES.items()}
    return np.array([share[name] for name in CLASS_CURVES])


def _level(date: np.datetime64) -> float:
    """Demand of a date beside the mean of the year, by weekday and season."""
    weekday = (int(date.astype(np.int64)) + 3) % 7
    of_year = int((date - date.astype("datetime64[Y]")).astype(np.int64))
    return WEEKDAY[weekday] * (1.0 + SEASON * float(np.cos(2 * np.pi * (of_year - 196) / 365.25)))


def _table(name: str, columns: dict[str, object]) -> pa.Table:
    types = COLUMNS[name]
    arrays = [
        pa.array(columns[column], kind if kind != INSTANT else pa.timestamp("ms")).cast(kind)
        for column, kind in types.items()
    ]
    return pa.table(arrays, names=list(types))


def _write_frame(folder: Path, carrier: Carrier, as_of: np.datetime64) -> None:
    """Write what does not grow with the days: settings, stations and booking curves."""
    folder.mkdir(parents=True, exist_ok=True)
    classes = ", ".join(f'"{name}"' for name in CLASSES)
    (folder / "network.toml").write_text(SETTINGS.format(as_of=as_of, classes=classes), encoding="utf-8")
    carrier.day.stations.to_parquet(folder / "stations.parquet", index=False)
    readings = [(name, *row) for name in CURVES for row in zip(READING_DAYS, CURVES[name], strict=True)]
    curve, days_before, share = zip(*readings, strict=True)
    table = pa.table({"curve": curve, "days_before": days_before, "share": share})
    pa.parquet.write_table(table, folder / "booking_curves.parquet")


def _write_days(folder: Path, days: Iterator[dict[str, pa.Table]]) -> dict[str, int]:
    """Write the days into Parquet as they come, a row group each."""
    rows = dict.fromkeys(COLUMNS, 0)
    with ExitStack() as stack:
        writers = {
            name: stack.enter_context(
                # Without the schema of arrow the file holds plain text and figures, as others would write it.
                pa.parquet.ParquetWriter(folder / f"{name}.parquet", pa.schema(types), store_schema=False)
            )
            for name, types in COLUMNS.items()
        }
        for tables in days:
            for name, table in tables.items():
                writers[name].write_table(table.cast(pa.schema(COLUMNS[name])), row_group_size=len(table))
                rows[name] += len(table)
    return rows


@click.command()
@click.option("--out", type=click.Path(path_type=Path), required=True, help="Folder to write.")
@click.option("--days", type=click.IntRange(1, 1000), default=365, show_default=True, help="Days of a first night.")
@click.option("--seed", default=1, show_default=True, help="Seed of the random generator.")
@click.option(
    "--after", type=click.Path(path_type=Path, exists=True), help="Write the night after that of this folder."
)
@click.option("--changed", type=click.FloatRange(0, 1), default=0.05, show_default=True, help="Share of days changed.")
def main(out: Path, days: int, seed: int, after: Path | None, changed: float) -> None:
    """Write a synthetic year as a network folder."""
    rows = write_year(out, days, seed) if after is None else write_next_night(out, after, changed, seed)
    for name, count in rows.items():
        click.echo(f"{name}: {count} rows")


if __name__ == "__main__":
    main()
