"""Flights: dated legs of one number on one date, in order, joined where the vehicle goes on, and named."""

from __future__ import annotations

import numpy as np
import pandas as pd

from legworth.schedules.operating_days import Window
from legworth.schedules.periodic import Departures, PeriodicLegs
from legworth.schedules.places import Places
from legworth.schedules.timetable import Timetable, leg_names
from legworth.schedules.traffic import Traffic
from network.arrays import IntArray
from network.faults import Faults

__all__ = ["timetable_of"]

DAY = 86400
GREATEST = 100_000
"""Seats that a leg may have."""


def timetable_of(
    legs: PeriodicLegs, dated: Departures, places: Places, window: Window, traffic: Traffic, faults: Faults
) -> Timetable:
    """Make a timetable of dated legs.

    Legs of one flight on one date of operation belong together. They are named by the flight, the local date on which
    its first leg departs, and a letter for every further leg. Passengers stay on board where the next leg begins where
    the last one ended and has the same type of vehicle.

    Parameters
    ----------
    legs, dated, places
        Records, their dates, and all stations.
    window
        Decides whether dates in names need the year.
    traffic
        Restrictions by record.
    faults
        Receives periods of one flight that overlap, legs without seats, and legs of a flight that do not meet.
    """
    numbers, flight_names = pd.factorize(pd.Series(legs.flight, dtype=object))
    flight = numbers[dated.record]
    order = np.lexsort((dated.departs, legs.sequence[dated.record], dated.day, flight))
    dated, flight = dated.take(order), flight[order]
    _note_seats(legs, dated, faults)
    begins = np.append(True, (np.diff(flight) != 0) | (np.diff(dated.day) != 0))[: len(flight)]
    run = np.cumsum(begins) - 1
    first = np.flatnonzero(begins)
    date = ((dated.departs + dated.departs_offset * 60) // DAY)[first][run]
    place = np.arange(len(flight)) - first[run] + 1 if len(flight) else np.zeros(0, dtype=np.int64)
    sequence = np.where(legs.sequence[dated.record] > 0, legs.sequence[dated.record], place)
    _note_overlaps(legs, dated, flight, date, sequence, faults)
    through = _onward(legs, dated, run, faults)
    name, recurring = leg_names(np.asarray(flight_names, dtype=object), flight, date, sequence, with_year=window.long)
    return Timetable(
        places=places,
        name=name,
        recurring=recurring,
        origin=legs.departs.station[dated.record],
        destination=legs.arrives.station[dated.record],
        departs=dated.departs,
        arrives=dated.arrives,
        departs_offset=dated.departs_offset,
        arrives_offset=dated.arrives_offset,
        capacity=legs.seats[dated.record],
        kind=legs.kind[dated.record],
        through=through,
        traffic=traffic.take(dated.record),
    )


def _note_seats(legs: PeriodicLegs, dated: Departures, faults: Faults) -> None:
    used = np.unique(dated.record)
    legs.note(
        faults,
        used[legs.seats[used] < 0],
        legs.columns.equipment,
        lambda row: (
            f"nothing gives the seats of equipment {legs.equipment[row]!r}; add it to a table of seats (--seats)"
        ),
    )
    legs.note(
        faults,
        used[legs.seats[used] > GREATEST],
        legs.columns.equipment,
        lambda row: f"{legs.seats[row]:,} seats are more than {GREATEST:,}; correct them",
    )


def _note_overlaps(
    legs: PeriodicLegs, dated: Departures, flight: IntArray, date: IntArray, sequence: IntArray, faults: Faults
) -> None:
    """Note records that put a second leg of the same number and place within the flight on a date.

    Without leg numbers, a second departure between the same stations is one.
    """
    record = dated.record
    numbered = legs.sequence[record] > 0
    ends = (
        np.where(numbered, -1, legs.departs.station[record]),
        np.where(numbered, sequence, legs.arrives.station[record]),
    )
    keys = pd.DataFrame({"flight": flight, "date": date, "one": ends[0], "other": ends[1]})
    if not keys.duplicated().any():
        return
    groups = keys.groupby(["flight", "date", "one", "other"], sort=False).ngroup().to_numpy()
    order = np.lexsort((record, groups))
    again = order[1:][groups[order[1:]] == groups[order[:-1]]]
    earlier = order[:-1][groups[order[1:]] == groups[order[:-1]]]
    records, at = np.unique(record[again], return_index=True)
    place = dict(zip(records.tolist(), at.tolist(), strict=True))

    def problem(row: int) -> str:
        second, one = again[place[row]], earlier[place[row]]
        leg = f" leg {legs.sequence[row]}" if legs.sequence[row] else ""
        day = np.datetime64(int(date[second]), "D")
        return (
            f"{legs.flight[row]}{leg} operates on {day} by line {legs.line[record[one]]} already; "
            "end one period before the other begins, or part their days"
        )

    legs.note(faults, records.tolist(), legs.columns.period, problem)


def _onward(legs: PeriodicLegs, dated: Departures, run: IntArray, faults: Faults) -> IntArray:
    """Position of the next leg of the same flight and vehicle, -1 if there is none; notes legs that do not fit."""
    through = np.full(len(dated), -1)
    at = np.flatnonzero(run[1:] == run[:-1])
    one, other = dated.record[at], dated.record[at + 1]
    meets = legs.arrives.station[one] == legs.departs.station[other]
    in_time = dated.arrives[at] <= dated.departs[at + 1]
    same = legs.equipment[one] == legs.equipment[other]
    joined = at[meets & in_time & same]
    through[joined] = joined + 1
    next_to = (
        (legs.sequence[one] > 0)
        & (legs.sequence[other] == legs.sequence[one] + 1)
        & (legs.variation[one] == legs.variation[other])
    )
    for bad, column, problem in (
        (next_to & ~meets, legs.columns.origin, "does not begin where leg {} in line {} ends"),
        (next_to & meets & ~in_time, legs.columns.departs, "departs before leg {} in line {} arrives"),
    ):
        records, rows = np.unique(other[bad], return_index=True)
        before = dict(zip(records.tolist(), one[bad][rows].tolist(), strict=True))

        def text(row: int, before: dict[int, int] = before, problem: str = problem) -> str:
            last = before[row]
            told = problem.format(legs.sequence[last], legs.line[last])
            return f"leg {legs.sequence[row]} of {legs.flight[row]} {told}; correct one of the two"

        legs.note(faults, records.tolist(), column, text)
    return through
