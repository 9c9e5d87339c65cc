"""A timetable as arrays of a network, and as the tables of a network folder."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc

from legworth.schedules.timetable import Timetable
from network import Legs, Stations
from network.arrays import IntArray, NameArray

__all__ = ["leg_table", "legs_of", "station_table", "stations_of"]


def stations_of(timetable: Timetable, minimum_connection: float) -> Stations:
    """Stations of a network; ``minimum_connection`` (minutes) holds where a station has none of its own."""
    places = timetable.places
    return Stations(
        name=places.name.copy(),
        label=np.where(places.label == "", places.name, places.label),
        latitude=places.latitude.copy(),
        longitude=places.longitude.copy(),
        minimum_connection=np.where(np.isnan(places.minimum_connection), minimum_connection, places.minimum_connection),
    )


def legs_of(timetable: Timetable, sold: IntArray) -> Legs:
    """Legs of a network, with (L,) seats sold."""
    return Legs(
        name=timetable.name.copy(),
        origin=timetable.origin.copy(),
        destination=timetable.destination.copy(),
        departs=timetable.departs.astype("datetime64[s]"),
        arrives=timetable.arrives.astype("datetime64[s]"),
        departs_offset=timetable.departs_offset.copy(),
        arrives_offset=timetable.arrives_offset.copy(),
        capacity=timetable.capacity.copy(),
        sold=sold.copy(),
    )


def station_table(timetable: Timetable) -> pd.DataFrame:
    """``stations.csv``."""
    places = timetable.places
    return pd.DataFrame(
        {
            "station": places.name,
            "name": pd.Series(places.label, dtype=object).replace("", None),
            "latitude": places.latitude,
            "longitude": places.longitude,
            "minimum_connection": places.minimum_connection,
            "timezone": pd.Series(places.timezone, dtype=object).replace("", None),
        }
    )


def leg_table(timetable: Timetable, sold: IntArray) -> pd.DataFrame:
    """``legs.csv``; the columns ``kind`` and ``through`` only where there is something to put there."""
    stations = pd.Index(timetable.places.name, dtype="str")
    columns = {
        "leg": timetable.name,
        "origin": pd.Categorical.from_codes(timetable.origin, categories=stations),
        "destination": pd.Categorical.from_codes(timetable.destination, categories=stations),
        "departs": _instants(timetable.departs, timetable.departs_offset),
        "arrives": _instants(timetable.arrives, timetable.arrives_offset),
        "capacity": timetable.capacity,
        "sold": sold,
    }
    if (timetable.kind != "").any():
        columns["kind"] = pd.Series(timetable.kind, dtype=object).replace("", None)
    if (timetable.through >= 0).any():
        columns["through"] = pd.Series(timetable.name[timetable.through], dtype=object).where(
            timetable.through >= 0, None
        )
    return pd.DataFrame(columns)


def _instants(utc: IntArray, offset: IntArray) -> NameArray:
    """ISO 8601 with offset, to the minute where there are no seconds."""
    moments, at_moment = np.unique(utc + offset * 60, return_inverse=True)
    texts = np.datetime_as_string(moments.astype("datetime64[s]"), unit="s" if (moments % 60).any() else "m")
    offsets, at_offset = np.unique(offset, return_inverse=True)
    ends = [f"{'-' if minutes < 0 else '+'}{abs(minutes) // 60:02d}:{abs(minutes) % 60:02d}" for minutes in offsets]
    parts = (pa.array(texts, pa.string()).take(pa.array(at_moment)), pa.array(ends).take(pa.array(at_offset)))
    joined = pc.binary_join_element_wise(*parts, "")
    return np.asarray(joined.to_numpy(zero_copy_only=False), dtype=object)
