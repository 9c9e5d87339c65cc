"""A network folder from a timetable: stations, legs and itineraries written together, the other tables left alone."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import dataclass
from datetime import datetime
from functools import partial
from pathlib import Path

import numpy as np
import pandas as pd

from legworth.placing import folder_aside, place_together
from legworth.schedules.connection_tables import itinerary_table, wanted_pairs
from legworth.schedules.connections import Connections, build_connections
from legworth.schedules.timetable import Timetable
from legworth.schedules.timetable_tables import leg_table, legs_of, station_table, stations_of
from legworth.writing import write_table
from network import InputError, Legs, SettingError, Stations, input_schemas
from network.arrays import IntArray, NameArray
from network.connection_settings import ConnectionRules
from network.faults import Faults
from network.reading import read_table
from network.settings import NetworkSettings, read_settings

__all__ = ["FolderOptions", "MadeFolder", "make_folder"]

NO_CURRENCY = "XXX"
"""The code of ISO 4217 for transactions without a currency."""


@dataclass(frozen=True)
class FolderOptions:
    """How a folder is made.

    Attributes
    ----------
    name, currency, as_of
        For ``network.toml`` if the folder has none.
    itineraries
        Whether legs are joined into itineraries too.
    all_pairs
        Whether itineraries between stations are made even where the folder sells and expects nothing there.
    """

    name: str
    currency: str
    as_of: datetime
    itineraries: bool = True
    all_pairs: bool = False


@dataclass(frozen=True, eq=False)
class MadeFolder:
    """What was written.

    Attributes
    ----------
    files
        Names of the files.
    connections
        The itineraries; None if none were made.
    kept_sold
        Legs whose seats sold were taken over from the folder's own legs.
    lost_sold
        Names of legs with seats sold that the schedule no longer has.
    without_itinerary
        Rows of fares and demand whose itinerary is no longer there.
    new_settings
        True if ``network.toml`` was written.
    """

    files: tuple[str, ...]
    connections: Connections | None
    kept_sold: int
    lost_sold: NameArray
    without_itinerary: dict[str, int]
    new_settings: bool


def make_folder(
    out: Path,
    timetable: Timetable,
    options: FolderOptions,
    progress: Callable[[int, int], None] | None = None,
) -> MadeFolder:
    """Write ``stations.csv``, ``legs.csv`` and ``itineraries.csv``, and ``network.toml`` if there is none.

    Everything is read and computed first, written into a hidden folder, and moved into place at the end. Other tables
    stay as they are. Legs that the folder had already keep their seats sold.

    Parameters
    ----------
    out
        The folder; made if it is not there.
    timetable
        Legs by date.
    options
        Settings of a new folder, and whether itineraries are made.
    progress
        Is told how far itineraries are.

    Raises
    ------
    InputError
        If the folder's own tables or settings are at fault.
    SettingError
        If it cannot be written.
    """
    faults = Faults()
    try:
        if out.exists() and not out.is_dir():
            raise SettingError(f"{out} is a file; name a folder")
        new_settings = not (out / "network.toml").exists()
        settings = _new_settings(options) if new_settings else read_settings(out, faults)
        sold, lost, kept = _sold(out, timetable, faults)
        if settings is None or faults.errors:
            raise InputError(faults.errors)
        connections, tables = None, {}
        tables["stations"] = station_table(timetable)
        tables["legs"] = leg_table(timetable, sold)
        without = {}
        if options.itineraries:
            legs, stations = legs_of(timetable, sold), stations_of(timetable, settings.defaults.minimum_connection)
            wanted = None if options.all_pairs else wanted_pairs(out, stations, faults)
            faults.raise_errors()
            connections = _connections(timetable, legs, stations, settings.connections, wanted, progress)
            tables["itineraries"] = itinerary_table(connections, legs)
            without = _without_itinerary(out, tables["itineraries"]["itinerary"].to_numpy(dtype=object))
    except OSError as error:
        raise SettingError(f"cannot read {out} ({error.strerror}); name another folder") from error
    _write(out, tables, _settings_text(settings) if new_settings else None)
    files = (*(f"{name}.csv" for name in tables), *(("network.toml",) if new_settings else ()))
    return MadeFolder(files, connections, kept, lost, without, new_settings)


def _connections(
    timetable: Timetable,
    legs: Legs,
    stations: Stations,
    rules: ConnectionRules,
    wanted: IntArray | None,
    progress: Callable[[int, int], None] | None,
) -> Connections:
    """Itineraries between the stations wanted on which passengers may be carried."""
    traffic = timetable.traffic
    return build_connections(
        legs,
        stations,
        rules,
        kind=timetable.kind,
        through=timetable.through,
        wanted=wanted,
        permitted=partial(traffic.permitted, timetable.through) if traffic.restricted else None,
        recurring=timetable.recurring,
        progress=progress,
    )


def _new_settings(options: FolderOptions) -> NetworkSettings:
    if options.as_of.tzinfo is None:
        raise SettingError(f"{options.as_of} has no offset from UTC; write 2027-03-01T06:40+01:00")
    for label, text, longest in (("--name", options.name, 200), ("--currency", options.currency, 20)):
        if not 1 <= len(text) <= longest:
            raise SettingError(f"{label} must have 1 to {longest} letters; correct it")
    return NetworkSettings(name=options.name, currency=options.currency, as_of=options.as_of)


def _settings_text(settings: NetworkSettings) -> str:
    """Text of a new ``network.toml``; JSON strings are TOML strings."""
    values = {
        "name": settings.name,
        "currency": settings.currency,
        "as_of": settings.as_of.isoformat(timespec="minutes"),
    }
    return "".join(f"{key} = {json.dumps(value, ensure_ascii=False)}\n" for key, value in values.items())


def _sold(out: Path, timetable: Timetable, faults: Faults) -> tuple[IntArray, NameArray, int]:
    """Seats sold by the folder's own legs, names of those gone with seats sold, and how many were taken over."""
    sold = np.zeros(len(timetable), dtype=np.int64)
    nothing: NameArray = np.zeros(0, dtype=object)
    if not any((out / f"legs.{ending}").exists() for ending in ("csv", "parquet")):
        return sold, nothing, 0
    table = read_table(out, input_schemas()["legs"], faults)
    if table is None or faults.errors:
        return sold, nothing, 0
    names = table.frame["leg"].to_numpy(dtype=object)
    theirs = table.frame["sold"].to_numpy(dtype=np.int64)
    at = pd.Index(timetable.name, dtype=object).get_indexer(pd.Index(names, dtype=object))
    sold[at[at >= 0]] = theirs[at >= 0]
    return sold, names[(at < 0) & (theirs > 0)], int((at >= 0).sum())


def _without_itinerary(out: Path, itineraries: NameArray) -> dict[str, int]:
    """Count rows of fares and demand whose itinerary is not there."""
    found = {}
    for name in ("fares", "demand"):
        if any((out / f"{name}.{ending}").exists() for ending in ("csv", "parquet")):
            table = read_table(out, input_schemas()[name], Faults())
            if table is not None:
                known = pd.Index(itineraries, dtype=object)
                count = int((~table.frame["itinerary"].astype(object).isin(known)).sum())
                if count:
                    found[table.file] = count
    return found


def _write(out: Path, tables: dict[str, pd.DataFrame], settings: str | None) -> None:
    """Write all files aside, then move them into place together; tables of the same names in Parquet go."""
    names = [*(f"{name}.csv" for name in tables), *(["network.toml"] if settings is not None else [])]
    with folder_aside(out, names) as aside:
        for name, frame in tables.items():
            write_table(aside / f"{name}.csv", frame)
        if settings is not None:
            (aside / "network.toml").write_text(settings, encoding="utf-8")
        place_together(aside, out, names, [f"{name}.parquet" for name in tables])
