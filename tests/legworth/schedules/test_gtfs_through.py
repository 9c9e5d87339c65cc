"""Rides without a change in feeds: along trips, blocks and trips that transfers.txt joins or parts.

What is expected follows the section on linked trips of the GTFS Schedule Reference (from memory), run by run.
"""

from __future__ import annotations

from collections.abc import Mapping
from datetime import date
from itertools import product
from pathlib import Path

import numpy as np
import pytest

from legworth.schedules import Timetable, Window
from tests.legworth.schedules.feeds import FEED, as_folder, feed
from tests.legworth.schedules.test_gtfs import read, sound

MARCH_27 = Window(date(2027, 3, 27), date(2027, 3, 27))
ALONG = {
    "up_1-0327": "up_1-0327B",
    "down1-0327": "down1-0327B",
    "night-0327": "night-0327B",
    "night-0327B": "night-0327C",
}
"""Legs of one trip."""


def onward(timetable: Timetable) -> dict[str, str]:
    return {
        str(timetable.name[leg]): str(timetable.name[next_leg])
        for leg, next_leg in enumerate(timetable.through.tolist())
        if next_leg >= 0
    }


def linked(*rows: str, trips: str = "", calls: str = "") -> dict[str, str]:
    """The feed with rows ``from_trip_id,to_trip_id,transfer_type`` in transfers.txt, and more trips."""
    return feed(
        transfers="from_trip_id,to_trip_id,transfer_type\n" + "".join(f"{row}\n" for row in rows),
        trips=FEED["trips.txt"] + trips,
        stop_times=FEED["stop_times.txt"] + calls,
    )


EARLY = {
    "trips": "R1,DAILY,early,,\nR1,DAILY,later,,\n",
    "calls": "early,4:00:00,4:00:00,MI,1,,,\nearly,4:40:00,4:40:00,HB 1,2,,,\n"
    "later,4:10:00,4:10:00,MI,1,,,\nlater,4:50:00,4:50:00,HB 1,2,,,\n",
}


def test_along_trips_and_blocks(tmp_path: Path) -> None:
    assert onward(sound(as_folder(FEED, tmp_path), MARCH_27)) == {**ALONG, "up_1-0327B": "down1-0327"}


def test_trips_of_a_block_can_be_parted(tmp_path: Path) -> None:
    assert onward(sound(as_folder(linked("up 1,down1,5"), tmp_path), MARCH_27)) == ALONG


def test_what_transfers_say_of_the_other_direction_parts_nothing(tmp_path: Path) -> None:
    found = onward(sound(as_folder(linked("down1,up 1,5"), tmp_path), MARCH_27))
    assert found["up_1-0327B"] == "down1-0327"


def test_a_trip_goes_on_as_the_other_one_comes_first(tmp_path: Path) -> None:
    """The coach runs by frequency: the first departure after the arrival at 12:00 is that at 16:10:30."""
    tuesday = Window(date(2027, 3, 30), date(2027, 3, 30))
    timetable, _ = read(as_folder(linked("down1,shuttle,4"), tmp_path), tuesday)
    assert timetable is not None
    assert onward(timetable)["down1-0330B"] == "shuttle@161030-0330"


def test_a_trip_past_midnight_goes_on_as_one_of_the_next_day_of_service(tmp_path: Path) -> None:
    """The night train reaches Mittweg at half past two and goes on at four, by the calendar of the day after."""
    both = Window(date(2027, 3, 27), date(2027, 3, 28))
    found = onward(sound(as_folder(linked("night,early,4", **EARLY), tmp_path), both))
    assert found["night-0327C"] == "early-0328"
    assert "night-0328C" not in found


def test_a_link_comes_before_the_block(tmp_path: Path) -> None:
    calls = "boat 2,10:05:00,10:05:00,NO,1,,,\nboat 2,18:00:00,18:00:00,IS,2,,,\n"
    files = linked("up 1,boat 2,4", trips="F1,DAILY,boat 2,,\n", calls=calls)
    assert onward(sound(as_folder(files, tmp_path), MARCH_27)) == {**ALONG, "up_1-0327B": "boat_2-0327"}


def test_two_trips_may_go_on_as_one(tmp_path: Path) -> None:
    calls = "feeder,9:00:00,9:00:00,IS,1,,,\nfeeder,10:20:00,10:20:00,NO,2,,,\n"
    files = linked("feeder,down1,4", trips="F1,DAILY,feeder,,\n", calls=calls)
    found = onward(sound(as_folder(files, tmp_path), MARCH_27))
    assert found["feeder-0327"] == found["up_1-0327B"] == "down1-0327"


@pytest.mark.parametrize(
    ("rows", "more", "line", "message"),
    [
        (("night,boat,4",), {}, 2, "joins trips that never meet at one station within a day; it was passed"),
        (("down1,up 1,5", ",down1,4"), {}, 3, "of transfer_type 4 or 5 names no two trips; it was passed"),
        (("night,early,4", "night,later,4"), EARLY, 3, "joins a trip to one more; of several the one that departs"),
        (("night,later,4", "night,early,4"), EARLY, 2, "joins a trip to one more; of several the one that departs"),
    ],
)
def test_links_that_say_nothing_are_told(
    rows: tuple[str, ...], more: Mapping[str, str], line: int, message: str, tmp_path: Path
) -> None:
    both = Window(date(2027, 3, 27), date(2027, 3, 28))
    timetable, faults = read(as_folder(linked(*rows, **more), tmp_path), both)
    assert timetable is not None
    told = [fault for fault in faults.warnings if fault.file == "transfers.txt"]
    assert [(fault.line, fault.column) for fault in told] == [(line, "from_trip_id")]
    assert told[0].problem.startswith(message)
    if more:
        assert onward(timetable)["night-0327C"] == "early-0328"


def test_an_unknown_trip_is_a_fault(tmp_path: Path) -> None:
    timetable, faults = read(as_folder(linked("up 1,gone,4"), tmp_path), MARCH_27)
    assert timetable is None
    assert [(fault.line, fault.column) for fault in faults.errors] == [(2, "to_trip_id")]


def test_drawn_links_join_what_a_search_run_by_run_joins(tmp_path: Path) -> None:
    rng = np.random.default_rng(5)
    window = Window(date(2027, 3, 1), date(2027, 3, 4))
    for case in range(30):
        names = [f"t{at}" for at in range(6)]
        begin = rng.integers(0, 40 * 60, 6)
        ends = begin + rng.integers(5, 300, 6)
        stops = [rng.choice(["HB 1", "MI", "NO"], 2, replace=False).tolist() for _ in names]
        clock = [[f"{at // 60}:{at % 60:02d}:00" for at in pair] for pair in zip(begin, ends, strict=True)]
        calls = "".join(
            f"{name},{when},{when},{stop},{at},,,\n"
            for name, times, two in zip(names, clock, stops, strict=True)
            for at, (when, stop) in enumerate(zip(times, two, strict=True))
        )
        links = [(one, other) for one, other in product(range(6), repeat=2) if one != other and rng.random() < 0.3]
        files = linked(
            *(f"{names[one]},{names[other]},4" for one, other in links),
            trips="".join(f"R1,{'DAILY' if rng.random() < 0.7 else 'WEEK'},{name},,\n" for name in names),
            calls=calls,
        )
        timetable, _ = read(as_folder(files, tmp_path / str(case)), window)
        assert timetable is not None
        found = {key: value for key, value in onward(timetable).items() if key[0] == "t"}
        expected: dict[str, str] = {}
        runs = [(str(name), leg) for leg, name in enumerate(timetable.name) if str(name)[0] == "t"]
        for name, leg in runs:
            following = [
                (int(timetable.departs[other]), after)
                for after, other in runs
                for pair in links
                if (names[pair[0]], names[pair[1]]) == (name.split("-")[0], after.split("-")[0])
                and timetable.destination[leg] == timetable.origin[other]
                and 0 <= timetable.departs[other] - timetable.arrives[leg] < 86_400
            ]
            if following:
                earliest = min(when for when, _ in following)
                alike = [after for when, after in following if when == earliest]
                expected[name] = found[name] if found.get(name) in alike else alike[0]
        assert found == expected
