"""A part as a network folder of its own: its input tables as Parquet, and its ``network.toml``.

What `network.read_folder` makes of such a folder is the part again, array by array.
"""

from __future__ import annotations

import json

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute
import pyarrow.parquet

from network import Network
from network.arrays import IntArray, NameArray, TimeArray
from network.model import ranges

__all__ = ["INPUT_TABLES", "input_tables", "parquet_bytes", "product_names", "settings_text", "used_curves"]

INPUT_TABLES = ("stations", "legs", "itineraries", "fares", "demand", "booking_curves")
COMPRESSION = "zstd"


def parquet_bytes(table: pa.Table | pd.DataFrame) -> bytes:
    """Write a table as Parquet; the same table gives the same bytes with the same libraries."""
    if isinstance(table, pd.DataFrame):
        table = pa.Table.from_pandas(table, preserve_index=False)
    sink = pa.BufferOutputStream()
    # Named metadata would carry versions and an index that nobody asked for.
    plain = table.replace_schema_metadata(None)
    figures = [field.name for field in plain.schema if pa.types.is_floating(field.type)]
    pyarrow.parquet.write_table(
        plain,
        sink,
        compression=COMPRESSION,
        use_dictionary=[name for name in plain.column_names if name not in figures],
        use_byte_stream_split=figures,
    )
    return bytes(sink.getvalue())


def settings_text(network: Network, demand_family: str) -> str:
    """Text of ``network.toml``; the family of demands asked for is the one setting that arrays do not carry."""
    return "\n".join(
        [
            f"name = {_quoted(network.name)}",
            f"currency = {_quoted(network.currency)}",
            f"as_of = {_quoted(network.as_of.isoformat())}",
            f"fare_classes = [{', '.join(_quoted(name) for name in network.fare_classes)}]",
            "",
            "[defaults]",
            f"demand_family = {_quoted(demand_family)}",
            "",
        ]
    )


def _quoted(text: str) -> str:
    """Write a TOML basic string: JSON's escapes are among TOML's, but for the delete character."""
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007f")


def input_tables(network: Network) -> dict[str, pa.Table]:
    """Tables of a part: the stations and booking curves that it uses, and all else that it holds.

    The least connection time of a station is lowered to the shortest connection that the part sells there, where
    that is shorter: vehicles that passengers stay on need no time, and the tables must hold by themselves.
    """
    tables = {
        "stations": _stations(network),
        "legs": _legs(network),
        "itineraries": _itineraries(network),
        "fares": pa.table({**product_names(network), "fare": network.fare}),
        "demand": _demand(network),
    }
    curves = used_curves(network)
    if len(curves):
        tables["booking_curves"] = _curves(network, curves)
    return tables


def used_curves(network: Network) -> IntArray:
    """Rising positions of the booking curves that products of the network use."""
    found = np.unique(network.curve)
    return found[found >= 0]


def _named(names: NameArray, position: IntArray) -> pa.DictionaryArray:
    """Names by position, of which only those that occur are kept."""
    kept, codes = np.unique(position, return_inverse=True)
    values = pa.array(names[kept].astype("str"), pa.string())
    return pa.DictionaryArray.from_arrays(pa.array(codes.ravel().astype(np.int32)), values)


def _text(names: NameArray) -> pa.Array:
    return pa.array(names.astype("str"), pa.string())


def _stations(network: Network) -> pa.Table:
    stations, legs = network.stations, network.legs
    used = np.unique(np.concatenate([legs.origin, legs.destination]))
    return pa.table(
        {
            "station": _text(stations.name[used]),
            "name": _text(stations.label[used]),
            "latitude": pa.array(stations.latitude[used], from_pandas=True),
            "longitude": pa.array(stations.longitude[used], from_pandas=True),
            "minimum_connection": np.minimum(stations.minimum_connection, _shortest_connections(network))[used],
        }
    )


def _shortest_connections(network: Network) -> np.ndarray:
    """(stations,) least minutes between two legs of an itinerary there, infinite where nobody connects."""
    legs, path = network.legs, network.path_leg
    inner = np.ones(len(path), dtype=bool)
    inner[network.path_start[1:] - 1] = False
    before = np.flatnonzero(inner)
    first, second = path[before], path[before + 1]
    wait = (legs.departs[second] - legs.arrives[first]).astype("timedelta64[s]").astype(np.float64) / 60
    shortest = np.full(len(network.stations), np.inf)
    np.minimum.at(shortest, legs.destination[first], np.maximum(wait, 0.0))
    return shortest


def _legs(network: Network) -> pa.Table:
    legs, station = network.legs, network.stations.name
    return pa.table(
        {
            "leg": _text(legs.name),
            "origin": _named(station, legs.origin),
            "destination": _named(station, legs.destination),
            "departs": _instants(legs.departs, legs.departs_offset),
            "arrives": _instants(legs.arrives, legs.arrives_offset),
            "capacity": pa.array(legs.capacity.astype(np.int64)),
            "sold": pa.array(legs.sold.astype(np.int64)),
        }
    )


def _instants(instant: TimeArray, offset: IntArray) -> pa.Array:
    """ISO 8601 text with offset."""
    local = np.datetime_as_string((instant + offset.astype("timedelta64[m]")).astype("datetime64[s]"))
    kinds, code = np.unique(offset, return_inverse=True)
    zones = [f"{'-' if o < 0 else '+'}{abs(o) // 60:02d}:{abs(o) % 60:02d}" for o in kinds.tolist()]
    return pa.array(np.char.add(local, np.array(zones, dtype="str")[code.ravel()]), pa.string())


def _itineraries(network: Network) -> pa.Table:
    names = pa.array(network.legs.name[network.path_leg].astype("str"), pa.string())
    lists = pa.ListArray.from_arrays(pa.array(network.path_start.astype(np.int32)), names)
    return pa.table({"itinerary": _text(network.itinerary), "legs": pa.compute.binary_join(lists, " ")})


def product_names(network: Network) -> dict[str, pa.Array]:
    """Columns ``itinerary`` and ``fare_class`` of every product."""
    classes = np.array(network.fare_classes, dtype=object)
    return {
        "itinerary": _named(network.itinerary, network.product_itinerary),
        "fare_class": _named(classes, network.product_class),
    }


def _demand(network: Network) -> pa.Table:
    columns = {**product_names(network), "mean": network.demand.mean, "deviation": network.demand.deviation}
    if np.any(network.curve >= 0):
        position = np.maximum(network.curve, 0)
        names = _named(network.curves.name, position)
        known = pa.array(network.curve >= 0)
        codes = pa.compute.if_else(known, names.indices, pa.scalar(None, names.indices.type))
        columns["curve"] = pa.DictionaryArray.from_arrays(codes, names.dictionary)
    return pa.table(columns)


def _curves(network: Network, used: IntArray) -> pa.Table:
    curves = network.curves
    length = np.diff(curves.start)[used]
    rows = ranges(np.asarray(curves.start[:-1])[used], length)
    return pa.table(
        {
            "curve": _named(curves.name, np.repeat(used, length)),
            "days_before": curves.days_before[rows],
            "share": curves.share[rows],
        }
    )
