"""Legs that operate on days of the week over a period: expanded to dates, their local times to instants."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass, fields, replace
from typing import Any

import numpy as np

from legworth.schedules.local_time import Instants, instants_of, offsets_at
from legworth.schedules.operating_days import Window, operating_days
from legworth.schedules.places import Places
from network.arrays import BoolArray, IntArray, NameArray
from network.faults import Faults

__all__ = ["NO_VARIATION", "Columns", "Departures", "PeriodicEnd", "PeriodicLegs", "departures_of"]

NO_VARIATION = -10_000
"""Minutes from UTC where the schedule gives none."""

DAY = 86400


@dataclass(frozen=True)
class Columns:
    """How faults name the columns of a schedule."""

    period: str
    departs: str
    arrives: str
    departs_variation: str
    arrives_variation: str
    origin: str
    destination: str
    equipment: str


@dataclass(frozen=True, eq=False)
class PeriodicEnd:
    """One end of every leg: position of the station, time of day (minutes), days after the date of operation,
    and minutes from UTC or `NO_VARIATION`."""

    station: IntArray
    minute: IntArray
    day: IntArray
    variation: IntArray


@dataclass(frozen=True, eq=False)
class PeriodicLegs:
    """Legs of a schedule by record, (n,) each.

    Attributes
    ----------
    file, line, columns
        Where they stand, for faults.
    flight
        Carrier, number and suffix in one word.
    variation
        Itinerary variation of the flight; 0 where there are none.
    sequence
        Number of the leg within its flight, from 1 on; 0 where departures say the order.
    first, last, weekdays, weeks
        As in `legworth.schedules.operating_days.operating_days`.
    departs, arrives
        Both ends.
    in_utc
        True where dates and times are those of UTC, and not of the stations' clocks.
    seats, equipment
        Seats, -1 if nothing gives them, and the type of vehicle as text.
    kind
        Kind of leg, "" if none.
    """

    file: str
    line: IntArray
    columns: Columns
    flight: NameArray
    variation: IntArray
    sequence: IntArray
    first: IntArray
    last: IntArray
    weekdays: IntArray
    weeks: IntArray
    departs: PeriodicEnd
    arrives: PeriodicEnd
    in_utc: BoolArray
    seats: IntArray
    equipment: NameArray
    kind: NameArray

    def __len__(self) -> int:
        return len(self.line)

    def take(self, rows: IntArray | BoolArray) -> PeriodicLegs:
        """Return some of the records."""

        def cut(value: Any) -> Any:
            if isinstance(value, PeriodicEnd):
                return PeriodicEnd(*(getattr(value, field.name)[rows] for field in fields(value)))
            return value[rows] if isinstance(value, np.ndarray) else value

        return replace(self, **{field.name: cut(getattr(self, field.name)) for field in fields(self)})

    def note(
        self, faults: Faults, rows: Iterable[int], column: str, problem: Callable[[int], str], *, warning: bool = False
    ) -> None:
        """Note one fault of the same kind for each record position."""
        faults.add_rows(self.file, rows, lambda row: int(self.line[row]), column, problem, warning=warning)


@dataclass(frozen=True, eq=False)
class Departures:
    """Dated legs, (m,) each: the record and the date of operation (days since 1970), instants in seconds UTC, and
    offsets from UTC in minutes."""

    record: IntArray
    day: IntArray
    departs: IntArray
    arrives: IntArray
    departs_offset: IntArray
    arrives_offset: IntArray

    def __len__(self) -> int:
        return len(self.record)

    def take(self, rows: IntArray | BoolArray) -> Departures:
        """Return some of the legs."""
        return Departures(*(getattr(self, field.name)[rows] for field in fields(self)))


def departures_of(
    legs: PeriodicLegs, places: Places, window: Window, faults: Faults, longest: int | None = None
) -> Departures:
    """Expand records to dates.

    Local time is turned into an instant by the variation from UTC that the record gives, or else by the zone of the
    station. What is odd is noted once a record, with its first date.

    Parameters
    ----------
    legs, places, window
        The records, their stations, and the dates wanted.
    faults
        Receives times that do not exist, times without variation and zone, and arrivals that are not after the
        departure; as warnings, times that occur twice and variations that are not those of the zone.
    longest
        Hours that a leg may take; None for no limit.

    Raises
    ------
    SettingError
        If there are too many legs.
    """
    _note_unknown_clocks(legs, places, faults)
    record, day = operating_days(legs.first, legs.last, legs.weekdays, legs.weeks, window)
    departs = _instants(legs, legs.departs, legs.columns.departs, record, day, places, faults)
    arrives = _instants(legs, legs.arrives, legs.columns.arrives, record, day, places, faults)
    taken = arrives.utc - departs.utc
    timed = ~(departs.gap | arrives.gap)

    def stated(rows: IntArray, column: str, problem: Callable[[int], str]) -> None:
        _once(legs, faults, record, rows, column, lambda at: f"on {_date(day[at])} {problem(at)}")

    stated(
        np.flatnonzero(timed & (taken <= 0)),
        legs.columns.arrives,
        lambda at: (
            f"the leg arrives {_span(-taken[at])} before it departs; correct the times, the days of arrival or the "
            "zones"
            if taken[at]
            else "the leg arrives when it departs; correct the times, the days of arrival or the zones"
        ),
    )
    if longest is not None:
        stated(
            np.flatnonzero(timed & (taken > longest * 3600)),
            legs.columns.arrives,
            lambda at: f"the leg takes {_span(taken[at])}, more than {longest} hours; correct the times or the days",
        )
    return Departures(record, day, departs.utc, arrives.utc, departs.offset // 60, arrives.offset // 60)


def _note_unknown_clocks(legs: PeriodicLegs, places: Places, faults: Faults) -> None:
    zone, _ = places.zones
    for end, column in ((legs.departs, legs.columns.departs_variation), (legs.arrives, legs.columns.arrives_variation)):
        missing = (end.variation == NO_VARIATION) & (end.station >= 0) & (legs.weekdays > 0)
        missing &= np.append(zone, -1)[end.station] < 0
        names = places.name

        def problem(row: int, end: PeriodicEnd = end, names: NameArray = names) -> str:
            return (
                f"nothing tells the clock of {names[end.station[row]]} from UTC; give the station's timezone in a "
                "table of stations (--stations)"
            )

        legs.note(faults, np.flatnonzero(missing), column, problem)


def _instants(
    legs: PeriodicLegs,
    end: PeriodicEnd,
    column: str,
    record: IntArray,
    day: IntArray,
    places: Places,
    faults: Faults,
) -> Instants:
    """Instants of one end of the legs, and what is odd about its local time."""
    stated = (day + end.day[record]) * DAY + end.minute[record] * 60
    variation = end.variation[record]
    given = variation != NO_VARIATION
    in_utc = legs.in_utc[record]
    zone, names = places.zones
    station = end.station[record]
    at_zone = np.append(zone, -1)[station]
    by_zone = instants_of(stated, np.where(in_utc, -1, at_zone), names)
    utc = np.where(given & ~in_utc, stated - variation * 60, by_zone.utc)
    known = at_zone >= 0
    zone_offset = offsets_at(utc, at_zone, names)
    offset = np.where(given, variation * 60, zone_offset)

    def clock(at: int) -> str:
        return f"{legs_time(end.minute[record[at]])} on {_date(stated[at] // DAY)} at {places.name[station[at]]}"

    _once(
        legs,
        faults,
        record,
        np.flatnonzero(by_zone.gap),
        column,
        lambda at: (
            f"{clock(at)} ({places.timezone[station[at]]}) does not exist, as clocks go forward then; correct the time "
            "or end the period before"
        ),
    )
    _once(
        legs,
        faults,
        record,
        np.flatnonzero(by_zone.fold & ~given),
        column,
        lambda at: f"{clock(at)} occurs twice, as clocks go back then; the first was taken",
        warning=True,
    )
    _once(
        legs,
        faults,
        record,
        np.flatnonzero(given & known & (zone_offset != offset) & ~by_zone.gap),
        legs.columns.departs_variation if end is legs.departs else legs.columns.arrives_variation,
        lambda at: (
            f"{_variation(variation[at])} is not what {places.timezone[station[at]]} has at "
            f"{clock(at)} ({_variation(zone_offset[at] // 60)}); the variation of the schedule was taken"
        ),
        warning=True,
    )
    return Instants(utc, offset, by_zone.gap, by_zone.fold)


def _once(
    legs: PeriodicLegs,
    faults: Faults,
    record: IntArray,
    rows: IntArray,
    column: str,
    problem: Callable[[int], str],
    *,
    warning: bool = False,
) -> None:
    """Note a fault of dated legs once a record, for the first of them."""
    records, first = np.unique(record[rows], return_index=True)
    of_record = dict(zip(records.tolist(), rows[first].tolist(), strict=True))
    legs.note(faults, records.tolist(), column, lambda row: problem(of_record[row]), warning=warning)


def legs_time(minute: int) -> str:
    """Time of day as it is written."""
    return f"{minute // 60:02d}:{minute % 60:02d}"


def _date(day: int) -> str:
    return str(np.datetime64(int(day), "D"))


def _variation(minutes: int) -> str:
    return f"{'-' if minutes < 0 else '+'}{abs(minutes) // 60:02d}{abs(minutes) % 60:02d}"


def _span(seconds: int) -> str:
    return f"{seconds // 3600}:{seconds % 3600 // 60:02d} h"
