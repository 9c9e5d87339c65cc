"""Connections as tables of a network folder: written, read again, and the city pairs that a folder sells."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from legworth.schedules.connection_tables import itinerary_table, wanted_pairs
from legworth.schedules.connections import build_connections
from network import InputError, Network, read_folder
from network.connection_settings import ConnectionRules
from network.faults import Faults
from network.settings import read_settings
from tests.folders import Folder

DEMO = Path(__file__).parents[3] / "demo_network"


@pytest.fixture(scope="module")
def demo() -> Network:
    return read_folder(DEMO).network


def legs_of(network: Network) -> set[tuple[str, ...]]:
    cuts = zip(network.path_start[:-1], network.path_start[1:], strict=True)
    return {tuple(network.legs.name[network.path_leg[begin:end]]) for begin, end in cuts}


def test_connections_of_the_demo_hold_all_that_it_sells(demo: Network) -> None:
    rules = ConnectionRules(most_legs=3, maximum_connection=300, detour=2, keep_dominated=True)
    found = build_connections(demo.legs, demo.stations, rules)
    cuts = zip(found.path_start[:-1], found.path_start[1:], strict=True)
    assert legs_of(demo) <= {tuple(demo.legs.name[found.path_leg[begin:end]]) for begin, end in cuts}


def test_a_table_of_connections_reads_back_without_a_fault(tmp_path: Path) -> None:
    folder = Folder().drop("fares.csv", "demand.csv", "itineraries.csv")
    folder.put("fares.csv", "itinerary,fare_class,fare\nNOR-HUB-SUD-0301-0600-0830,A,190\n")
    folder.put("demand.csv", "itinerary,fare_class,mean,deviation\nNOR-HUB-SUD-0301-0600-0830,A,2,1.5\n")
    sound = read_folder(Folder().write(tmp_path / "sound")).network
    found = build_connections(sound.legs, sound.stations, ConnectionRules(detour=2))
    table = itinerary_table(found, sound.legs)
    assert table["legs"].tolist() == ["L3", "L2", "L1", "L1 L3", "L1 L2", "L4", "L5"]
    folder.put("itineraries.csv", table.to_csv(index=False)).write(tmp_path / "made")
    read = read_folder(tmp_path / "made")
    assert legs_of(read.network) == legs_of(sound)
    assert read.history_name.tolist() == found.history_name.tolist()
    assert read.network.itinerary.tolist() == found.itinerary.tolist()


def test_through_itineraries_read_back_without_connection_time(tmp_path: Path) -> None:
    soon = "L2,HUB,SUD,2030-03-01T07:31+01:00,2030-03-01T10:00+01:00,20,11"
    folder = Folder().line("legs.csv", 3, soon)
    with pytest.raises(InputError, match="1 minutes between L1 and L2, but HUB needs 35"):
        read_folder(folder.write(tmp_path / "change"))
    through = folder.frame("legs.csv", lambda legs: legs.assign(through=["L2", "", "", "", ""]))
    network = read_folder(through.write(tmp_path / "through")).network
    found = build_connections(
        network.legs, network.stations, ConnectionRules(most_legs=1), through=np.array([1, -1, -1, -1, -1])
    )
    assert "L1 L2" in itinerary_table(found, network.legs)["legs"].tolist()


@pytest.mark.parametrize(
    ("leg", "through", "problem"),
    [
        ("L1", "L9", "'L9' is not a leg"),
        ("L1", "L4", "'L4' does not begin where this leg ends"),
        ("L5", "L2", "'L2' leaves before this leg arrives"),
    ],
)
def test_a_wrong_next_leg_of_a_vehicle_is_a_fault_of_its_row(
    leg: str, through: str, problem: str, tmp_path: Path
) -> None:
    folder = Folder().frame("legs.csv", lambda legs: legs.assign(through=np.where(legs["leg"] == leg, through, "")))
    with pytest.raises(InputError) as error:
        read_folder(folder.write(tmp_path))
    [fault] = error.value.faults
    assert (fault.file, fault.line, fault.column) == ("legs.csv", 1 + int(leg[1]), "through")
    assert problem in fault.problem


def test_kinds_may_stand_in_the_legs(tmp_path: Path, demo: Network) -> None:
    folder = Folder().frame("legs.csv", lambda legs: legs.assign(kind=["rail", "ferry", "", "", "rail"]))
    assert read_folder(folder.write(tmp_path)).network.n_legs == 5


def test_rules_are_read_from_the_settings_and_their_faults_named(tmp_path: Path) -> None:
    text = (
        "\n[connections]\nmost_legs = 3\novernight = false\n"
        'minimum_by_kinds = [{arriving = "rail", departing = "air", minutes = 90}]\n'
    )
    folder = Folder().mutate("network.toml", lambda settings: settings + text)
    settings = read_settings(folder.write(tmp_path / "sound"), Faults())
    assert settings is not None
    assert (settings.connections.most_legs, settings.connections.overnight) == (3, False)
    assert settings.connections.minimum_by_kinds[0].minutes == 90
    faults = Faults()
    folder.replace("network.toml", "most_legs = 3", "most_legs = 4").replace("network.toml", "= 90", '= "x"')
    assert read_settings(folder.write(tmp_path / "wrong"), faults) is None
    assert [(fault.line, fault.column) for fault in faults.errors] == [
        (11, "connections.most_legs"),
        (13, "connections.minimum_by_kinds.0.minutes"),
    ]


def test_wanted_pairs_are_those_with_a_fare_or_demand(tmp_path: Path) -> None:
    folder = Folder()
    stations = read_folder(folder.write(tmp_path / "all")).network.stations
    names = {pair: (stations.name[pair[0]], stations.name[pair[1]]) for pair in [(0, 1), (0, 2), (0, 3), (1, 0)]}
    everything = wanted_pairs(tmp_path / "all", stations, Faults())
    assert everything is not None
    assert {names.get(tuple(pair), tuple(stations.name[pair])) for pair in everything.tolist()} == {
        ("HUB", "OST"),
        ("HUB", "SUD"),
        ("NOR", "HUB"),
        ("NOR", "OST"),
        ("NOR", "SUD"),
        ("OST", "NOR"),
        ("SUD", "HUB"),
    }
    folder.put("fares.csv", "itinerary,fare_class,fare\nNOR-SUD,A,190\n")
    folder.put("demand.csv", "itinerary,fare_class,mean,deviation\nHUB-OST,A,1,1\n")
    few = wanted_pairs(folder.write(tmp_path / "few"), stations, Faults())
    assert few is not None
    assert {tuple(stations.name[list(pair)]) for pair in few} == {("NOR", "SUD"), ("HUB", "OST")}
    other = replace(stations, name=np.array(["HUB", "NOR", "X", "OST"], dtype=object))
    some = wanted_pairs(tmp_path / "few", other, Faults())
    assert some is not None
    assert {tuple(other.name[list(pair)]) for pair in some} == {("HUB", "OST")}


@pytest.mark.parametrize("missing", [("fares.csv", "demand.csv"), ("itineraries.csv",), ("legs.csv",)])
def test_without_the_tables_no_pair_is_unwanted(missing: tuple[str, ...], tmp_path: Path) -> None:
    sound = read_folder(Folder().write(tmp_path / "sound")).network
    assert wanted_pairs(Folder().drop(*missing).write(tmp_path / "less"), sound.stations, Faults()) is None


def test_faults_of_the_present_tables_are_noted(tmp_path: Path) -> None:
    sound = read_folder(Folder().write(tmp_path / "sound")).network
    faults = Faults()
    wanted_pairs(Folder().cell("fares.csv", 2, "fare", "x").write(tmp_path / "bad"), sound.stations, faults)
    assert [(fault.file, fault.line, fault.column) for fault in faults.errors] == [("fares.csv", 2, "fare")]
