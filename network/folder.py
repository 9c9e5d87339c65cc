"""A network folder: read every table, check them against each other, and assemble one `Network`."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime, timedelta
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa

from network.arrays import IntArray, NameArray
from network.demand import Demand
from network.errors import InputError
from network.faults import Fault, Faults
from network.model import Legs, Network, Stations
from network.oddities import (
    Place,
    warn_of_departed_legs,
    warn_of_legs,
    warn_of_same_legs,
    warn_of_stations,
    warn_of_unsold_itineraries,
    warn_of_unused_legs,
)
from network.products import Products, assemble_curves, assemble_products
from network.reading import TableData, read_table
from network.routes import Paths, assemble_legs, assemble_paths, assemble_stations, assemble_through
from network.schema import input_schemas
from network.settings import FILE as SETTINGS
from network.settings import line_of_setting, read_settings

__all__ = ["ReadResult", "read_folder"]

DEMAND_TABLES = ("demand", "booking_curves")


@dataclass(frozen=True)
class ReadResult:
    """A network and what was odd, though not wrong, about its tables.

    ``history_name``, (I,), is the name under which booking history holds each itinerary.
    """

    network: Network
    warnings: tuple[Fault, ...]
    history_name: NameArray


def read_folder(folder: Path | str, *, with_demand: bool = True) -> ReadResult:
    """Read a network folder.

    Parameters
    ----------
    folder
        A directory with ``network.toml`` and the tables, CSV or Parquet.
    with_demand
        Whether demand and booking curves are read; without them, whether there or not, no product has any demand.

    Returns
    -------
    ReadResult
        The network and the warnings.

    Raises
    ------
    InputError
        With every fault of every table, before anything is computed.
    """
    folder = Path(folder)
    problem = _unopened(folder)
    if problem:
        raise InputError([Fault(str(folder), 0, "", problem)])
    faults = Faults()
    settings = read_settings(folder, faults)

    def table(name: str, known: Mapping[str, pd.Index[str]] | None = None) -> TableData | None:
        wanted = with_demand or name not in DEMAND_TABLES
        return read_table(folder, input_schemas()[name], faults, known) if wanted else None

    # Large tables are read when they are needed and let go once assembled, so that they are not all held at once.
    station_table = table("stations")
    stations = assemble_stations(station_table, settings)
    leg_table = table("legs")
    legs = assemble_legs(leg_table, stations, faults)
    through = assemble_through(leg_table, legs, faults)
    itinerary_table = table("itineraries")
    paths, history_name = _paths_and_history(itinerary_table, legs, stations, faults, through)
    itinerary_place = Place.of(itinerary_table) if itinerary_table else None
    del itinerary_table
    curves = assemble_curves(table("booking_curves"), faults)
    known = _distinct(paths.name) if paths else {}
    products = assemble_products(table("fares", known), table("demand", known), paths, curves, settings, faults)
    del known
    pa.default_memory_pool().release_unused()
    faults.raise_errors()
    if (
        not (settings and stations and station_table and leg_table and legs)
        or not (paths and itinerary_place and products)
        or curves is None
    ):
        raise AssertionError("a table is absent although no fault was noted")
    departed = legs.departs <= _utc(settings.as_of)
    network = Network(
        name=settings.name,
        currency=settings.currency,
        as_of=settings.as_of,
        stations=stations,
        legs=legs,
        remaining=np.where(departed, 0, np.maximum(legs.capacity - legs.sold, 0)),
        itinerary=paths.name,
        path_start=paths.start,
        path_leg=paths.leg,
        fare_classes=products.fare_classes,
        product_itinerary=products.itinerary,
        product_class=products.fare_class,
        fare=products.fare,
        demand=Demand.of(products.mean, products.deviation, settings.defaults.demand_family),
        curve=products.curve,
        curves=curves,
    )
    warn_of_stations(station_table, faults)
    warn_of_legs(leg_table, legs, faults)
    warn_of_departed_legs(leg_table, departed, lambda: line_of_setting(folder, "as_of"), faults)
    warn_of_unused_legs(leg_table, legs, paths, faults)
    warn_of_unsold_itineraries(itinerary_place, paths.name, products.itinerary, faults)
    _warn_of_unsold_classes(folder, products, faults)
    return ReadResult(network, tuple(faults.warnings), history_name)


def _paths_and_history(
    table: TableData | None, legs: Legs | None, stations: Stations | None, faults: Faults, through: IntArray | None
) -> tuple[Paths | None, NameArray]:
    """Itineraries, and the names under which history holds them: their own where the table gives none."""
    paths = assemble_paths(table, legs, stations, faults, through)
    if table is None or paths is None:
        return None, np.zeros(0, dtype=object)
    warn_of_same_legs(table, faults)
    given = table.frame["history_name"]
    if given.isna().all():
        return paths, paths.name
    return paths, np.where(given.isna(), paths.name, given.to_numpy(dtype=object))


def _distinct(itinerary: NameArray) -> dict[str, pd.Index[str]]:
    """Names of the itineraries for the reading of other tables; none where some are missing or stand twice."""
    names = pd.Index(itinerary, dtype=object)
    return {"itinerary": names} if names.is_unique and not names.hasnans else {}


def _unopened(folder: Path) -> str:
    """Say why a folder cannot be opened, and what would mend it; nothing if it can."""
    try:
        if not folder.is_dir():
            if folder.exists():
                return "is a file; name the folder that holds the tables"
            return "there is no such folder; correct its name"
        (folder / "network.toml").exists()
    except (OSError, ValueError) as error:
        return f"cannot be opened ({getattr(error, 'strerror', error)}); correct its name or its permissions"
    return ""


def _utc(instant: datetime) -> np.datetime64:
    offset = instant.utcoffset() or timedelta()
    return np.datetime64(instant.replace(tzinfo=None), "s") - np.timedelta64(offset, "s")


def _warn_of_unsold_classes(folder: Path, products: Products, faults: Faults) -> None:
    """Warn of fare classes that network.toml names and no fare is in."""
    count = np.bincount(products.fare_class, minlength=len(products.fare_classes))
    unsold = [name for name, fares in zip(products.fare_classes, count.tolist(), strict=True) if not fares]
    faults.add_rows(
        SETTINGS,
        range(len(unsold)),
        lambda _: line_of_setting(folder, "fare_classes"),
        "fare_classes",
        lambda at: f"no fare is in class {unsold[at]!r}; correct its name, add its fares, or take it out of the list",
        warning=True,
    )
