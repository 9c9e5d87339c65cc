"""What is odd about the tables of a network folder, though not wrong: prices can be computed, yet a slip is likely."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from network.arrays import BoolArray, IntArray, NameArray
from network.faults import Faults
from network.model import Legs
from network.reading import TableData
from network.routes import Paths
from network.time_zones import zone_named

__all__ = [
    "Place",
    "unlike_spellings",
    "warn_of_demand",
    "warn_of_departed_legs",
    "warn_of_legs",
    "warn_of_same_legs",
    "warn_of_stations",
    "warn_of_unsold_itineraries",
    "warn_of_unused_legs",
]

LONGEST = np.timedelta64(24, "h")
"""Time that a leg takes at most, unless it is a long crossing: above it, a slip in a date is more likely."""


@dataclass(frozen=True)
class Place:
    """Where the rows of a table stand, without the table: its file and the line of each row."""

    file: str
    line_of: Callable[[int], int]

    @classmethod
    def of(cls, table: TableData) -> Place:
        """Place of a table that is about to be let go."""
        return cls(table.file, table.line_of)

    def warn(self, faults: Faults, odd: BoolArray, column: str, problem: Callable[[int], str]) -> None:
        """Warn of each row that is odd."""
        faults.add_rows(self.file, np.flatnonzero(odd), self.line_of, column, problem, warning=True)


def warn_of_stations(table: TableData, faults: Faults) -> None:
    """Warn of half a position, and of time zones that the IANA data does not have."""
    frame, place = table.frame, Place.of(table)
    without = {name: frame[name].isna().to_numpy() for name in ("latitude", "longitude")}
    for given, lacking in (("latitude", "longitude"), ("longitude", "latitude")):
        problem = f"has a {given} but no {lacking}, so that its place is not known; give both or neither"
        place.warn(faults, ~without[given] & without[lacking], lacking, _of_row(frame["station"], problem))
    zones = frame["timezone"]
    unknown = [name for name in zones.cat.categories if zone_named(str(name)) is None]
    place.warn(
        faults,
        zones.isin(unknown).to_numpy(),
        "timezone",
        lambda row: (
            f"{zones.iloc[row]!r} is no time zone of the IANA database; write one like Europe/Berlin, or leave it blank"
        ),
    )


def _of_row(names: object, problem: str) -> Callable[[int], str]:
    return lambda row: f"{names.iloc[row]} {problem}"  # type: ignore[attr-defined]


def warn_of_legs(table: TableData, legs: Legs, faults: Faults) -> None:
    """Warn of legs that take more than a day, as a slip in a date makes them."""
    hours = (legs.arrives - legs.departs).astype("timedelta64[s]").astype(np.int64) / 3600
    Place.of(table).warn(
        faults,
        legs.arrives - legs.departs > LONGEST,
        "arrives",
        lambda row: f"the leg takes {round(hours[row], 1):,.10g} hours; if it does not, correct a date or an offset",
    )


def warn_of_departed_legs(table: TableData, departed: BoolArray, as_of_line: Callable[[], int], faults: Faults) -> None:
    """Warn of legs that have departed by the snapshot, one by one, or of all of them in one line."""
    if departed.all():
        problem = (
            f"every leg of {table.file} ({len(departed):,}) has departed by the snapshot, so that nothing is for sale; "
            "correct as_of, or give the legs still to depart"
        )
        faults.add("network.toml", as_of_line(), "as_of", problem, warning=True)
        return
    name = table.frame["leg"]
    problem = "has departed by the snapshot (as_of); none of its seats is for sale"
    Place.of(table).warn(faults, departed, "departs", _of_row(name, problem))


def warn_of_unused_legs(table: TableData, legs: Legs, paths: Paths, faults: Faults) -> None:
    """Warn of legs on which nothing is sold."""
    unused = np.bincount(paths.leg, minlength=len(legs)) == 0
    problem = "belongs to no itinerary; nothing is sold on it and its bid price is 0"
    Place.of(table).warn(faults, unused, "leg", _of_row(table.frame["leg"], problem))


def warn_of_same_legs(table: TableData, faults: Faults) -> None:
    """Warn of itineraries that travel on the very legs of an earlier one."""
    codes, name = table.frame["legs"].cat.codes.to_numpy(), table.frame["itinerary"]
    if not np.any(np.bincount(codes[codes >= 0]) > 1):
        return
    _, first, group = np.unique(codes, return_index=True, return_inverse=True)
    earlier = first[group]
    Place.of(table).warn(
        faults,
        (earlier < np.arange(len(codes))) & (codes >= 0),
        "legs",
        lambda row: (
            f"{name.iloc[row]} travels on the same legs as {name.iloc[earlier[row]]}; keep one of the two, unless "
            "both are sold apart"
        ),
    )


def warn_of_unsold_itineraries(place: Place, names: NameArray, product_itinerary: IntArray, faults: Faults) -> None:
    """Warn of itineraries that have no fare in any class."""
    unsold = np.bincount(product_itinerary, minlength=len(names)) == 0
    place.warn(
        faults,
        unsold,
        "itinerary",
        lambda row: f"{names[row]} has no fare, so that it is not sold; add its fares to fares.csv or remove it",
    )


def warn_of_demand(table: TableData, faults: Faults) -> None:
    """Warn of deviations that count for nothing, since their mean is 0."""
    mean, deviation = (table.frame[name].to_numpy() for name in ("mean", "deviation"))
    Place.of(table).warn(
        faults,
        (mean == 0) & (deviation > 0),
        "deviation",
        lambda row: (
            f"a mean of 0 with a deviation of {deviation[row]:.6g} is taken as no demand at all; give the mean, or "
            "write 0 for both"
        ),
    )


def unlike_spellings(names: list[str]) -> dict[str, str]:
    """Names that differ from an earlier one in capitals or white space alone, with that one.

    Examples
    --------
    >>> unlike_spellings(["saver", "full", "Saver", " full"])
    {'Saver': 'saver', ' full': 'full'}
    """
    first: dict[str, str] = {}
    return {
        name: earlier for name in names if (earlier := first.setdefault("".join(name.split()).casefold(), name)) != name
    }
