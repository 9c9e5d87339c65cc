"""A GTFS feed expanded run by run with the standard library, straight from the words of the specification."""

from __future__ import annotations

import csv
import io
from collections import defaultdict
from collections.abc import Iterator, Mapping
from datetime import UTC, date, datetime, time, timedelta
from itertools import pairwise
from zoneinfo import ZoneInfo

from tests.legworth.schedules.schedule_reference import Row

ALPHABET = "ABCDEFGHIJKLMNOPQRSTUVWXYZ"
LETTERS = ["", *ALPHABET[1:], *(one + other for one in ALPHABET for other in ALPHABET)]
Table = list[dict[str, str]]


def tables_of(files: Mapping[str, str]) -> dict[str, Table]:
    return {name.removesuffix(".txt"): list(csv.DictReader(io.StringIO(text))) for name, text in files.items()}


def seconds(text: str) -> int:
    hours, minutes, rest = text.split(":")
    return int(hours) * 3600 + int(minutes) * 60 + int(rest)


def runs_on(tables: dict[str, Table], service: str, day: date) -> bool:
    for row in tables.get("calendar_dates", []):
        if row["service_id"] == service and row["date"] == f"{day:%Y%m%d}":
            return row["exception_type"] == "1"
    return any(
        row["service_id"] == service
        and row["start_date"] <= f"{day:%Y%m%d}" <= row["end_date"]
        and row[f"{day:%A}".lower()] == "1"
        for row in tables.get("calendar", [])
    )


def station_of(tables: dict[str, Table], stop: str) -> str:
    parents = {row["stop_id"]: row.get("parent_station", "") for row in tables["stops"]}
    while parents[stop]:
        stop = parents[stop]
    return "_".join(stop.split())


def departures(tables: dict[str, Table], trip: str, first: int) -> Iterator[tuple[int, str]]:
    """Shifts of a trip on a day, and what its name has besides."""
    rows = [row for row in tables.get("frequencies", []) if row["trip_id"] == trip]
    if not rows:
        yield 0, ""
    for row in rows:
        at = seconds(row["start_time"])
        while at < seconds(row["end_time"]):
            clock = f"{at // 3600:02d}{at % 3600 // 60:02d}" + (f"{at % 60:02d}" if at % 60 else "")
            yield at - first, f"@{clock}"
            at += int(row["headway_secs"])


def expected_rows(files: Mapping[str, str], first: date, last: date, seats: Mapping[str, int]) -> list[Row]:
    """Rows of a feed, by departure and name."""
    tables = tables_of(files)
    zone = ZoneInfo(tables["agency"][0]["agency_timezone"])
    zones = {"_".join(row["stop_id"].split()): row.get("stop_timezone") or zone.key for row in tables["stops"]}
    types = {row["route_id"]: row["route_type"] for row in tables["routes"]}
    calls_of = defaultdict(list)
    for row in sorted(tables["stop_times"], key=lambda row: int(row["stop_sequence"])):
        if row["arrival_time"] and not (row.get("pickup_type") == row.get("drop_off_type") == "1"):
            calls_of[row["trip_id"]].append(row)
    rows = []
    for trip in tables["trips"]:
        merged: list[tuple[str, int, int]] = []
        for call in calls_of[trip["trip_id"]]:
            station = station_of(tables, call["stop_id"])
            arrives, departs = seconds(call["arrival_time"]), seconds(call["departure_time"])
            if merged and merged[-1][0] == station:
                merged[-1] = (station, merged[-1][1], departs)
            else:
                merged.append((station, arrives, departs))
        stem = "_".join(trip["trip_id"].split())
        capacity = next(
            seats[key] for key in (trip["trip_id"], trip["route_id"], types[trip["route_id"]], "*") if key in seats
        )
        day = first
        while day <= last and len(merged) > 1:
            if runs_on(tables, trip["service_id"], day):
                noon = datetime.combine(day, time(12), zone).astimezone(UTC)
                for shift, suffix in departures(tables, trip["trip_id"], merged[0][2]):
                    for number, (one, other) in enumerate(pairwise(merged)):
                        begins = noon - timedelta(hours=12) + timedelta(seconds=shift)
                        departs, arrives = begins + timedelta(seconds=one[2]), begins + timedelta(seconds=other[1])
                        row = (
                            f"{stem}{suffix}-{day:%m%d}{LETTERS[number]}",
                            one[0],
                            other[0],
                            departs.astimezone(ZoneInfo(zones[one[0]])).isoformat(),
                            arrives.astimezone(ZoneInfo(zones[other[0]])).isoformat(),
                            capacity,
                        )
                        rows.append((departs, row))
            day += timedelta(days=1)
    return [row for _, row in sorted(rows)]
