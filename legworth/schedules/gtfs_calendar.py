"""Days of service of a GTFS feed: calendar, exceptions, and times of day that begin at noon less twelve hours."""

from __future__ import annotations

import re
from datetime import date

import numpy as np

from legworth.schedules.gtfs_tables import GtfsTable, GtfsTables
from legworth.schedules.local_time import clock_of
from legworth.schedules.operating_days import Window, operating_days
from network.arrays import BoolArray, IntArray

__all__ = ["NO_TIME", "seconds_of", "service_begins", "service_days"]

NO_TIME = -1
"""Seconds where a call has no time."""

DAYS = ("monday", "tuesday", "wednesday", "thursday", "friday", "saturday", "sunday")
TIME = re.compile(r" *(\d{1,3}):([0-5]\d):([0-5]\d) *")
NOON = 43200


def service_days(tables: GtfsTables, trips: GtfsTable, window: Window) -> tuple[IntArray, BoolArray]:
    """Tell which services run when.

    Parameters
    ----------
    tables
        The feed.
    trips
        Its trips.
    window
        Dates wanted.

    Returns
    -------
    service, runs
        Position of the service of every trip, and whether each service runs on each day of the window.
    """
    service, names = trips.codes("service_id")
    position = {name: at for at, name in enumerate(names)}
    first, last = window.days
    runs = np.zeros((len(names), last - first + 1), dtype=bool)
    known: set[str] = set()
    calendar, exceptions = tables.get("calendar"), tables.get("calendar_dates")
    if calendar is not None:
        known |= set(calendar.texts("service_id").tolist())
        bits = sum((calendar.numbers(day) << place for place, day in enumerate(DAYS)), np.zeros(len(calendar), int))
        begins, ends = _dates(calendar, "start_date"), _dates(calendar, "end_date")
        turned = (begins >= 0) & (ends >= 0) & (ends < begins)
        calendar.note(
            np.flatnonzero(turned), "end_date", lambda row: "the period ends before it begins; correct one of the dates"
        )
        row, day = operating_days(begins, np.where(turned, begins - 1, ends), bits, np.ones(len(bits), int), window)
        at = np.array([position.get(name, -1) for name in calendar.texts("service_id").tolist()], dtype=np.int64)[row]
        runs[at[at >= 0], day[at >= 0] - first] = True
    if exceptions is not None:
        known |= set(exceptions.texts("service_id").tolist())
        day, added = _dates(exceptions, "date"), exceptions.numbers("exception_type") == 1
        at = np.array([position.get(name, -1) for name in exceptions.texts("service_id").tolist()], dtype=np.int64)
        inside = (at >= 0) & (day >= first) & (day <= last)
        runs[at[inside], day[inside] - first] = added[inside]
    unknown = np.array([*(name not in known for name in names), False], dtype=bool)[service]
    trips.note(
        np.flatnonzero(unknown),
        "service_id",
        lambda row: f"{names[service[row]]!r} is neither in calendar.txt nor in calendar_dates.txt; add it there",
    )
    return service, runs


def service_begins(day: IntArray, zone: str) -> IntArray:
    """Instants from which the times of a day of service count: noon less twelve hours.

    That is midnight but for the days on which clocks change (GTFS Schedule Reference, Field Types, Time).

    Parameters
    ----------
    day
        (n,) days since 1970.
    zone
        IANA name of the zone of the agency.
    """
    if not len(day):
        return np.zeros(0, dtype=np.int64)
    noon = day.astype(np.int64) * 86400 + NOON
    return clock_of(zone, int(day.min()), int(day.max())).of_local(noon).utc - NOON


def seconds_of(table: GtfsTable, column: str) -> IntArray:
    """Seconds after the beginning of the day of service, `NO_TIME` where there is none; notes what is no time."""
    at, texts = table.codes(column)
    found: list[int | None] = []
    for text in texts:
        time = TIME.fullmatch(text)
        found.append(None if time is None else int(time[1]) * 3600 + int(time[2]) * 60 + int(time[3]))
    unreadable = np.array([*(value is None for value in found), False], dtype=bool)[at]
    table.note(
        np.flatnonzero(unreadable),
        column,
        lambda row: f"{texts[at[row]]!r} is not a time; write H:MM:SS, past 24:00:00 where the day of service goes on",
    )
    values: IntArray = np.array([*(NO_TIME if value is None else value for value in found), NO_TIME])[at]
    return values


def _dates(table: GtfsTable, column: str) -> IntArray:
    """Days since 1970, -1 where there is none; notes what is no date."""
    at, texts = table.codes(column)
    found = [_day(text) for text in texts]
    unreadable = np.array([*(day is None for day in found), False], dtype=bool)[at]
    table.note(
        np.flatnonzero(unreadable), column, lambda row: f"{texts[at[row]]!r} is not a date; write it as 20270301"
    )
    values: IntArray = np.array([*(-1 if day is None else day for day in found), -1], dtype=np.int64)[at]
    return values


def _day(text: str) -> int | None:
    text = text.strip()
    if not re.fullmatch(r"\d{8}", text):
        return None
    try:
        return (date(int(text[:4]), int(text[4:6]), int(text[6:])) - date(1970, 1, 1)).days
    except ValueError:
        return None
