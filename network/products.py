"""Products: fares joined with demand to come and booking curves, sorted by itinerary and fare class."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from network.arrays import FloatArray, IntArray, NameArray
from network.faults import Faults
from network.model import BookingCurves
from network.oddities import unlike_spellings, warn_of_demand
from network.reading import TableData
from network.routes import Paths, positions
from network.settings import NetworkSettings

__all__ = ["Products", "assemble_curves", "assemble_products"]


@dataclass(frozen=True)
class Products:
    """Products by position, in the order that `network.model.Network` fixes."""

    fare_classes: tuple[str, ...]
    itinerary: IntArray
    fare_class: IntArray
    fare: FloatArray
    mean: FloatArray
    deviation: FloatArray
    curve: IntArray


def assemble_curves(table: TableData | None, faults: Faults) -> BookingCurves | None:
    """Booking curves in order of first mention, each by falling days; notes curves that fall or end below 1.

    None if the table stands in the folder but cannot be read, as opposed to no table and so no curves.
    """
    if table is None and faults.concern("booking_curves"):
        return None
    if table is None:
        nothing = np.zeros(0)
        return BookingCurves(np.zeros(0, dtype=object), np.zeros(1, dtype=np.int64), nothing, nothing)
    frame = table.frame
    names = frame["curve"].dropna().unique().astype(object)
    names = np.asarray(names, dtype=object)
    code, _ = positions(frame["curve"], names)
    days, share = frame["days_before"].to_numpy(), frame["share"].to_numpy()
    order = np.lexsort((-days, code))
    order = order[code[order] >= 0]
    code, days, share = code[order], days[order], share[order]
    known = ~np.isnan(days)
    falls = (code[1:] == code[:-1]) & (share[1:] < share[:-1]) & known[1:] & known[:-1]
    faults.add_rows(
        table.file,
        np.flatnonzero(falls) + 1,
        lambda row: table.line_of(int(order[row])),
        "share",
        lambda row: (
            f"curve {names[code[row]]} falls from {share[row - 1]:.6g} at {days[row - 1]:g} days to "
            f"{share[row]:.6g} at {days[row]:g}; shares must rise towards departure"
        ),
    )
    start = np.searchsorted(code, np.arange(len(names) + 1))
    last = start[1:] - 1
    faulty = np.bincount(code, weights=~known | np.isnan(share), minlength=len(names)) > 0
    open_end = np.flatnonzero(~faulty & ((days[last] != 0) | (np.abs(share[last] - 1) > 1e-9)))
    faults.add_rows(
        table.file,
        open_end,
        lambda row: table.line_of(int(order[last[row]])),
        "share",
        lambda row: f"curve {names[row]} does not end with share 1 at day 0; add that row or correct it",
    )
    return BookingCurves(names, start, days, share)


def assemble_products(
    fares: TableData | None,
    demand: TableData | None,
    paths: Paths | None,
    curves: BookingCurves | None,
    settings: NetworkSettings | None,
    faults: Faults,
) -> Products | None:
    """Join fares and demand; notes unknown itineraries and curves, and demand without fare.

    Without readable itineraries fares and demand are still held against each other by name.
    """
    known_curve = _known_curves(demand, curves, faults)
    itineraries = _itineraries(paths, fares, demand)
    if fares is None:
        if demand is not None:
            _keys(demand, itineraries, (), faults)
        return None
    classes = _fare_classes(fares, settings, faults)
    fare_key, itinerary, fare_class = _keys(fares, itineraries, classes, faults)
    order = _sorting(fare_key)
    key = fare_key[order]
    amount = fares.frame["fare"].to_numpy()[order]
    _warn_rising_fares(fares, order, itinerary, fare_class, classes, faults)
    row: IntArray | None = np.full(len(key), -1)
    means, deviations = np.zeros(0), np.zeros(0)
    if demand is not None:
        means, deviations = demand.frame["mean"].to_numpy(), demand.frame["deviation"].to_numpy()
        warn_of_demand(demand, faults)
        row = _match_demand(fares, demand, itineraries, classes, key, order, faults)
    return Products(
        classes,
        itinerary[order].astype(np.int32),  # wide enough for the arithmetic that positions are put to
        fare_class[order],
        amount,
        mean=_taken(means, row, 0.0),
        deviation=_taken(deviations, row, 0.0),
        curve=_taken(known_curve, row, -1),
    )


def _taken(column: npt.NDArray[Any], row: IntArray | None, blank: float) -> npt.NDArray[Any]:
    """Figures of the rows given, ``blank`` where the row is -1; the column itself without rows."""
    return column if row is None else np.append(column, column.dtype.type(blank))[row]


def _sorting(key: IntArray) -> IntArray | slice:
    """Rows of known key in rising order, the first of equal ones alone; all of them as they stand if they rise."""
    if not len(key) or (key[0] >= 0 and np.all(key[1:] > key[:-1])):
        return slice(None)
    order = np.argsort(key, kind="stable")
    order = order[key[order] >= 0]
    return order[np.append(True, np.diff(key[order]) > 0)] if len(order) else order


def _known_curves(demand: TableData | None, curves: BookingCurves | None, faults: Faults) -> IntArray:
    """Position of the curve of every row of demand, -1 where there is none; notes unknown ones."""
    if demand is None:
        return np.zeros(0, dtype=np.int32)
    if curves is None:
        return np.full(len(demand), -1, dtype=np.int32)
    position, unknown = positions(demand.frame["curve"], curves.name)
    faults.add_rows(
        demand.file,
        np.flatnonzero(unknown),
        demand.line_of,
        "curve",
        lambda row: (
            f"{demand.frame['curve'].iloc[row]!r} is not a booking curve; add it to booking_curves.csv or leave blank"
        ),
    )
    return position


def _itineraries(paths: Paths | None, fares: TableData | None, demand: TableData | None) -> NameArray:
    """Names of the itineraries, or where their table cannot be read the names that products go by."""
    if paths is not None:
        return paths.name
    named = [table.frame["itinerary"].dropna().to_numpy(dtype=object) for table in (fares, demand) if table is not None]
    return np.unique(np.concatenate(named).astype(object)) if named else np.zeros(0, dtype=object)


def _fare_classes(fares: TableData, settings: NetworkSettings | None, faults: Faults) -> tuple[str, ...]:
    classes = fares.frame["fare_class"]
    named = tuple(str(name) for name in classes.dropna().unique())
    twins = unlike_spellings(list(named))
    faults.add_rows(
        fares.file,
        [int(np.argmax(classes == name)) for name in twins],
        fares.line_of,
        "fare_class",
        lambda row: (
            f"class {classes.iloc[row]!r} differs from {twins[classes.iloc[row]]!r} in capitals or blanks alone; write "
            "one name if they are one class"
        ),
        warning=True,
    )
    if settings is None or not settings.fare_classes:
        return named
    lacking = [name for name in named if name not in settings.fare_classes]
    faults.add_rows(
        fares.file,
        [int(np.argmax(classes == name)) for name in lacking],
        fares.line_of,
        "fare_class",
        lambda row: (
            f"{classes.iloc[row]!r} is not among the fare_classes of network.toml; "
            "add it there in its place, or correct it"
        ),
    )
    return named if lacking else settings.fare_classes


def _keys(
    table: TableData, itineraries: NameArray, classes: tuple[str, ...], faults: Faults
) -> tuple[IntArray, IntArray, IntArray]:
    """Key of every row of a product table (-1 where unknown), and its itinerary and class positions."""
    itinerary, unknown = positions(table.frame["itinerary"], itineraries)
    faults.add_rows(
        table.file,
        np.flatnonzero(unknown),
        table.line_of,
        "itinerary",
        lambda row: (
            f"{table.frame['itinerary'].iloc[row]!r} is not an itinerary; add it to itineraries.csv or correct the name"
        ),
    )
    fare_class, _ = positions(table.frame["fare_class"], np.array(classes, dtype=object))
    size = len(itineraries) * max(len(classes), 1)
    key: IntArray = itinerary.astype(np.int32 if size <= np.iinfo(np.int32).max else np.int64)
    np.multiply(key, max(len(classes), 1), out=key)
    np.add(key, fare_class, out=key)
    key[(itinerary < 0) | (fare_class < 0)] = -1
    return key, itinerary, fare_class


def _match_demand(
    fares: TableData,
    demand: TableData,
    itineraries: NameArray,
    classes: tuple[str, ...],
    key: IntArray,
    order: IntArray | slice,
    faults: Faults,
) -> IntArray | None:
    """Row of demand for every product, -1 where there is none; None if all rows belong to the products in turn."""
    demand_key, itinerary, _ = _keys(demand, itineraries, classes, faults)
    if np.array_equal(demand_key, key):
        return None
    complete = demand.frame["fare_class"].notna().to_numpy() & (itinerary >= 0)
    place = np.searchsorted(key, demand_key)
    found = np.append(key, -2)[place] == demand_key if len(key) else np.zeros(len(demand_key), dtype=bool)
    found &= demand_key >= 0
    faults.add_rows(
        demand.file,
        np.flatnonzero(complete & ~found),
        demand.line_of,
        "fare_class",
        lambda row: (
            f"{demand.frame['itinerary'].iloc[row]} {demand.frame['fare_class'].iloc[row]} has demand but no fare; "
            "add its fare to fares.csv or remove the row"
        ),
    )
    row = np.full(len(key), -1, dtype=np.int64)
    rows = np.flatnonzero(found)[::-1]
    row[place[rows]] = rows
    faults.add_rows(
        fares.file,
        np.arange(len(fares))[order][row < 0],
        fares.line_of,
        "fare_class",
        lambda at: (
            f"{fares.frame['itinerary'].iloc[at]} {fares.frame['fare_class'].iloc[at]} has a fare but no demand; "
            "its demand is taken as none"
        ),
        warning=True,
    )
    return row


def _warn_rising_fares(
    fares: TableData,
    order: IntArray | slice,
    itinerary: IntArray,
    fare_class: IntArray,
    classes: tuple[str, ...],
    faults: Faults,
) -> None:
    amount, itinerary = fares.frame["fare"].to_numpy()[order], itinerary[order]
    rising = np.flatnonzero((itinerary[1:] == itinerary[:-1]) & (amount[1:] > amount[:-1])) + 1
    faults.add_rows(
        fares.file,
        rising if isinstance(order, slice) else order[rising],
        fares.line_of,
        "fare",
        lambda row: f"class {classes[fare_class[row]]} costs more than the class above it on the same itinerary",
        warning=True,
    )
