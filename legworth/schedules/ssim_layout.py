"""Where every field stands in the records of an airline schedule file.

The layout is that of IATA's Standard Schedules Information Manual, chapter 7: records of 200 bytes, of types 1 to 5,
bytes counted from 1. Positions, names and codes are given from memory; check them against your edition of the manual.
"""

from __future__ import annotations

from dataclasses import dataclass
from types import MappingProxyType

__all__ = [
    "CARRIER",
    "FLIGHT_LEG",
    "HEADER",
    "LENGTH",
    "RECORD_TYPES",
    "SEGMENT",
    "TITLE",
    "TRAILER",
    "Field",
    "Layout",
    "field_at",
]

LENGTH = 200
"""Bytes of a record."""

TITLE = "AIRLINE STANDARD SCHEDULE DATA SET"


@dataclass(frozen=True)
class Field:
    """One field: first and last byte, counted from 1, and its name."""

    first: int
    last: int
    name: str

    @property
    def column(self) -> str:
        """How faults name the field: its bytes, then its name."""
        place = f"{self.first}" if self.first == self.last else f"{self.first}-{self.last}"
        return f"{place} {self.name}"

    @property
    def width(self) -> int:
        """Number of bytes."""
        return self.last - self.first + 1


Layout = MappingProxyType[str, Field]
"""The fields of a record type by key."""


def _layout(*fields: tuple[int, int, str]) -> Layout:
    found = {name.replace(" ", "_"): Field(first, last, name) for first, last, name in fields}
    return MappingProxyType(found)


HEADER = _layout(
    (1, 1, "record type"),
    (2, 35, "title of contents"),
    (41, 41, "number of seasons"),
    (192, 194, "data set serial number"),
    (195, 200, "record serial number"),
)

CARRIER = _layout(
    (1, 1, "record type"),
    (2, 2, "time mode"),
    (3, 5, "airline designator"),
    (11, 13, "season"),
    (15, 21, "period from"),
    (22, 28, "period to"),
    (29, 35, "creation date"),
    (36, 64, "title of data"),
    (65, 71, "release date"),
    (72, 72, "schedule status"),
    (73, 107, "creator reference"),
    (108, 108, "duplicate airline designator marker"),
    (109, 169, "general information"),
    (170, 188, "in-flight service information"),
    (189, 190, "electronic ticketing information"),
    (191, 194, "creation time"),
    (195, 200, "record serial number"),
)

FLIGHT_LEG = _layout(
    (1, 1, "record type"),
    (2, 2, "operational suffix"),
    (3, 5, "airline designator"),
    (6, 9, "flight number"),
    (10, 11, "itinerary variation identifier"),
    (12, 13, "leg sequence number"),
    (14, 14, "service type"),
    (15, 21, "period from"),
    (22, 28, "period to"),
    (29, 35, "days of operation"),
    (36, 36, "frequency rate"),
    (37, 39, "departure station"),
    (40, 43, "passenger departure time"),
    (44, 47, "aircraft departure time"),
    (48, 52, "departure UTC variation"),
    (53, 54, "departure terminal"),
    (55, 57, "arrival station"),
    (58, 61, "aircraft arrival time"),
    (62, 65, "passenger arrival time"),
    (66, 70, "arrival UTC variation"),
    (71, 72, "arrival terminal"),
    (73, 75, "aircraft type"),
    (76, 95, "reservations booking designators"),
    (96, 100, "reservations booking modifiers"),
    (101, 110, "meal service"),
    (111, 119, "joint operation airlines"),
    (120, 120, "departure connection status"),
    (121, 121, "arrival connection status"),
    (122, 122, "secure flight indicator"),
    (128, 128, "itinerary variation overflow"),
    (129, 131, "aircraft owner"),
    (132, 134, "cockpit crew employer"),
    (135, 137, "cabin crew employer"),
    (138, 140, "onward airline designator"),
    (141, 144, "onward flight number"),
    (145, 145, "aircraft rotation layover"),
    (146, 146, "onward operational suffix"),
    (148, 148, "flight transit layover"),
    (149, 149, "operating airline disclosure"),
    (150, 160, "traffic restriction codes"),
    (161, 161, "traffic restriction overflow"),
    (173, 192, "aircraft configuration"),
    (193, 193, "departure date variation"),
    (194, 194, "arrival date variation"),
    (195, 200, "record serial number"),
)

SEGMENT = _layout(
    (1, 1, "record type"),
    (2, 2, "operational suffix"),
    (3, 5, "airline designator"),
    (6, 9, "flight number"),
    (10, 11, "itinerary variation identifier"),
    (12, 13, "leg sequence number"),
    (14, 14, "service type"),
    (28, 28, "itinerary variation overflow"),
    (29, 29, "board point indicator"),
    (30, 30, "off point indicator"),
    (31, 33, "data element identifier"),
    (34, 36, "board point"),
    (37, 39, "off point"),
    (40, 194, "data"),
    (195, 200, "record serial number"),
)

TRAILER = _layout(
    (1, 1, "record type"),
    (3, 5, "airline designator"),
    (6, 12, "release date"),
    (188, 193, "serial number check reference"),
    (194, 194, "continuation code"),
    (195, 200, "record serial number"),
)

RECORD_TYPES = MappingProxyType({"1": HEADER, "2": CARRIER, "3": FLIGHT_LEG, "4": SEGMENT, "5": TRAILER})


def field_at(record_type: str, byte: int) -> str:
    """How faults name the byte of a record, counted from 1: by its field, or alone where none stands there."""
    for field in RECORD_TYPES.get(record_type, {}).values():
        if field.first <= byte <= field.last:
            return field.column
    return f"{byte}"
