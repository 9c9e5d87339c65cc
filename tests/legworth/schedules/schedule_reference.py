"""Schedules expanded one by one with the standard library, straight from the words of the formats."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterator, Mapping, Sequence
from datetime import UTC, date, datetime, time, timedelta, timezone
from zoneinfo import ZoneInfo

from legworth.schedules import Timetable
from tests.legworth.schedules.ssim_writer import Leg

Row = tuple[str, str, str, str, str, int]
"""Name, origin, destination, departure and arrival in ISO 8601, seats."""

LETTERS = " BCDEFGHIJ"


def rows_of(timetable: Timetable) -> list[Row]:
    """A timetable by name."""
    names = timetable.places.name

    def told(utc: int, offset: int) -> str:
        return datetime.fromtimestamp(utc, timezone(timedelta(minutes=offset))).isoformat()

    return [
        (
            str(timetable.name[leg]),
            str(names[timetable.origin[leg]]),
            str(names[timetable.destination[leg]]),
            told(int(timetable.departs[leg]), int(timetable.departs_offset[leg])),
            told(int(timetable.arrives[leg]), int(timetable.arrives_offset[leg])),
            int(timetable.capacity[leg]),
        )
        for leg in range(len(timetable))
    ]


def dates_of(leg: Leg, first: date, last: date) -> Iterator[date]:
    """Dates of operation of an airline leg."""
    day = leg.first
    while day <= min(leg.last or last, last):
        weeks = (day - leg.first).days // 7
        if day >= first and str(day.isoweekday()) in leg.days and not (leg.every_other_week and weeks % 2):
            yield day
        day += timedelta(days=1)


def moment_of(leg: Leg, on: date, which: str, mode: str, zones: Mapping[str, str]) -> datetime:
    """Moment at which passengers depart or arrive, with its offset."""
    aircraft, passenger = getattr(leg, which), getattr(leg, f"passenger_{which}")
    variation = getattr(leg, f"{which}_variation")
    station = leg.origin if which == "departs" else leg.destination
    midnight = datetime.combine(on, time()) + timedelta(days=getattr(leg, f"{which}_day"))
    clocks = [
        midnight + timedelta(days=days, minutes=aircraft if passenger is None else passenger) for days in (-1, 0, 1)
    ]
    clock = min(clocks, key=lambda moment: abs(moment - midnight - timedelta(minutes=aircraft)))
    zone = ZoneInfo(zones[station]) if variation is None else timezone(timedelta(minutes=variation))
    if mode == "U":
        return clock.replace(tzinfo=UTC).astimezone(zone)
    return clock.replace(tzinfo=zone)


def expected_rows(
    legs: Sequence[Leg], mode: str, zones: Mapping[str, str], first: date, last: date, seats: Mapping[str, int]
) -> list[Row]:
    """Rows of an airline schedule, by departure and name."""
    found = [
        (leg, on, *(moment_of(leg, on, which, mode, zones) for which in ("departs", "arrives")))
        for leg in legs
        for on in dates_of(leg, first, last)
    ]
    flights = defaultdict(list)
    for leg, on, departs, _ in found:
        flights[leg.carrier, leg.number, leg.suffix, on].append((leg.sequence, departs))
    rows = []
    for leg, on, departs, arrives in found:
        _, begins = min(flights[leg.carrier, leg.number, leg.suffix, on], key=lambda entry: entry[0])
        name = f"{leg.carrier}{leg.number}{leg.suffix}-{begins:%m%d}{LETTERS[leg.sequence - 1].strip()}"
        capacity = seats[leg.configuration.strip()]
        rows.append((departs, (name, leg.origin, leg.destination, departs.isoformat(), arrives.isoformat(), capacity)))
    return [row for _, row in sorted(rows)]
