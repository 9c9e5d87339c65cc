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
from network.products import assemble_curves, assemble_products
from network.reading import TableData, read_table
from network.routes import Paths, assemble_legs, assemble_paths, assemble_stations, assemble_through
from network.schema import input_schemas
from network.settings import read_settings

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
    stations = assemble_stations(table("stations"), settings)
    leg_table = table("legs")
    legs = assemble_legs(leg_table, stations, faults)
    through = assemble_through(leg_table, legs, faults)
    paths, history_name = _paths_and_history(table("itineraries"), legs, stations, faults, through)
    curves = assemble_curves(table("booking_curves"), faults)
    known = _distinct(paths.name) if paths else {}
    products = assemble_products(table("fares", known), table("demand", known), paths, curves, settings, faults)
    del known
    pa.default_memory_pool().release_unused()
    faults.raise_errors()
    if not (settings and stations and leg_table and legs and paths and products) or curves is None:
        raise AssertionError("a table is absent although no fault was noted")
    network = Network(
        name=settings.name,
        currency=settings.currency,
        as_of=settings.as_of,
        stations=stations,
        legs=legs,
        remaining=_remaining(leg_table, legs, settings.as_of, faults),
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
    _warn_unused_legs(leg_table, legs, paths, faults)
    return ReadResult(network, tuple(faults.warnings), history_name)


def _paths_and_history(
    table: TableData | None, legs: Legs | None, stations: Stations | None, faults: Faults, through: IntArray | None
) -> tuple[Paths | None, NameArray]:
    """Itineraries, and the names under which history holds them: their own where the table gives none."""
    paths = assemble_paths(table, legs, stations, faults, through)
    if table is None or paths is None:
        return None, np.zeros(0, dtype=object)
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


def _remaining(table: TableData, legs: Legs, as_of: datetime, faults: Faults) -> IntArray:
    """Seats still for sale: none where a leg is sold out or has departed by the snapshot."""
    instant = np.datetime64(as_of.replace(tzinfo=None), "s") - np.timedelta64(as_of.utcoffset() or timedelta(), "s")
    departed = legs.departs <= instant
    faults.add_rows(
        table.file,
        np.flatnonzero(departed),
        table.line_of,
        "departs",
        lambda row: f"{legs.name[row]} has departed by the snapshot (as_of); none of its seats is for sale",
        warning=True,
    )
    return np.where(departed, 0, np.maximum(legs.capacity - legs.sold, 0))


def _warn_unused_legs(table: TableData, legs: Legs, paths: Paths, faults: Faults) -> None:
    unused = np.flatnonzero(np.bincount(paths.leg, minlength=len(legs)) == 0)
    faults.add_rows(
        table.file,
        unused,
        table.line_of,
        "leg",
        lambda row: f"{legs.name[row]} belongs to no itinerary; nothing is sold on it and its bid price is 0",
        warning=True,
    )
