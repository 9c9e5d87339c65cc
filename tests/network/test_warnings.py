"""What is odd but no fault: warned of with its place, and what it means for the network."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pandas as pd
import pytest

from network import Network, read_folder
from tests.folders import Folder
from tests.network.test_large_tables import with_row_groups

Place = tuple[str, int, str]


def remaining_on(leg: str, seats: int) -> Callable[[Network], bool]:
    return lambda network: network.remaining[list(network.legs.name).index(leg)] == seats


def expected_of(itinerary: str, fare_class: str) -> Callable[[Network], bool]:
    def holds(network: Network) -> bool:
        chosen = network.itinerary[network.product_itinerary] == itinerary
        chosen &= network.product_class == network.fare_classes.index(fare_class)
        return network.demand.expected[chosen].tolist() == [0.0]

    return holds


def without_itinerary(name: str) -> Callable[[pd.DataFrame], pd.DataFrame]:
    return lambda frame: frame[frame["itinerary"] != name]


def zoned(folder: Folder, *zones: str) -> Folder:
    return folder.frame("stations.csv", lambda frame: frame.assign(timezone=zones))


CASES: dict[str, tuple[Callable[[Folder], Folder], list[Place], Callable[[Network], bool]]] = {
    "sold above capacity": (
        lambda folder: folder.cell("legs.csv", 4, "sold", "17"),
        [("legs.csv", 4, "sold")],
        remaining_on("L3", 0),
    ),
    "capacity cut to nothing": (
        lambda folder: folder.cell("legs.csv", 2, "capacity", "0"),
        [("legs.csv", 2, "sold")],
        remaining_on("L1", 0),
    ),
    "fare without demand": (
        lambda folder: folder.line("demand.csv", 3, None),
        [("fares.csv", 3, "fare_class")],
        expected_of("NOR-HUB", "B"),
    ),
    "fares rising down the class order": (
        lambda folder: folder.cell("fares.csv", 4, "fare", "81"),
        [("fares.csv", 4, "fare")],
        lambda network: network.fare[:3].tolist() == [120, 80, 81],
    ),
    "leg in no itinerary": (
        lambda folder: folder.add("legs.csv", "L6,OST,SUD,2030-03-04T08:00+02:00,2030-03-04T09:00+01:00,9,4"),
        [("legs.csv", 7, "leg")],
        remaining_on("L6", 5),
    ),
    "leg departed before the snapshot": (
        lambda folder: folder.replace("network.toml", "2030-02-25T02:30", "2030-03-01T06:30"),
        [("legs.csv", 2, "departs")],
        remaining_on("L1", 0),
    ),
    "leg that departs at the snapshot": (
        lambda folder: folder.replace("network.toml", "2030-02-25T02:30", "2030-03-01T06:00"),
        [("legs.csv", 2, "departs")],
        remaining_on("L1", 0),
    ),
    "every leg departed": (
        lambda folder: folder.replace("network.toml", "2030-02-25T02:30", "2030-03-05T02:30"),
        [("network.toml", 3, "as_of")],
        lambda network: network.remaining.tolist() == [0, 0, 0, 0, 0],
    ),
    "deviation of no demand": (
        lambda folder: folder.cell("demand.csv", 3, "mean", "0"),
        [("demand.csv", 3, "deviation")],
        expected_of("NOR-HUB", "B"),
    ),
    "class without fares": (
        lambda folder: folder.replace("network.toml", '"C"]', '"C", "D", "E"]'),
        [("network.toml", 4, "fare_classes")] * 2,
        lambda network: network.fare_classes == ("A", "B", "C", "D", "E"),
    ),
    "classes that differ in capitals": (
        lambda folder: (
            folder.replace("network.toml", '"C"]', '"C", "c"]')
            .cell("fares.csv", 7, "fare_class", "c")
            .cell("demand.csv", 7, "fare_class", "c")
        ),
        [("fares.csv", 7, "fare_class")],
        lambda network: network.n_products == 17,
    ),
    "classes that differ in blanks, unlisted": (
        lambda folder: (
            folder.replace("network.toml", 'fare_classes = ["A", "B", "C"]\n', "")
            .cell("fares.csv", 7, "fare_class", "C ")
            .cell("demand.csv", 7, "fare_class", "C ")
        ),
        [("fares.csv", 7, "fare_class")],
        lambda network: network.fare_classes == ("A", "B", "C", "C "),
    ),
    "itinerary without a fare": (
        lambda folder: folder.frame("fares.csv", without_itinerary("NOR-SUD")).frame(
            "demand.csv", without_itinerary("NOR-SUD")
        ),
        [("itineraries.csv", 5, "itinerary")],
        lambda network: (network.n_itineraries, network.n_products) == (7, 14),
    ),
    "two itineraries with the same legs": (
        lambda folder: (
            folder.add("itineraries.csv", "SOUTH,L1 L2")
            .add("fares.csv", "SOUTH,A,99")
            .add("demand.csv", "SOUTH,A,1,1,")
        ),
        [("itineraries.csv", 9, "legs")],
        lambda network: network.n_itineraries == 8,
    ),
    "leg of more than a day": (
        lambda folder: folder.cell("legs.csv", 6, "arrives", "2031-03-03T19:30+01:00"),
        [("legs.csv", 6, "arrives")],
        remaining_on("L5", 7),
    ),
    "latitude without longitude, and longitude without latitude": (
        lambda folder: folder.cell("stations.csv", 2, "latitude", "").cell("stations.csv", 4, "longitude", ""),
        [("stations.csv", 2, "latitude"), ("stations.csv", 4, "longitude")],
        lambda network: network.stations.latitude.tolist()[1:] == [54.25, 45.5, 51],
    ),
    "time zone that is none": (
        lambda folder: zoned(folder, "Europe/Berlin", "", "Europe/Lundon", "../etc"),
        [("stations.csv", 4, "timezone"), ("stations.csv", 5, "timezone")],
        lambda network: len(network.stations) == 4,
    ),
    "several at once": (
        lambda folder: folder.cell("legs.csv", 4, "sold", "17").line("demand.csv", 3, None),
        [("fares.csv", 3, "fare_class"), ("legs.csv", 4, "sold")],
        remaining_on("L3", 0),
    ),
}


@pytest.mark.parametrize("name", CASES)
def test_it_is_warned_of_and_read_all_the_same(name: str, tmp_path: Path) -> None:
    spoil, places, holds = CASES[name]
    read = read_folder(spoil(Folder()).write(tmp_path))
    assert [(warning.file, warning.line, warning.column) for warning in read.warnings] == places
    assert all(warning.warning and "warning: " in str(warning) for warning in read.warnings)
    assert holds(read.network)


def test_the_sound_folder_has_no_warnings(tmp_path: Path) -> None:
    assert read_folder(Folder().write(tmp_path)).warnings == ()


def test_equal_fares_do_not_rise(tmp_path: Path) -> None:
    assert read_folder(Folder().cell("fares.csv", 4, "fare", "80").write(tmp_path)).warnings == ()


def test_warnings_beyond_the_limit_are_counted(tmp_path: Path) -> None:
    idle = [f"X{n},NOR,HUB,2030-03-04T08:00Z,2030-03-04T09:00Z,9,4" for n in range(40)]
    *listed, rest = read_folder(Folder().add("legs.csv", *idle).write(tmp_path)).warnings
    assert [warning.line for warning in listed] == list(range(7, 32))
    assert (rest.line, rest.count) == (32, 15)


def test_what_is_usual_is_not_warned_of(tmp_path: Path) -> None:
    """A crossing of a day exactly; no demand without deviation; zones known; places known or not."""
    folder = zoned(Folder(), "Europe/Berlin", "", "Asia/Kolkata", "UTC")
    folder.cell("legs.csv", 6, "arrives", "2030-03-04T18:00+01:00").cell("demand.csv", 3, "mean", "0")
    folder.cell("demand.csv", 3, "deviation", "0").cell("stations.csv", 2, "latitude", "")
    folder.cell("stations.csv", 2, "longitude", "")
    assert read_folder(folder.write(tmp_path)).warnings == ()


def test_the_same_is_warned_of_in_parquet(tmp_path: Path) -> None:
    """Lines become rows there, and names have categories of their own."""
    for name in ("itinerary without a fare", "two itineraries with the same legs", "classes that differ in capitals"):
        spoil, places, _ = CASES[name]
        folder = with_row_groups(spoil(Folder()), 3)
        found = read_folder(folder.write(tmp_path / name.replace(" ", "-"))).warnings
        assert [(warning.file, warning.line, warning.column) for warning in found] == [
            (file.replace(".csv", ".parquet"), line - 1, column) for file, line, column in places
        ]


def test_many_of_a_kind_are_counted_in_one_line(tmp_path: Path) -> None:
    folder = Folder().add("itineraries.csv", *[f"X{n},L1" for n in range(100)])
    found = read_folder(folder.write(tmp_path)).warnings
    assert [warning.count for warning in found if warning.count > 1] == [75, 75]
    assert len(found) == 2 * 26
