"""What is odd but no fault: warned of with its place, and what it means for the network."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest

from network import Network, read_folder
from tests.folders import Folder

Place = tuple[str, int, str]


def remaining_on(leg: str, seats: int) -> Callable[[Network], bool]:
    return lambda network: network.remaining[list(network.legs.name).index(leg)] == seats


def expected_of(itinerary: str, fare_class: str) -> Callable[[Network], bool]:
    def holds(network: Network) -> bool:
        chosen = network.itinerary[network.product_itinerary] == itinerary
        chosen &= network.product_class == network.fare_classes.index(fare_class)
        return network.demand.expected[chosen].tolist() == [0.0]

    return holds


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
