"""Connections of small schedules worked out by hand, rule by rule at its limit, and their names."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from legworth.schedules.connections import Connections, build_connections
from network.connection_settings import ConnectionRules, KindMinimum
from tests.legworth.schedules.connection_reference import Ride, Schedule, Stop

# On the equator, so that lengths add up; H lies on the way from A to B, and N off it at an angle of 45 degrees.
STOPS = (Stop("A", (0.0, 0.0)), Stop("H", (0.0, 10.0)), Stop("B", (0.0, 20.0)), Stop("N", (45.0, 10.0)))
ANY = ConnectionRules(detour=1000, keep_dominated=True)


def minutes(text: str) -> int:
    """Clock time on the first day as minutes; ``24:10`` is ten past midnight."""
    hours, rest = text.split(":")
    return 60 * int(hours) + int(rest)


def ride(name: str, ends: str, departs: str, arrives: str, **more: Any) -> Ride:
    return Ride(name, ends[0], ends[1], minutes(departs), minutes(arrives), **more)


def build(*rides: Ride, rules: ConnectionRules = ANY, stops: tuple[Stop, ...] = STOPS, **more: Any) -> Connections:
    schedule = Schedule(stops, rides)
    return build_connections(
        schedule.legs, schedule.stations, rules, kind=schedule.kind, through=schedule.through, **more
    )


def paths(found: Connections, *rides: Ride) -> set[str]:
    names = [ride.name for ride in rides]
    cuts = zip(found.path_start[:-1], found.path_start[1:], strict=True)
    return {" ".join(names[leg] for leg in found.path_leg[begin:end]) for begin, end in cuts}


def connections(*rides: Ride, **more: Any) -> set[str]:
    """The itineraries of more than one leg."""
    return {path for path in paths(build(*rides, **more), *rides) if " " in path}


def test_a_leg_alone_is_an_itinerary() -> None:
    rides = ride("1", "AH", "8:00", "9:00"), ride("2", "BH", "8:00", "9:00")
    found = build(*rides)
    assert paths(found, *rides) == {"1", "2"}
    assert found.itinerary.tolist() == ["A-H-0301-0800", "B-H-0301-0800"]
    assert found.history_name.tolist() == ["A-H-0800", "B-H-0800"]


def test_no_legs_no_itineraries() -> None:
    found = build()
    assert len(found) == 0
    assert found.path_start.tolist() == [0]
    assert all(what.count == 0 for what in found.dropped.values())


@pytest.mark.parametrize(("departs", "connects"), [("9:29", False), ("9:30", True), ("12:00", True), ("12:01", False)])
def test_time_to_connect_from_the_minimum_to_the_maximum(departs: str, connects: bool) -> None:
    rides = ride("1", "AH", "8:00", "9:00"), ride("2", "HB", departs, "14:00")
    assert connections(*rides) == ({"1 2"} if connects else set())


def test_what_is_too_short_or_too_long_is_counted_with_an_example() -> None:
    rides = ride("1", "AH", "8:00", "9:00"), ride("2", "HB", "9:10", "10:00"), ride("3", "HB", "12:30", "13:00")
    dropped = build(*rides).dropped
    assert dropped["minimum_connection"].examples == ("1 2: 10 minutes at H, which needs 30",)
    assert dropped["maximum_connection"].examples == ("1 3: 210 minutes at H, where 180 are the most",)
    assert {rule for rule, what in dropped.items() if what.count} == {"minimum_connection", "maximum_connection"}


@pytest.mark.parametrize(
    ("kinds", "connects"), [(("rail", "air"), False), (("air", "rail"), True), (("", "air"), True)]
)
def test_the_longer_of_the_minimum_of_station_and_kinds_holds(kinds: tuple[str, str], connects: bool) -> None:
    rides = ride("1", "AH", "8:00", "9:00", kind=kinds[0]), ride("2", "HB", "9:45", "11:00", kind=kinds[1])
    minima = (
        KindMinimum(arriving="rail", departing="air", minutes=46),
        KindMinimum(arriving="air", departing="rail", minutes=5),
    )
    rules = replace_rules(minimum_by_kinds=minima)
    assert connections(*rides, rules=rules) == ({"1 2"} if connects else set())
    short = replace(rides[1], departs=minutes("9:10"))
    assert connections(rides[0], short, rules=rules) == set()


def test_a_kind_that_no_leg_has_is_reported() -> None:
    rules = replace_rules(minimum_by_kinds=(KindMinimum(arriving="ral", departing="air", minutes=46),))
    assert build(ride("1", "AH", "8:00", "9:00", kind="air"), rules=rules).unused_kinds == ("ral",)


def test_overnight_goes_by_the_clock_of_the_connecting_station() -> None:
    # Arrives at 23:30 and leaves at 00:10 UTC; where the clock is two hours ahead both stand on the second day.
    here = ride("1", "AH", "22:00", "23:30"), ride("2", "HB", "24:10", "25:00")
    there = replace(here[0], arrives_offset=120), replace(here[1], departs_offset=120)
    never = replace_rules(overnight=False)
    assert connections(*here) == connections(*there, rules=never) == {"1 2"}
    assert connections(*here, rules=never) == set()
    example = "1 2: arrives at H on 2030-03-01, leaves on 2030-03-02"
    assert build(*here, rules=never).dropped["overnight"].examples == (example,)


def test_nobody_comes_back_to_a_station() -> None:
    rides = ride("1", "AH", "8:00", "9:00"), ride("2", "HA", "10:00", "11:00"), ride("3", "AB", "12:00", "13:00")
    found = build(*rides, rules=replace_rules(most_legs=3))
    assert paths(found, *rides) == {"1", "2", "3", "2 3"}
    assert found.dropped["return"].examples == ("1 2: back to A",)


@pytest.mark.parametrize("most", [1, 2, 3])
def test_most_legs(most: int) -> None:
    rides = ride("1", "AH", "8:00", "9:00"), ride("2", "HB", "10:00", "11:00"), ride("3", "BN", "12:00", "13:00")
    wanted = {"1 2", "2 3", "1 2 3"}
    found = connections(*rides, rules=replace_rules(most_legs=most))
    assert found == {path for path in wanted if len(path.split()) <= most}


def test_detour_by_great_circles() -> None:
    # A to N and N to B are each 60 degrees off: cos = cos 10 cos 45; the direct way is 20 degrees.
    rides = ride("1", "AN", "8:00", "9:00"), ride("2", "NB", "10:00", "11:00")
    ratio = 2 * np.degrees(np.arccos(np.cos(np.radians(10)) * np.cos(np.radians(45)))) / 20
    assert connections(*rides, rules=replace_rules(detour=ratio + 0.001)) == {"1 2"}
    assert connections(*rides, rules=replace_rules(detour=ratio - 0.001)) == set()
    example = build(*rides, rules=replace_rules(detour=1.5)).dropped["detour"].examples
    assert example == (f"1 2: {ratio:.2f} times the direct way, 1.5 at most",)


def test_on_the_way_is_no_detour() -> None:
    rides = ride("1", "AH", "8:00", "9:00"), ride("2", "HB", "10:00", "11:00")
    assert connections(*rides, rules=replace_rules(detour=1.0)) == {"1 2"}


def test_without_coordinates_no_detour_but_a_count() -> None:
    rides = ride("1", "AN", "8:00", "9:00"), ride("2", "NB", "10:00", "11:00")
    stops = tuple(replace(stop, place=None) if stop.name == "N" else stop for stop in STOPS)
    found = build(*rides, rules=replace_rules(detour=1.0), stops=stops)
    assert "1 2" in paths(found, *rides)
    assert found.unjudged == 1


@pytest.mark.parametrize(
    ("departs", "arrives", "kept"),
    [("8:00", "11:00", True), ("8:00", "10:59", False), ("8:01", "11:00", False), ("7:59", "10:59", True)],
)
def test_a_connection_that_another_beats_is_dropped(departs: str, arrives: str, kept: bool) -> None:
    # 1 2 leaves at 8:00 and arrives at 11:00; 3 4 goes over another station at the given times.
    rides = (
        ride("1", "AH", "8:00", "9:00"),
        ride("2", "HB", "10:00", "11:00"),
        ride("3", "AN", departs, "9:10"),
        ride("4", "NB", "9:50", arrives),
    )
    rules = replace_rules(keep_dominated=False)
    assert ("1 2" in connections(*rides, rules=rules)) is kept
    assert "3 4" in connections(*rides, rules=rules)
    assert connections(*rides) == {"1 2", "3 4"}


def test_a_nonstop_drops_the_connection_that_it_beats_and_stays_when_beaten() -> None:
    legs = ride("1", "AH", "8:00", "8:30"), ride("2", "HB", "9:00", "10:00")
    rules = replace_rules(keep_dominated=False)
    equal, slow, late = (
        ride("5", "AB", departs, arrives)
        for departs, arrives in (("8:00", "10:00"), ("7:00", "11:00"), ("8:30", "10:00"))
    )
    assert paths(build(*legs, equal, rules=rules), *legs, equal) == {"1", "2", "5"}
    assert paths(build(*legs, late, rules=rules), *legs, late) == {"1", "2", "5"}
    assert paths(build(*legs, slow, rules=rules), *legs, slow) == {"1", "2", "5", "1 2"}


def test_most_per_day_takes_the_quickest_and_never_a_nonstop() -> None:
    rides = (
        ride("1", "AH", "8:00", "9:00"),
        ride("2", "HB", "10:00", "11:00"),
        ride("3", "HB", "10:30", "11:30"),
        ride("4", "AB", "6:00", "12:00"),
        ride("5", "AB", "30:00", "36:00"),
    )
    kept = paths(build(*rides, rules=replace_rules(most_per_day=1)), *rides)
    assert kept == {"1", "2", "3", "4", "5", "1 2"}
    found = build(*rides, rules=replace_rules(most_per_day=1))
    assert found.dropped["most_per_day"].examples == ("1 3: number 2 of A to B on 2030-03-01",)


def test_the_day_is_that_of_the_clock_at_departure() -> None:
    # 23:00 and 1:00 UTC are two dates, but one date two hours ahead.
    rides = (
        ride("1", "AH", "23:00", "23:30"),
        ride("2", "HB", "24:00", "24:30"),
        ride("3", "AH", "25:00", "25:30"),
        ride("4", "HB", "26:00", "26:40"),
    )
    rules = replace_rules(most_per_day=1, maximum_connection=60.0)
    assert connections(*rides, rules=rules) == {"1 2", "3 4"}
    ahead = [replace(one, departs_offset=120) for one in rides]
    assert connections(*ahead, rules=rules) == {"1 2"}


def test_only_wanted_pairs_of_stations() -> None:
    rides = ride("1", "AH", "8:00", "9:00"), ride("2", "HB", "10:00", "11:00")
    found = build(*rides, wanted=np.array([[0, 2], [1, 2]]))
    assert paths(found, *rides) == {"2", "1 2"}
    assert found.dropped["wanted"].examples == ("1: A to H",)
    assert len(build(*rides, wanted=np.zeros((0, 2), dtype=np.int64))) == 0


def test_on_board_no_time_is_needed_nor_too_long_and_legs_count_once() -> None:
    rides = (
        ride("1", "AH", "8:00", "9:00", through="2"),
        ride("2", "HN", "9:01", "10:00", through="3"),
        ride("3", "NB", "20:00", "21:00"),
    )
    found = build(*rides, rules=replace_rules(most_legs=1, detour=1.0, keep_dominated=False))
    assert paths(found, *rides) == {"1", "2", "3", "1 2", "2 3", "1 2 3"}
    assert found.vehicles.tolist() == [1] * 6
    assert all(what.count == 0 for what in found.dropped.values())
    assert "A-B-0301-0800" in found.itinerary
    assert connections(*rides, rules=replace_rules(most_through=2)) == {"1 2", "2 3"}


def test_names_tell_stations_date_and_departures_by_local_clock() -> None:
    rides = ride("1", "AH", "23:30", "24:30", departs_offset=60), ride("2", "HB", "25:00", "26:00", departs_offset=-60)
    found = build(*rides)
    assert found.itinerary.tolist() == ["A-H-B-0302-0030-0000", "A-H-0302-0030", "H-B-0302-0000"]
    assert found.history_name.tolist() == ["A-H-B-0030-0000", "A-H-0030", "H-B-0000"]


def test_recurring_legs_give_recurring_names() -> None:
    rides = [
        ride(f"{number}/{day}", ends, f"{24 * day + hour}:00", f"{24 * day + hour + 1}:00")
        for day in range(2)
        for number, ends, hour in (("X1", "AH", 8), ("X2", "HB", 10))
    ]
    found = build(*rides, recurring=np.array(["X1", "X2"] * 2, dtype=object))
    assert found.itinerary.tolist() == [
        f"{stations}-030{day}-{legs}"
        for stations, legs in (("A-H-B", "X1-X2"), ("A-H", "X1"), ("H-B", "X2"))
        for day in (1, 2)
    ]
    assert sorted(set(found.history_name)) == ["A-H-B-X1-X2", "A-H-X1", "H-B-X2"]


def test_equal_names_are_told_apart_in_the_order_of_leg_names() -> None:
    rides = ride("Y", "AH", "8:00", "9:00"), ride("X", "AH", "8:00", "9:00"), ride("Z", "AH", "8:00", "8:50")
    found = build(*rides)
    names = {rides[leg].name: name for leg, name in zip(found.path_leg, found.itinerary, strict=True)}
    assert names == {"Z": "A-H-0301-0800", "X": "A-H-0301-0800-2", "Y": "A-H-0301-0800-3"}
    assert found.history_name.tolist() == ["A-H-0800", "A-H-0800-2", "A-H-0800-3"]


def test_other_legs_change_no_name() -> None:
    rides = ride("1", "AH", "8:00", "9:00"), ride("2", "HB", "10:00", "11:00")
    more = ride("0", "AH", "7:50", "9:00"), ride("3", "HB", "10:10", "11:00")
    assert set(build(*rides).itinerary) < set(build(*more, *rides).itinerary)


def test_the_year_stands_in_the_date_where_dates_without_it_recur() -> None:
    def names(days: int) -> list[str]:
        later = 24 * days
        return build(ride("1", "AH", "8:00", "9:00"), ride("2", "AH", f"{later + 8}:00", f"{later + 9}:00")).itinerary

    assert list(names(364)) == ["A-H-0301-0800", "A-H-0228-0800"]
    assert list(names(365)) == ["A-H-20300301-0800", "A-H-20310301-0800"]


@pytest.mark.parametrize(
    ("change", "problem"),
    [
        ({"through": np.array([1, -1])}, "from another station"),
        ({"through": np.array([5, -1])}, "must lie from -1 to 1"),
        ({"through": np.array([-1])}, "one kind and one next leg"),
        ({"kind": np.array(["air"], dtype=object)}, "one kind and one next leg"),
        ({"wanted": np.array([[0, 9]])}, "positions from 0 to 3"),
        ({"wanted": np.array([0, 1])}, "rows of two station positions"),
        ({"recurring": np.array(["X"], dtype=object)}, "one recurring name"),
    ],
)
def test_arrays_that_do_not_fit_are_refused(change: dict[str, Any], problem: str) -> None:
    schedule = Schedule(STOPS, (ride("1", "AH", "8:00", "9:00"), ride("2", "BH", "10:00", "11:00")))
    with pytest.raises(ValueError, match=problem):
        build_connections(schedule.legs, schedule.stations, ANY, **change)


def test_counts_for_a_report() -> None:
    rides = ride("1", "AH", "8:00", "9:00"), ride("2", "HB", "10:00", "11:00"), ride("3", "HB", "9:10", "10:00")
    report = build(*rides).as_dict()
    assert report["itineraries"] == 4
    assert report["by_legs"] == report["by_vehicles"] == {"1": 3, "2": 1}
    assert report["dropped"]["minimum_connection"]["count"] == 1


def replace_rules(**change: Any) -> ConnectionRules:
    """The rules that drop least, with some changed."""
    return ConnectionRules.model_validate(ANY.model_dump() | change)
