"""Airline schedule files written from a model, field by field in the order of the manual (from memory).

The widths stand here a second time on purpose: they are not those that the reader goes by.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from datetime import date

MONTHS = "JANFEBMARAPRMAYJUNJULAUGSEPOCTNOVDEC"
FILLING = "0" * 200


@dataclass(frozen=True)
class Segment:
    """A record of type 4 that follows its leg."""

    element: int
    data: str
    board: str = "QQQ"
    off: str = "QQQ"


@dataclass(frozen=True)
class Leg:
    """A record of type 3 in words; minutes are since midnight, passenger times are those of the aircraft if None."""

    carrier: str = "ZQ"
    number: int = 123
    suffix: str = ""
    variation: int = 1
    sequence: int = 1
    service: str = "J"
    first: date = date(2027, 3, 1)
    last: date | None = date(2027, 3, 31)
    days: str = "1234567"
    every_other_week: bool = False
    origin: str = "AAA"
    destination: str = "BBB"
    departs: int = 600
    arrives: int = 690
    passenger_departs: int | None = None
    passenger_arrives: int | None = None
    departs_variation: int | None = 0
    arrives_variation: int | None = 0
    departs_day: int = 0
    arrives_day: int = 0
    equipment: str = "320"
    configuration: str = "Y180"
    status: str = "  "
    traffic: str = ""
    segments: tuple[Segment, ...] = field(default=())

    def but(self, **changes: object) -> Leg:
        """Return the same with changes."""
        return replace(self, **changes)  # type: ignore[arg-type]


def day(value: date | None) -> str:
    """Write a date as 01MAR27, an open end as 00XXX00."""
    if value is None:
        return "00XXX00"
    return f"{value.day:02d}{MONTHS[3 * value.month - 3 : 3 * value.month]}{value.year % 100:02d}"


def clock(minutes: int) -> str:
    """Write a time of day as HHMM."""
    return f"{minutes // 60:02d}{minutes % 60:02d}"


def offset(minutes: int | None) -> str:
    """Write minutes from UTC as +HHMM."""
    return " " * 5 if minutes is None else f"{'-' if minutes < 0 else '+'}{clock(abs(minutes))}"


def shift(days: int) -> str:
    """Write days after the date of operation."""
    return "A" if days == -1 else str(days)


def leg_record(leg: Leg) -> str:
    """Write a leg without its serial number."""
    departs = leg.departs if leg.passenger_departs is None else leg.passenger_departs
    arrives = leg.arrives if leg.passenger_arrives is None else leg.passenger_arrives
    parts = [
        "3",
        leg.suffix.ljust(1),
        leg.carrier.ljust(3),
        f"{leg.number:>4d}",
        f"{leg.variation % 100:02d}",
        f"{leg.sequence:02d}",
        leg.service,
        day(leg.first),
        day(leg.last),
        "".join(str(n) if str(n) in leg.days else " " for n in range(1, 8)),
        "2" if leg.every_other_week else " ",
        leg.origin,
        clock(departs),
        clock(leg.departs),
        offset(leg.departs_variation),
        "  ",
        leg.destination,
        clock(leg.arrives),
        clock(arrives),
        offset(leg.arrives_variation),
        "  ",
        leg.equipment,
        " " * 20,  # booking designators
        " " * 5,  # booking modifiers
        " " * 10,  # meals
        " " * 9,  # joint operation
        leg.status,
        " ",  # secure flight
        " " * 5,
        str(leg.variation // 100) if leg.variation > 99 else " ",
        " " * 9,  # owner and crews
        " " * 7,  # onward flight
        " " * 2,  # layover, suffix
        " ",
        " ",  # transit layover
        " ",  # disclosure
        leg.traffic.ljust(11),
        " ",
        " " * 11,
        leg.configuration.ljust(20),
        shift(leg.departs_day),
        shift(leg.arrives_day),
    ]
    return "".join(parts)


def segment_record(leg: Leg, segment: Segment) -> str:
    """Write a segment without its serial number."""
    key = leg_record(leg)[1:14]
    overflow = str(leg.variation // 100) if leg.variation > 99 else " "
    head = f"4{key}{' ' * 13}{overflow}AB{segment.element:03d}{segment.board}{segment.off}"
    return head + segment.data.ljust(155)


def write(
    *carriers: tuple[str, list[Leg]],
    mode: str = "L",
    first: date = date(2027, 1, 1),
    last: date = date(2027, 12, 31),
    end: str = "\n",
    filling: bool = True,
) -> bytes:
    """Write a whole file: header, the records of each carrier, trailers."""
    lines = [("1AIRLINE STANDARD SCHEDULE DATA SET".ljust(40) + "1").ljust(191) + "001"]
    serial = 1
    lines[0] += f"{serial:06d}"
    fill = [FILLING] * 4 if filling else []
    lines += fill

    def add(text: str) -> None:
        nonlocal serial
        serial += 1
        assert len(text) == 194, (len(text), text)
        lines.append(f"{text}{serial:06d}")

    for place, (carrier, legs) in enumerate(carriers):
        head = f"2{mode}{carrier:<3}     S27 {day(first)}{day(last)}{day(first)}".ljust(71) + "C"
        add(head.ljust(194))
        lines += fill
        for leg in legs:
            add(leg_record(leg))
            for segment in leg.segments:
                add(segment_record(leg, segment))
        code = "E" if place == len(carriers) - 1 else "C"
        add(f"5 {carrier:<3}{day(first)}".ljust(187) + f"{serial:06d}{code}")
        lines += fill
    return (end.join(lines) + end).encode("ascii")
