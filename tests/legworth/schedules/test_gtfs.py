"""GTFS feeds: every odd case of the specification against an expansion run by run, and every fault told."""

from __future__ import annotations

import random
from collections.abc import Mapping
from dataclasses import replace
from datetime import date
from pathlib import Path

import numpy as np
import pytest

from legworth.schedules import GtfsOptions, Places, Timetable, Window
from legworth.schedules.gtfs import read_gtfs
from network import InputError, SettingError
from network.faults import Faults
from tests.legworth.schedules.feeds import FEED, SEATS, as_folder, as_zip, feed, replaced, zipped
from tests.legworth.schedules.gtfs_reference import expected_rows
from tests.legworth.schedules.schedule_reference import rows_of
from tests.legworth.schedules.test_ssim import places_with

WEEK = Window(date(2027, 3, 25), date(2027, 3, 31))


def read(
    path: Path,
    window: Window = WEEK,
    *,
    places: Places | None = None,
    seats: Mapping[str, int] = SEATS,
    kinds: tuple[str, ...] = (),
) -> tuple[Timetable | None, Faults]:
    faults = Faults()
    found = read_gtfs(path, window, places or Places.none(), seats, GtfsOptions(kinds), faults)
    return (None if found is None else found.in_order()), faults


def sound(path: Path, window: Window = WEEK, **how: object) -> Timetable:
    timetable, faults = read(path, window, **how)  # type: ignore[arg-type]
    assert not faults.errors, [str(fault) for fault in faults.errors]
    assert timetable is not None
    return timetable


WINDOWS = [WEEK, Window(date(2027, 10, 29), date(2027, 11, 2)), Window(date(2027, 4, 28), date(2027, 5, 3))]


@pytest.mark.parametrize("window", WINDOWS, ids=["spring", "autumn", "end of a service"])
@pytest.mark.parametrize("write", [as_folder, as_zip])
def test_the_feed_is_read_as_run_by_run(window: Window, write: object, tmp_path: Path) -> None:
    assert callable(write)
    timetable = sound(write(FEED, tmp_path / "feed.zip"), window)
    assert rows_of(timetable) == expected_rows(FEED, window.first, window.last, SEATS)
    assert len(timetable) > 20


def test_times_past_midnight_on_the_night_the_clocks_go_forward(tmp_path: Path) -> None:
    """The day of service begins at noon less 12 hours: at 23:00 the day before, on 28 March 2027 in Berlin.

    The trip of 27 March runs through the missing hour: 26:30 is 02:30 by the old clock, which shows 03:30.
    """
    rows = {row[0]: row[3:5] for row in rows_of(sound(as_folder(FEED, tmp_path)))}
    assert rows["night-0327"] == ("2027-03-27T23:10:00+01:00", "2027-03-28T00:10:00+01:00")
    assert rows["night-0327C"] == ("2027-03-28T01:30:00+01:00", "2027-03-28T03:30:00+02:00")
    assert rows["night-0328"] == ("2027-03-28T23:10:00+02:00", "2027-03-29T00:10:00+02:00")
    assert rows["up_1-0328"] == ("2027-03-28T08:00:00+02:00", "2027-03-28T09:00:00+02:00")


def test_a_stop_has_its_own_clock(tmp_path: Path) -> None:
    rows = {row[0]: row[3:5] for row in rows_of(sound(as_folder(FEED, tmp_path)))}
    assert rows["boat-0325"] == ("2027-03-25T13:00:00+01:00", "2027-03-25T18:00:00+00:00")


def test_stations_are_parents_with_their_coordinates_zones_and_connection_times(tmp_path: Path) -> None:
    places = sound(as_folder(FEED, tmp_path)).places
    assert places.name.tolist() == ["HB", "IS", "MI", "NO"]
    assert places.label.tolist() == ["Hainburg", "Insel Kap", "Mittweg", "Nordende"]
    assert places.latitude.tolist() == [50.5, 55.0, 52.0, 54.0]
    assert places.timezone.tolist() == ["Europe/Berlin", "Europe/London", "Europe/Berlin", "Europe/Berlin"]
    np.testing.assert_array_equal(places.minimum_connection, [10, np.nan, np.nan, np.nan])


def test_a_table_of_stations_comes_first(tmp_path: Path) -> None:
    table = places_with({"MI": "", "HB": "Europe/Vienna", "ELSEWHERE": ""})
    table = replace(table, minimum_connection=np.array([7.0, np.nan, 3.0]))
    places = sound(as_folder(FEED, tmp_path), places=table).places
    assert places.name.tolist() == ["HB", "IS", "MI", "NO"]
    np.testing.assert_array_equal(places.minimum_connection, [10, np.nan, 7, np.nan])
    assert places.timezone.tolist()[0] == "Europe/Vienna"


def test_where_passengers_may_not_board_or_alight_no_ride_begins_or_ends(tmp_path: Path) -> None:
    timetable = sound(as_folder(FEED, tmp_path), Window(date(2027, 3, 27), date(2027, 3, 27)))
    at = {name: leg for leg, name in enumerate(timetable.name.tolist())}
    paths = [
        ["night-0327"],
        ["night-0327B"],
        ["night-0327", "night-0327B"],
        ["up_1-0327B"],
        ["up_1-0327B", "down1-0327"],
    ]
    start = np.cumsum([0, *map(len, paths)])
    legs = np.array([at[name] for path in paths for name in path])
    permitted = timetable.traffic.permitted(timetable.through, start, legs)
    assert permitted.tolist() == [True, False, True, True, True]


def test_what_was_passed_is_counted(tmp_path: Path) -> None:
    timetable = sound(as_folder(FEED, tmp_path))
    assert timetable.left_out == {"calls without times": 1, "calls at which nobody may board or alight": 1}


def test_frequencies_are_departures_and_say_so_where_they_are_not_exact(tmp_path: Path) -> None:
    timetable, faults = read(as_folder(FEED, tmp_path), Window(date(2027, 3, 30), date(2027, 3, 30)))
    assert timetable is not None
    names = [name for name in timetable.name.tolist() if name.startswith("shuttle")]
    assert names == ["shuttle@0700-0330", "shuttle@0730-0330", "shuttle@0800-0330", "shuttle@161030-0330"]
    assert [(fault.file, fault.line, fault.column) for fault in faults.warnings] == [
        ("frequencies.txt", 3, "exact_times")
    ]


def test_kinds_of_routes(tmp_path: Path) -> None:
    folder = as_folder(FEED, tmp_path)
    assert set(sound(folder).kind.tolist()) == {"rail", "ferry", "coach"}
    boats = sound(folder, kinds=("ferry",))
    assert set(boats.kind.tolist()) == {"ferry"}
    assert boats.left_out == {"trips of other kinds": 4}
    with pytest.raises(SettingError, match="is no kind of route"):
        GtfsOptions(("spaceship",))


def test_calls_at_the_same_minute_are_set_a_second_apart(tmp_path: Path) -> None:
    calls = "trip_id,arrival_time,departure_time,stop_id,stop_sequence\n" + "".join(
        f"{trip},{at},{at},{stop},{n}\n"
        for trip, times in (
            ("boat", ["8:00:00"] * 3 + ["8:00:02"]),
            ("down1", ["8:00:00", "8:00:00", "8:01:00", "8:01:00"]),
        )
        for n, (at, stop) in enumerate(zip(times, ["NO", "MI", "HB 1", "IS"], strict=True))
    )
    timetable, faults = read(as_folder(feed(stop_times=calls), tmp_path), Window(date(2027, 3, 27), date(2027, 3, 27)))
    assert timetable is not None
    clocks = [(row[0], row[3][14:19], row[4][14:19]) for row in rows_of(timetable)]
    assert clocks == [
        ("boat-0327", "00:00", "00:01"),
        ("down1-0327", "00:00", "00:01"),
        ("boat-0327B", "00:01", "00:02"),
        ("down1-0327B", "00:01", "01:00"),
        ("boat-0327C", "00:02", "00:03"),
        ("down1-0327C", "01:00", "01:01"),
    ]
    assert [fault.count for fault in faults.warnings if fault.column == "arrival_time"] == [4]
    assert (timetable.through >= 0).sum() == 4


def test_a_route_of_a_carrier_that_the_feed_does_not_have_is_warned_of(tmp_path: Path) -> None:
    """routes.agency_id is a foreign key of agency.agency_id (GTFS Schedule Reference, routes.txt; from memory)."""
    day = Window(date(2027, 3, 30), date(2027, 3, 30))
    sound_rows = rows_of(sound(as_folder(FEED, tmp_path / "sound"), day))
    timetable, faults = read(as_folder(replaced("routes", "F1,SK,", "F1,SX,"), tmp_path / "odd"), day)
    assert timetable is not None
    assert rows_of(timetable) == sound_rows
    found = [(fault.file, fault.line, fault.column) for fault in faults.warnings if fault.file == "routes.txt"]
    assert found == [("routes.txt", 3, "agency_id")]
    blank, faults = read(as_folder(replaced("routes", "F1,SK,", "F1,,"), tmp_path / "blank"), day)
    assert blank is not None
    assert not [fault for fault in faults.warnings if fault.file == "routes.txt"]


FAULTS = {
    "no agency": (feed(agency=None), "agency.txt", 0, ""),
    "no stop times": (feed(stop_times=None), "stop_times.txt", 0, ""),
    "no calendar at all": (feed(calendar=None, calendar_dates=None), "calendar.txt", 0, ""),
    "unknown zone": (replaced("agency", "Europe/Berlin", "Europe/Berlln"), "agency.txt", 2, "agency_timezone"),
    "two zones": (
        feed(agency=FEED["agency.txt"] + "X,Other,https://x.example,Europe/Paris\n"),
        "agency.txt",
        3,
        "agency_timezone",
    ),
    "unknown stop zone": (replaced("stops", "Europe/London", "London"), "stops.txt", 9, "stop_timezone"),
    "unknown parent": (replaced("stops", "0,HB,\nHB1n", "0,HC,\nHB1n"), "stops.txt", 4, "parent_station"),
    "a circle of parents": (replaced("stops", "1,,\nHB 1", "0,HB 2,\nHB 1"), "stops.txt", 2, "parent_station"),
    "a stop twice": (feed(stops=FEED["stops.txt"] + "NO,Twice,1,1,,,\n"), "stops.txt", 10, "stop_id"),
    "a latitude that is none": (replaced("stops", "54.0", "154.0"), "stops.txt", 6, "stop_lat"),
    "a latitude in words": (replaced("stops", "54.0", "north"), "stops.txt", 6, "stop_lat"),
    "unknown route": (replaced("trips", "C1,WEEK", "C2,WEEK"), "trips.txt", 6, "route_id"),
    "unknown service": (replaced("trips", "C1,WEEK", "C1,WEAK"), "trips.txt", 6, "service_id"),
    "a trip twice": (feed(trips=FEED["trips.txt"] + "R1,DAILY,boat,,\n"), "trips.txt", 7, "trip_id"),
    "a route type that is none": (replaced("routes", "Coach,200", "Coach,bus"), "routes.txt", 4, "route_type"),
    "unknown trip of a call": (replaced("stop_times", "boat,13:00", "bout,13:00"), "stop_times.txt", 15, "trip_id"),
    "unknown stop of a call": (replaced("stop_times", "PA,8", "PX,8"), "stop_times.txt", 5, "stop_id"),
    "a time that is none": (
        replaced("stop_times", "13:00:00,13:00:00", "13:60:00,13:00:00"),
        "stop_times.txt",
        15,
        "arrival_time",
    ),
    "a time without seconds": (
        replaced("stop_times", "19:00:00,19:00:00", "19:00:00,19:00"),
        "stop_times.txt",
        16,
        "departure_time",
    ),
    "a call out of order": (
        replaced("stop_times", "boat,19:00:00,19:00:00", "boat,12:00:00,12:00:00"),
        "stop_times.txt",
        16,
        "arrival_time",
    ),
    "departure before arrival": (
        replaced("stop_times", "11:25:00,11:30:00", "11:25:00,11:20:00"),
        "stop_times.txt",
        9,
        "departure_time",
    ),
    "no time at the end": (
        replaced("stop_times", "boat,19:00:00,19:00:00", "boat,,"),
        "stop_times.txt",
        16,
        "arrival_time",
    ),
    "a sequence number twice": (
        replaced("stop_times", "PA,8,", "PA,7,"),
        "stop_times.txt",
        5,
        "trip_id and stop_sequence",
    ),
    "a pickup type that is none": (
        replaced("stop_times", "MI,20,3,2", "MI,20,5,2"),
        "stop_times.txt",
        9,
        "pickup_type",
    ),
    "a date that is none": (replaced("calendar", "20270430", "20270431"), "calendar.txt", 3, "end_date"),
    "a period turned round": (replaced("calendar", "20270430", "20270228"), "calendar.txt", 3, "end_date"),
    "a day that is neither": (replaced("calendar", "WEEK,1,1", "WEEK,1,2"), "calendar.txt", 3, "tuesday"),
    "an exception of no kind": (
        replaced("calendar_dates", "20270326,2", "20270326,3"),
        "calendar_dates.txt",
        2,
        "exception_type",
    ),
    "an exception twice": (
        feed(calendar_dates=FEED["calendar_dates.txt"] + "SUN,20270328,2\n"),
        "calendar_dates.txt",
        7,
        "service_id and date",
    ),
    "a frequency of an unknown trip": (
        replaced("frequencies", "shuttle,7", "shuttl,7"),
        "frequencies.txt",
        2,
        "trip_id",
    ),
    "a frequency turned round": (replaced("frequencies", "8:30:00", "6:30:00"), "frequencies.txt", 2, "end_time"),
    "frequencies that meet": (replaced("frequencies", "16:10:30", "7:30:00"), "frequencies.txt", 3, "start_time"),
    "no headway": (replaced("frequencies", "1800", "0"), "frequencies.txt", 2, "headway_secs"),
    "unknown stop of a transfer": (replaced("transfers", "MI,NO", "MI,NX"), "transfers.txt", 5, "to_stop_id"),
    "a column missing": (replaced("stop_times", "stop_sequence,", "sequence,"), "stop_times.txt", 1, "stop_sequence"),
    "a value too many": (replaced("trips", "boat,,", "boat,,,,,"), "trips.txt", 5, ""),
    "names that differ in white space": (
        feed(
            trips=FEED["trips.txt"] + "R1,DAILY,up_1,,\n",
            stop_times=FEED["stop_times.txt"] + "up_1,8:00:00,8:00:00,NO,1,,,\nup_1,9:00:00,9:00:00,MI,2,,,\n",
        ),
        "trips.txt",
        7,
        "trip_id",
    ),
}


@pytest.mark.parametrize("name", FAULTS)
def test_a_fault_is_told_by_file_line_and_column(name: str, tmp_path: Path) -> None:
    files, file, line, column = FAULTS[name]
    timetable, faults = read(as_folder(files, tmp_path))
    assert timetable is None
    assert (file, line, column) in [(fault.file, fault.line, fault.column) for fault in faults.errors]
    for fault in faults.errors:
        assert "; " in fault.problem or fault.count > 1


def test_routes_without_seats_are_named(tmp_path: Path) -> None:
    timetable, faults = read(as_folder(FEED, tmp_path), seats={"R1": 400, "shuttle": 10})
    assert timetable is None
    (error,) = faults.errors
    assert (error.file, error.line, error.column) == ("routes.txt", 3, "route_id")
    assert "route 'F1' (route_type 1200)" in error.problem


def test_stations_that_a_complete_table_does_not_have(tmp_path: Path) -> None:
    table = places_with({"HB": "", "MI": "", "NO": ""}, complete=True)
    timetable, faults = read(as_folder(FEED, tmp_path), places=table)
    assert timetable is None
    assert [(fault.file, fault.line, fault.column) for fault in faults.errors] == [("stops.txt", 9, "stop_id")]


@pytest.mark.parametrize("size", [0, 3, 200, 900])
def test_zip_files_cut_off(size: int, tmp_path: Path) -> None:
    path = tmp_path / "feed.zip"
    path.write_bytes(zipped(FEED)[:size])
    with pytest.raises(InputError, match="cannot be read as a zip file"):
        read(path)


def test_mutated_feeds_end_in_legs_or_in_faults(tmp_path: Path) -> None:
    outcomes = {True: 0, False: 0}
    names = list(FEED)
    for seed in range(60):
        rng, files = random.Random(seed), {name: bytearray(text.encode()) for name, text in FEED.items()}
        for _ in range(rng.choice([1, 1, 2, 4])):
            data = files[rng.choice(names)]
            at = rng.randrange(len(data))
            if rng.random() < 0.7:
                data[at] = rng.choice(b'0123456789,:-\n"ABZ\xff\0 ')
            else:
                del data[at : at + rng.choice([1, 3, 20, 400])]
        packed = bytearray(zipped({name: bytes(data) for name, data in files.items()}))
        if seed % 5 == 0:
            packed[rng.randrange(len(packed))] ^= 1 << rng.randrange(8)
        path = tmp_path / "feed.zip"
        path.write_bytes(packed)
        try:
            timetable, faults = read(path)
        except (InputError, SettingError):
            outcomes[False] += 1
            continue
        assert (timetable is None) == bool(faults.errors)
        outcomes[timetable is not None] += 1
    assert min(outcomes.values()) > 4, outcomes
