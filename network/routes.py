"""Stations, legs and itineraries: from checked tables to arrays, and whether they fit each other."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute

from network.arrays import IntArray, NameArray
from network.counted import counted
from network.faults import Faults
from network.model import Legs, Stations, ranges
from network.reading import TableData
from network.settings import NetworkSettings

__all__ = ["Paths", "assemble_legs", "assemble_paths", "assemble_stations", "assemble_through", "positions"]


@dataclass(frozen=True)
class Paths:
    """Itineraries by position: names, and their legs in travel order (see `network.model.Network`)."""

    name: NameArray
    start: IntArray
    leg: IntArray


def positions(values: pd.Series, names: NameArray) -> tuple[IntArray, np.ndarray]:
    """Look names up.

    Parameters
    ----------
    values
        Text by category, as read.
    names
        Names by position; of equal ones the first counts.

    Returns
    -------
    position, unknown
        Position of every value, -1 where it is missing or unknown, and True where it is unknown.
    """
    codes, categories = values.cat.codes.to_numpy(), values.cat.categories
    if len(categories) >= len(names) > 0 and np.array_equal(categories[: len(names)].to_numpy(dtype=object), names):
        position = np.where(codes < len(names), codes, -1)
        return position, codes >= len(names)
    known = pa.array(names, pa.large_string(), from_pandas=True)
    found = pyarrow.compute.index_in(pa.array(categories, pa.large_string()), value_set=known)
    of_category = found.fill_null(-1).to_numpy(zero_copy_only=False)
    position = np.append(of_category, np.int32(-1))[codes]
    return position, (codes >= 0) & (position < 0)


def assemble_stations(table: TableData | None, settings: NetworkSettings | None) -> Stations | None:
    """Stations in file order, blank connection times filled from the settings."""
    if table is None:
        return None
    frame = table.frame
    default = settings.defaults.minimum_connection if settings else 0.0
    name = frame["station"].to_numpy(dtype=object)
    label = frame["name"].to_numpy(dtype=object)
    return Stations(
        name=name,
        label=np.where(pd.isna(label), name, label),
        latitude=frame["latitude"].to_numpy(copy=True),
        longitude=frame["longitude"].to_numpy(copy=True),
        minimum_connection=frame["minimum_connection"].fillna(default).to_numpy(copy=True),
    )


def assemble_legs(table: TableData | None, stations: Stations | None, faults: Faults) -> Legs | None:
    """Legs in file order; notes unknown stations, loops, arrivals before departure and overselling.

    Without a readable table of stations the other faults are noted all the same; so it is in the functions below.
    """
    if table is None:
        return None
    frame = table.frame
    ends = {}
    for column in ("origin", "destination"):
        ends[column], unknown = positions(frame[column], _names(stations))
        if stations is not None:
            _note_unknown_stations(table, column, unknown, faults)
    loop = frame["origin"].astype("str") == frame["destination"].astype("str")
    faults.add_rows(
        table.file,
        np.flatnonzero(loop),
        table.line_of,
        "destination",
        lambda row: f"the leg ends where it begins ({frame['origin'].iloc[row]}); correct one of the two",
    )
    departs, arrives = frame["departs"].to_numpy(), frame["arrives"].to_numpy()
    faults.add_rows(
        table.file,
        np.flatnonzero(arrives <= departs),
        table.line_of,
        "arrives",
        lambda row: "the leg arrives no later than it departs; correct the times or their offsets",
    )
    capacity = frame["capacity"].fillna(0).to_numpy(dtype=np.int64, copy=True)
    sold = frame["sold"].fillna(0).to_numpy(dtype=np.int64, copy=True)
    faults.add_rows(
        table.file,
        np.flatnonzero((sold > capacity) & frame["capacity"].notna().to_numpy()),
        table.line_of,
        "sold",
        lambda row: f"{counted(sold[row], 'seat is', 'seats are')} sold of {capacity[row]:,}; no seats remain",
        warning=True,
    )
    return Legs(
        name=frame["leg"].to_numpy(dtype=object),
        origin=ends["origin"],
        destination=ends["destination"],
        departs=departs.astype("datetime64[s]"),
        arrives=arrives.astype("datetime64[s]"),
        departs_offset=frame["departs_offset"].to_numpy(copy=True),
        arrives_offset=frame["arrives_offset"].to_numpy(copy=True),
        capacity=capacity,
        sold=sold,
    )


def assemble_through(table: TableData | None, legs: Legs | None, faults: Faults) -> IntArray | None:
    """Position of the leg that the same vehicle runs next, (L,), -1 where there is none.

    Notes next legs that are unknown, begin at another station, or leave before the vehicle is there.
    """
    if table is None or legs is None:
        return None
    through, unknown = positions(table.frame["through"], legs.name)
    named = np.flatnonzero(through >= 0)
    ends, begins = legs.destination[named], legs.origin[through[named]]
    elsewhere = (ends != begins) & (ends >= 0) & (begins >= 0)
    early = (legs.departs[through[named]] < legs.arrives[named]) & ~elsewhere

    def note(rows: IntArray, problem: str) -> None:
        def quoting(row: int) -> str:
            return f"{table.frame['through'].iloc[row]!r} {problem}"

        faults.add_rows(table.file, rows, table.line_of, "through", quoting)

    note(np.flatnonzero(unknown), "is not a leg; add it to legs.csv, correct the name or leave it blank")
    note(named[elsewhere], "does not begin where this leg ends; correct the name or leave it blank")
    note(named[early], "leaves before this leg arrives; correct the times, or leave the name blank")
    return through


def _names(table: Stations | Legs | None) -> NameArray:
    return np.zeros(0, dtype=object) if table is None else table.name


def _note_unknown_stations(table: TableData, column: str, unknown: np.ndarray, faults: Faults) -> None:
    values = table.frame[column]
    faults.add_rows(
        table.file,
        np.flatnonzero(unknown),
        table.line_of,
        column,
        lambda row: f"{values.iloc[row]!r} is not a station; add it to stations.csv or correct the name",
    )


def assemble_paths(
    table: TableData | None,
    legs: Legs | None,
    stations: Stations | None,
    faults: Faults,
    through: IntArray | None = None,
) -> Paths | None:
    """Itineraries in file order; notes unknown or repeated legs, and legs that do not connect.

    No time is needed to connect where ``through``, (L,), says that the next leg is run by the same vehicle.
    """
    if table is None:
        return None
    start, names = _split_names(table.frame["legs"])
    leg, unknown = positions(names, _names(legs))
    owner = np.repeat(np.arange(len(table)), np.diff(start))
    if legs is not None:
        faults.add_rows(
            table.file,
            np.flatnonzero(unknown),
            lambda at: table.line_of(int(owner[at])),
            "legs",
            lambda at: f"{names.iloc[at]!r} is not a leg; add it to legs.csv or correct the name",
        )
    if legs is not None and stations is not None:
        _check_connections(table, legs, stations, leg, owner, through, faults)
    return Paths(table.frame["itinerary"].to_numpy(dtype=object), start, leg)


def _split_names(values: pd.Series) -> tuple[IntArray, pd.Series]:
    """Split cells at white space: where the names of each cell begin, (n + 1,), and all names, by category."""
    words = pyarrow.compute.utf8_split_whitespace(pa.array(values.cat.categories, pa.large_string()))
    word, owner = words.flatten(), pyarrow.compute.list_parent_indices(words).to_numpy()
    full = pyarrow.compute.not_equal(word, "")
    length = np.bincount(owner[full.to_numpy(zero_copy_only=False)], minlength=len(words))
    begin = np.cumsum(length) - length
    codes = values.cat.codes.to_numpy()
    filled = codes[codes >= 0]
    count = np.where(codes >= 0, np.append(length, 0)[codes], 0)
    of_category = word.filter(full).dictionary_encode().to_pandas()
    names = of_category.iloc[ranges(begin[filled], length[filled])]
    return np.concatenate([[0], np.cumsum(count)]), names


def _check_connections(
    table: TableData,
    legs: Legs,
    stations: Stations,
    leg: IntArray,
    owner: IntArray,
    through: IntArray | None,
    faults: Faults,
) -> None:
    """Note consecutive legs of an itinerary that do not meet, or leave too little time to connect."""
    at = np.flatnonzero(owner[1:] == owner[:-1])
    at = at[(leg[at] >= 0) & (leg[at + 1] >= 0)]
    first, second = leg[at], leg[at + 1]
    meets = legs.destination[first] == legs.origin[second]
    known = (legs.destination[first] >= 0) & (legs.origin[second] >= 0)

    def line(row: int) -> int:
        return table.line_of(int(owner[at[row]]))

    def station(position: int) -> str:
        return str(stations.name[position])

    faults.add_rows(
        table.file,
        np.flatnonzero(known & ~meets),
        line,
        "legs",
        lambda row: (
            f"{legs.name[first[row]]} ends at {station(legs.destination[first[row]])} but {legs.name[second[row]]} "
            f"begins at {station(legs.origin[second[row]])}; legs must meet, in travel order"
        ),
    )
    minutes = (legs.departs[second] - legs.arrives[first]).astype("timedelta64[s]").astype(np.float64) / 60
    timed = ~np.isnat(legs.departs[second]) & ~np.isnat(legs.arrives[first])
    needed = stations.minimum_connection[legs.destination[first]]
    if through is not None:
        needed = np.where(through[first] == second, 0.0, needed)
    short = known & meets & timed & (minutes < needed)
    faults.add_rows(
        table.file,
        np.flatnonzero(short),
        line,
        "legs",
        lambda row: (
            f"{minutes[row]:.6g} minutes between {legs.name[first[row]]} and {legs.name[second[row]]}, but "
            f"{station(legs.destination[first[row]])} needs {needed[row]:.6g}; drop the itinerary or correct the times"
        ),
    )
