"""A plain table of flights with days of operation, read into a timetable."""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from dataclasses import replace
from datetime import date
from pathlib import Path

import numpy as np
import pandas as pd

from legworth.schedules.flights import timetable_of
from legworth.schedules.operating_days import Window
from legworth.schedules.periodic import NO_VARIATION, Columns, PeriodicEnd, PeriodicLegs, departures_of
from legworth.schedules.places import Places
from legworth.schedules.seats import ANY_EQUIPMENT, UNKNOWN
from legworth.schedules.timetable import Timetable
from legworth.schedules.traffic import Traffic
from network import TableSchema, table_schema
from network.arrays import BoolArray, IntArray, NameArray
from network.faults import Faults
from network.reading import TableData, read_file

__all__ = ["read_flight_table"]

COLUMNS = Columns(
    period="from and to",
    departs="departs",
    arrives="arrives",
    departs_variation="origin",
    arrives_variation="destination",
    origin="origin",
    destination="destination",
    equipment="equipment",
)
MENDS = {
    "carrier": "is blank or has white space; use a word",
    "number": "is blank or has white space; use a word",
    "origin": "is blank or has white space; use a word",
    "destination": "is blank or has white space; use a word",
    "departs": "is not a time of day; write HH:MM from 00:00 to 23:59",
    "arrives": "is not a time of day; write HH:MM from 00:00 to 23:59",
    "days": "does not hold days of operation; write their numbers in order, such as 12345 or 67",
}


def read_flight_table(
    path: Path, window: Window, places: Places, seats: Mapping[str, int], faults: Faults
) -> Timetable | None:
    """Read a table of flights, CSV or Parquet, with the columns of the schema ``flights``.

    Parameters
    ----------
    path
        The table.
    window
        Local dates of departure wanted.
    places
        Known stations; each needs its time zone.
    seats
        Seats by equipment, for rows that do not give them.
    faults
        Receives everything that is wrong, by line and column.

    Returns
    -------
    Timetable or None
        None if anything is wrong.
    """
    schema = table_schema("legworth", "flights")
    # Patterns are checked here, so that each says what it wants.
    table = read_file(path, replace(schema, columns=tuple(replace(column, pattern=None) for column in schema)), faults)
    if table is None:
        return None
    reader = _Rows(table, schema, faults)
    carrier, number = reader.text("carrier"), reader.text("number")
    first, last = reader.dates("from"), reader.dates("to")
    turned = reader.good() & (last < first)
    reader.note(np.flatnonzero(turned), "to", lambda row: "the period ends before it begins; correct one of the dates")
    reader.bad |= turned
    places, origin, destination = reader.stations(places)
    day = table.frame["arrives_day"].fillna(0).to_numpy(dtype=np.int64)
    none, local = np.full(len(table), NO_VARIATION), np.zeros(len(table), dtype=np.int64)
    equipment = reader.text("equipment")
    of_type = {name: seats.get(name, seats.get(ANY_EQUIPMENT, UNKNOWN)) for name in set(equipment.tolist())}
    by_table = np.array([of_type[name] for name in equipment.tolist()], dtype=np.int64)
    given = table.frame["seats"]
    legs = PeriodicLegs(
        file=table.file,
        line=np.array([table.line_of(row) for row in range(len(table))], dtype=np.int64),
        columns=COLUMNS,
        flight=carrier + number,
        variation=local,
        sequence=local,
        first=first,
        last=last,
        weekdays=reader.values("days", lambda text: sum(1 << int(digit) - 1 for digit in text)),
        weeks=np.ones(len(table), dtype=np.int64),
        departs=PeriodicEnd(origin, reader.values("departs", _minutes), local, none),
        arrives=PeriodicEnd(destination, reader.values("arrives", _minutes), day, none),
        in_utc=np.zeros(len(table), dtype=bool),
        seats=np.where(given.notna(), given.fillna(0), by_table).astype(np.int64),
        equipment=equipment,
        kind=reader.text("kind"),
    )
    good = np.flatnonzero(reader.good())
    legs = legs.take(good)
    dated = departures_of(legs, places, window, faults)
    timetable = timetable_of(legs, dated, places, window, Traffic.free(len(legs)), faults)
    return None if faults.errors else timetable


class _Rows:
    """Columns of the table, and which rows cannot be read."""

    def __init__(self, table: TableData, schema: TableSchema, faults: Faults) -> None:
        self.table, self.schema, self.faults = table, schema, faults
        self.bad: BoolArray = np.zeros(len(table), dtype=bool)
        for column in schema:
            if column.required:
                self.bad |= table.frame[column.name].isna().to_numpy()
        for name in MENDS:
            self._check_pattern(name)

    def note(self, rows: IntArray, column: str, problem: Callable[[int], str]) -> None:
        self.faults.add_rows(self.table.file, rows, self.table.line_of, column, problem)

    def good(self) -> BoolArray:
        return ~self.bad

    def text(self, column: str) -> NameArray:
        """Text of a column, "" where there is none."""
        values = self.table.frame[column].astype(object)
        return np.asarray(values.where(values.notna(), ""), dtype=object)

    def values(self, column: str, meaning: Callable[[str], int]) -> IntArray:
        """Numbers that a column's texts stand for, 0 where a row is at fault."""
        values = self.table.frame[column]
        shape = re.compile(self.schema.column(column).pattern or "")
        found = [meaning(text) if shape.fullmatch(text) else 0 for text in map(str, values.cat.categories)]
        return np.array([*found, 0], dtype=np.int64)[values.cat.codes.to_numpy()]

    def dates(self, column: str) -> IntArray:
        """Days since 1970; notes what is no date."""
        values = self.table.frame[column]
        found = [_day(str(text)) for text in values.cat.categories]
        codes = values.cat.codes.to_numpy()
        unreadable = np.array([*(day is None for day in found), False], dtype=bool)[codes]
        self.note(
            np.flatnonzero(unreadable),
            column,
            lambda row: f"{values.iloc[row]!r} is not a date; write it as 2027-03-01",
        )
        self.bad |= unreadable
        return np.array([*(day or 0 for day in found), 0], dtype=np.int64)[codes]

    def stations(self, places: Places) -> tuple[Places, IntArray, IntArray]:
        """All stations, and the positions of both ends; notes unknown ones and rows that end where they begin."""
        names = {column: self.text(column) for column in ("origin", "destination")}
        lacking = np.zeros(len(self.bad), dtype=bool)
        for column, found in names.items():
            if places.complete:
                unknown = (places.locate(found) < 0) & ~self.bad

                def problem(row: int, found: NameArray = found) -> str:
                    return f"{found[row]!r} is not in the table of stations; add it or correct the name"

                self.note(np.flatnonzero(unknown), column, problem)
                lacking |= unknown
            else:
                places = places.with_names(found[~self.bad])
        self.bad |= lacking
        origin, destination = (places.locate(found) for found in names.values())
        loop = (origin == destination) & ~self.bad
        self.note(np.flatnonzero(loop), "destination", lambda _: "the leg ends where it begins; correct one of the two")
        self.bad |= loop
        return places, origin, destination

    def _check_pattern(self, column: str) -> None:
        values = self.table.frame[column]
        shape = re.compile(self.schema.column(column).pattern or "")
        misfit = {str(text) for text in values.cat.categories if not shape.fullmatch(str(text))}
        bad = pd.Series(values.isin(misfit)).to_numpy()
        self.note(np.flatnonzero(bad), column, lambda row: f"{values.iloc[row]!r} {MENDS[column]}")
        self.bad |= bad


def _minutes(text: str) -> int:
    return int(text[:2]) * 60 + int(text[3:])


def _day(text: str) -> int | None:
    if not re.fullmatch(r"\d{4}-\d{2}-\d{2}", text):
        return None
    try:
        return (date.fromisoformat(text) - date(1970, 1, 1)).days
    except ValueError:
        return None
