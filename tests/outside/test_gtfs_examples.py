"""GTFS feeds against published examples and sentences of the specification.

Sources: the example feed of the GTFS documentation (gtfs.org, Documentation, Schedule, Example feed; published by its
makers as a sample under the Apache licence 2.0, from memory), in ``data/gtfs_example`` as packaged with gtfs-kit
13.0.1, no value changed; and the GTFS Schedule Reference (gtfs.org, Documentation, Schedule, Reference), sentences told
in our own words.
"""

from __future__ import annotations

from collections import Counter
from datetime import date
from pathlib import Path

import pytest

from legworth.schedules import GtfsOptions, Places, Timetable, Window
from legworth.schedules.gtfs import read_gtfs
from network.faults import Faults
from tests.legworth.schedules.feeds import as_folder
from tests.legworth.schedules.gtfs_reference import expected_rows
from tests.legworth.schedules.schedule_reference import rows_of

EXAMPLE = Path(__file__).parent / "data" / "gtfs_example"
SUNDAY, MONDAY, TUESDAY = (date(2007, 6, day) for day in (3, 4, 5))


def read(path: Path, first: date, last: date) -> Timetable:
    faults = Faults()
    found = read_gtfs(path, Window(first, last), Places.none(), {"*": 30}, GtfsOptions(), faults)
    assert not faults.errors
    assert found is not None
    return found.in_order()


def legs_by_trip(timetable: Timetable) -> Counter[str]:
    return Counter(name.partition("-")[0].partition("@")[0] for name in timetable.name.tolist())


def test_departures_of_the_example_counted_by_hand() -> None:
    """On a Sunday: both service periods run. Headways by frequencies.txt; a city trip has four legs."""
    shuttle = 16 * 2  # 6:00 to 22:00, every 30 minutes
    city = 4 + 12 + 12 + 18 + 6  # 30, 10, 30, 10, 30 minutes within the five periods
    assert legs_by_trip(read(EXAMPLE, SUNDAY, SUNDAY)) == {
        "STBA": shuttle,
        "CITY1": 4 * city,
        "CITY2": 4 * city,
        **dict.fromkeys(["AB1", "AB2", "BFC1", "BFC2", "AAMV1", "AAMV2", "AAMV3", "AAMV4"], 1),
    }


def test_the_exception_of_the_example_takes_all_trips_of_that_monday() -> None:
    """calendar_dates.txt removes the daily service on 4 June 2007; the other one runs on weekends only."""
    assert len(read(EXAMPLE, MONDAY, MONDAY)) == 0
    assert len(read(EXAMPLE, TUESDAY, TUESDAY)) == len(read(EXAMPLE, SUNDAY, SUNDAY)) - 4


def test_times_of_the_example_are_those_of_los_angeles() -> None:
    rows = {row[0]: row[1:5] for row in rows_of(read(EXAMPLE, SUNDAY, SUNDAY))}
    assert rows["AB1-0603"] == ("BEATTY_AIRPORT", "BULLFROG", "2007-06-03T08:00:00-07:00", "2007-06-03T08:10:00-07:00")
    assert rows["CITY2@0630-0603B"] == ("DADAN", "NADAV", "2007-06-03T06:37:00-07:00", "2007-06-03T06:42:00-07:00")


def test_blocks_of_the_example_are_rides_without_a_change() -> None:
    """Blocks: trips of one block are run by one vehicle, and passengers can stay on board from one to the next."""
    timetable = read(EXAMPLE, TUESDAY, TUESDAY)
    at = {name: leg for leg, name in enumerate(timetable.name.tolist())}
    assert timetable.through[at["AB1-0605"]] == at["BFC1-0605"]
    assert timetable.through[at["BFC2-0605"]] == at["AB2-0605"]
    assert timetable.through[at["AB2-0605"]] == -1


def test_the_example_is_read_as_run_by_run() -> None:
    files = {path.name: path.read_text(encoding="utf-8") for path in EXAMPLE.glob("*.txt")}
    assert rows_of(read(EXAMPLE, SUNDAY, TUESDAY)) == expected_rows(files, SUNDAY, TUESDAY, {"*": 30})


def night_feed(times: str) -> dict[str, str]:
    """One trip of two calls a day in Los Angeles."""
    files = {path.name: path.read_text(encoding="utf-8") for path in EXAMPLE.glob("*.txt")}
    files["stop_times.txt"] = f"trip_id,arrival_time,departure_time,stop_id,stop_sequence\n{times}"
    del files["frequencies.txt"]
    return files


@pytest.mark.parametrize(
    ("day", "departs", "arrives"),
    [
        (TUESDAY, "2007-06-05T14:30:00-07:00", "2007-06-06T01:35:00-07:00"),
        # Clocks went forward at 2:00 on 11 March 2007 and back at 2:00 on 4 November 2007 (IANA database): the day of
        # service counts from noon less twelve hours, so 14:30 is 14:30 by the clock, and 25:35 is 1:35 of the next day.
        (date(2007, 3, 10), "2007-03-10T14:30:00-08:00", "2007-03-11T01:35:00-08:00"),
        (date(2007, 3, 11), "2007-03-11T14:30:00-07:00", "2007-03-12T01:35:00-07:00"),
        (date(2007, 11, 4), "2007-11-04T14:30:00-08:00", "2007-11-05T01:35:00-08:00"),
    ],
)
def test_the_times_of_the_reference(day: date, departs: str, arrives: str, tmp_path: Path) -> None:
    """Field types, Time: 14:30:00 is half past two in the afternoon, 25:35:00 is 1:35 on the next day."""
    feed = night_feed("AB1,14:30:00,14:30:00,BULLFROG,1\nAB1,25:35:00,25:35:00,AMV,2\n")
    ((_, _, _, *moments, _),) = rows_of(read(as_folder(feed, tmp_path), day, day))
    assert moments == [departs, arrives]


@pytest.mark.parametrize(
    ("text", "shown"), [("0:30:00", "2007-03-10T23:30:00-08:00"), ("3:30:00", "2007-03-11T03:30:00-07:00")]
)
def test_early_times_on_a_day_of_23_hours(text: str, shown: str, tmp_path: Path) -> None:
    """Noon less twelve hours of 11 March 2007 is 23:00 of the day before: what is earlier than the change shifts."""
    feed = night_feed(f"AB1,{text},{text},BULLFROG,1\nAB1,5:00:00,5:00:00,AMV,2\n")
    ((_, _, _, departs, _, _),) = rows_of(read(as_folder(feed, tmp_path), date(2007, 3, 11), date(2007, 3, 11)))
    assert departs == shown
