"""A network folder: read every table, check them against each other, and assemble one `Network`."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime, timedelta
from pathlib import Path

import numpy as np

from network.arrays import IntArray
from network.demand import Demand
from network.errors import InputError
from network.faults import Fault, Faults
from network.model import Legs, Network
from network.products import assemble_curves, assemble_products
from network.reading import TableData, read_table
from network.routes import Paths, assemble_legs, assemble_paths, assemble_stations
from network.schema import input_schemas
from network.settings import read_settings

__all__ = ["ReadResult", "read_folder"]


@dataclass(frozen=True)
class ReadResult:
    """A network and what was odd, though not wrong, about its tables."""

    network: Network
    warnings: tuple[Fault, ...]


def read_folder(folder: Path | str) -> ReadResult:
    """Read a network folder.

    Parameters
    ----------
    folder
        A directory with ``network.toml`` and the tables, CSV or Parquet.

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
    tables = {name: read_table(folder, schema, faults) for name, schema in input_schemas().items()}
    stations = assemble_stations(tables["stations"], settings)
    legs = assemble_legs(tables["legs"], stations, faults)
    paths = assemble_paths(tables["itineraries"], legs, stations, faults)
    curves = assemble_curves(tables["booking_curves"], faults)
    products = assemble_products(tables["fares"], tables["demand"], paths, curves, settings, faults)
    faults.raise_errors()
    if not (settings and stations and legs and paths and products and tables["legs"]) or curves is None:
        raise AssertionError("a table is absent although no fault was noted")
    network = Network(
        name=settings.name,
        currency=settings.currency,
        as_of=settings.as_of,
        stations=stations,
        legs=legs,
        remaining=_remaining(tables["legs"], legs, settings.as_of, faults),
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
    _warn_unused_legs(tables["legs"], legs, paths, faults)
    return ReadResult(network, tuple(faults.warnings))


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
