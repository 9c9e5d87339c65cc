"""`Timetable`: what every reader makes of its schedule, dated legs and their stations."""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from legworth.schedules.places import Places
from legworth.schedules.traffic import Traffic
from network import Fault
from network.arrays import IntArray, NameArray

__all__ = ["Timetable", "leg_names", "letters"]


@dataclass(frozen=True, eq=False)
class Timetable:
    """Legs by date, in order of departure and then of name.

    Attributes
    ----------
    places
        The stations that the legs use, by name.
    name, recurring
        (L,) names, unique over all dates, and the same without the date.
    origin, destination
        (L,) positions in ``places``.
    departs, arrives
        (L,) instants, seconds since 1970 in UTC.
    departs_offset, arrives_offset
        (L,) minutes from UTC of the local clocks.
    capacity
        (L,) seats.
    kind
        (L,) kind of leg, "" if none.
    through
        (L,) position of the leg that the same vehicle runs next with the same passengers, -1 if there is none.
    traffic
        Between which stations passengers may be carried.
    left_out
        What the schedule holds that is not among the legs: how many, by reason.
    warnings
        What was odd, though not wrong.
    """

    places: Places
    name: NameArray
    recurring: NameArray
    origin: IntArray
    destination: IntArray
    departs: IntArray
    arrives: IntArray
    departs_offset: IntArray
    arrives_offset: IntArray
    capacity: IntArray
    kind: NameArray
    through: IntArray
    traffic: Traffic
    left_out: dict[str, int] = field(default_factory=dict)
    warnings: tuple[Fault, ...] = ()

    def __len__(self) -> int:
        return len(self.name)

    def in_order(self) -> Timetable:
        """Return the same with legs by departure and name, and only the stations that they use, by name."""
        names = self.places.name.astype(str)
        used = np.zeros(len(self.places), dtype=bool)
        used[self.origin] = used[self.destination] = True
        stations = np.flatnonzero(used)
        stations = stations[np.argsort(names[stations], kind="stable")]
        at_station = np.full(len(self.places), -1)
        at_station[stations] = np.arange(len(stations))
        by_name = np.asarray(pc.rank(pa.array(self.name, pa.string()), tiebreaker="first")).astype(np.int64)
        order = np.lexsort((by_name, self.departs))
        at = np.empty(len(order), dtype=np.int64)
        at[order] = np.arange(len(order))
        through = self.through[order]
        arrays = ("name", "recurring", "departs", "arrives", "departs_offset", "arrives_offset", "capacity", "kind")
        return replace(
            self,
            places=self.places.take(stations),
            origin=at_station[self.origin[order]],
            destination=at_station[self.destination[order]],
            through=np.where(through >= 0, at[through], -1),
            traffic=self.traffic.take(order),
            **{array: getattr(self, array)[order] for array in arrays},
        )


def letters(number: int) -> str:
    """Letters of a number from 1 on: A to Z, AA, AB and so on.

    Examples
    --------
    >>> [letters(n) for n in (1, 2, 26, 27, 702, 703)]
    ['A', 'B', 'Z', 'AA', 'ZZ', 'AAA']
    """
    text = ""
    while number:
        number, rest = divmod(number - 1, 26)
        text = chr(ord("A") + rest) + text
    return text


def leg_names(
    stem: NameArray, of_stem: IntArray, day: IntArray, sequence: IntArray, *, with_year: bool
) -> tuple[NameArray, NameArray]:
    """Name legs by what runs, its date, and a letter for every leg but the first.

    Parameters
    ----------
    stem, of_stem
        Words to begin with, and the position of each leg's, (L,).
    day
        (L,) date in days since 1970.
    sequence
        (L,) number of the leg within the run, from 1 on: the second ends in B.
    with_year
        Whether dates are written YYYYMMDD; MMDD otherwise.

    Returns
    -------
    name, recurring
        (L,) names, and the same without the date, the letter after a slash.

    Examples
    --------
    >>> stem, first_of_march = np.array(["XY12"], dtype=object), np.array([59, 59])
    >>> for names in leg_names(stem, np.zeros(2, int), first_of_march, np.array([1, 2]), with_year=False):
    ...     names.tolist()
    ['XY12-0301', 'XY12-0301B']
    ['XY12', 'XY12/B']
    """
    if len(of_stem) == 0:
        return np.zeros(0, dtype=object), np.zeros(0, dtype=object)
    days, at_day = np.unique(day, return_inverse=True)
    dates = [str(date).replace("-", "")[0 if with_year else 4 :] for date in days.astype("datetime64[D]")]
    numbers, at_number = np.unique(sequence, return_inverse=True)
    ends = [letters(int(number)) if number > 1 else "" for number in numbers]
    stems, dated, lettered, apart = (
        pa.array(values, pa.string()).take(pa.array(at))
        for values, at in (
            (stem, of_stem),
            ([f"-{date}" for date in dates], at_day),
            (ends, at_number),
            ([f"/{end}" if end else "" for end in ends], at_number),
        )
    )
    name, recurring = (
        np.asarray(pc.binary_join_element_wise(*parts, "").to_numpy(zero_copy_only=False), dtype=object)
        for parts in ((stems, dated, lettered), (stems, apart))
    )
    return name, recurring
