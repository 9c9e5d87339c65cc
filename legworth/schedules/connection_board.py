"""`DepartureBoard`: legs in departure order by station, as whole numbers, ready to be searched."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from network import Legs, Stations
from network.arrays import FloatArray, IntArray, NameArray
from network.great_circle import great_circle

__all__ = ["DAY", "DepartureBoard"]

DAY = 86_400
"""Seconds."""


@dataclass(frozen=True, eq=False)
class DepartureBoard:
    """Legs sorted by station of departure, instant of departure and name, so that row order decides nothing.

    Attributes
    ----------
    stations, name
        The stations, and the names of the legs.
    position
        (L,) where each leg stands in the table it came from.
    origin, destination
        (L,) positions of stations.
    departs, arrives
        (L,) seconds after `epoch`.
    epoch
        Seconds from 1970 to the first departure.
    departs_day, arrives_day
        (L,) local date at the station, days from 1970.
    departs_minute
        (L,) local minute of the day of departure.
    rank
        (L,) place of the name among all names.
    kind
        (L,) position of the kind in ``kinds``, -1 where there is none.
    kinds
        Names of the kinds.
    through
        (L,) leg that the same vehicle runs next, -1 if none.
    km
        (L,) great-circle length, NaN where a station has no coordinates.
    """

    stations: Stations
    name: NameArray
    position: IntArray
    origin: IntArray
    destination: IntArray
    departs: IntArray
    arrives: IntArray
    epoch: int
    departs_day: IntArray
    arrives_day: IntArray
    departs_minute: IntArray
    rank: IntArray
    kind: IntArray
    kinds: tuple[str, ...]
    through: IntArray
    km: FloatArray

    def __len__(self) -> int:
        return len(self.name)

    @classmethod
    def of(cls, legs: Legs, stations: Stations, kind: NameArray | None, through: IntArray | None) -> DepartureBoard:
        """Sort legs.

        Parameters
        ----------
        legs, stations
            As read.
        kind
            (L,) kind of every leg; None or an empty text where it has none.
        through
            (L,) position of the leg that the same vehicle runs next, -1 where there is none.

        Raises
        ------
        ValueError
            If the lengths differ, a leg ends where it begins or before it departs, or the leg that a vehicle runs next
            begins elsewhere or earlier than it got there.
        """
        number = len(legs)
        departs = legs.departs.astype("datetime64[s]").astype(np.int64)
        arrives = legs.arrives.astype("datetime64[s]").astype(np.int64)
        through = np.full(number, -1) if through is None else np.asarray(through, dtype=np.int64)
        _check(legs, departs, arrives, through, number if kind is None else len(kind))
        rank = np.empty(number, dtype=np.int64)
        rank[np.argsort(legs.name, kind="stable")] = np.arange(number)
        order = np.lexsort((rank, departs, legs.origin))
        place = np.full(number + 1, -1, dtype=np.int32)
        place[order] = np.arange(number)
        kinds, code = _kinds(number, kind)
        from_clock, to_clock = departs + 60 * legs.departs_offset, arrives + 60 * legs.arrives_offset
        epoch = int(departs.min(initial=np.iinfo(np.int64).max)) if number else 0
        lat, lon = stations.latitude, stations.longitude
        km = great_circle(lat[legs.origin], lon[legs.origin], lat[legs.destination], lon[legs.destination])
        return cls(
            stations=stations,
            name=legs.name[order],
            position=order,
            origin=legs.origin[order].astype(np.int32),
            destination=legs.destination[order].astype(np.int32),
            departs=departs[order] - epoch,
            arrives=arrives[order] - epoch,
            epoch=epoch,
            departs_day=from_clock[order] // DAY,
            arrives_day=to_clock[order] // DAY,
            departs_minute=from_clock[order] % DAY // 60,
            rank=rank[order],
            kind=code[order],
            kinds=kinds,
            through=place[through[order]],
            km=km[order],
        )

    def words(self, legs: Sequence[int] | IntArray) -> str:
        """Names of some legs, separated by spaces."""
        return " ".join(self.name[np.asarray(legs)])

    def ends(self, first: int, last: int) -> str:
        """Say from where to where a journey goes, given its first and last leg."""
        station = self.stations.name
        return f"{station[self.origin[first]]} to {station[self.destination[last]]}"


def _check(legs: Legs, departs: IntArray, arrives: IntArray, through: IntArray, kinds: int) -> None:
    if len(through) != len(legs) or kinds != len(legs):
        raise ValueError(f"expected one kind and one next leg for each of {len(legs)} legs")
    if np.any(legs.origin == legs.destination):
        raise ValueError("a leg ends where it begins")
    if np.any(arrives < departs):
        raise ValueError("a leg arrives before it departs")
    if np.any((through < -1) | (through >= len(legs))):
        raise ValueError(f"the next leg of a vehicle must lie from -1 to {len(legs) - 1}")
    before = np.flatnonzero(through >= 0)
    after = through[before]
    if np.any(legs.origin[after] != legs.destination[before]) or np.any(departs[after] < arrives[before]):
        raise ValueError("a vehicle runs next from another station, or earlier, than it got to")


def _kinds(number: int, kind: NameArray | None) -> tuple[tuple[str, ...], IntArray]:
    if kind is None:
        return (), np.full(number, -1)
    named = [value if isinstance(value, str) and value else None for value in kind]
    kinds = tuple(sorted({value for value in named if value is not None}))
    place: dict[str | None, int] = {value: at for at, value in enumerate(kinds)}
    return kinds, np.array([place.get(value, -1) for value in named], dtype=np.int64)
