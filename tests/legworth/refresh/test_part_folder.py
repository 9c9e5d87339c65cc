"""A part is a network folder of its own: what is read from it is the part again."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest

from legworth.refresh import cut_parts
from legworth.refresh.part_folder import input_tables, parquet_bytes, settings_text
from network import Network, read_folder
from tests.folders import Folder, by_name

DEMO = Path(__file__).parents[3] / "demo_network"


def written(network: Network, into: Path, family: str = "auto") -> Path:
    into.mkdir()
    (into / "network.toml").write_text(settings_text(network, family), encoding="utf-8")
    for name, table in input_tables(network).items():
        (into / f"{name}.parquet").write_bytes(parquet_bytes(table))
    return into


def told(network: Network) -> dict[str, Any]:
    """What a network says, without the stations that none of its legs uses."""
    said = by_name(network)
    used = {name for legs in said["legs"].values() for name in legs[:2]}
    return said | {"stations": {name: value for name, value in said["stations"].items() if name in used}}


ODD = Folder().replace("network.toml", 'name = "Tern Sound Ferries"', 'name = "Tern \\"Sound\\"\\u007f\\\\ Ferries"')
NO_CURVES = Folder().drop("booking_curves.csv").without_column("demand.csv", "curve")
ONE_CLASS = Folder().replace("network.toml", '["A", "B", "C"]', '["A", "B", "C", "D"]')


@pytest.mark.parametrize(
    "folder", [Folder(), ODD, NO_CURVES, ONE_CLASS], ids=["sound", "odd", "no curves", "unused class"]
)
def test_a_part_is_read_again_as_it_was_cut(folder: Folder, tmp_path: Path) -> None:
    network = read_folder(folder.write(tmp_path / "folder")).network
    parts = cut_parts(network)
    assert len(parts) == 3
    for part in parts:
        own = part.network_of(network)
        assert told(read_folder(written(own, tmp_path / part.name)).network) == told(own)


def test_the_demo_is_read_again_as_it_was_cut(tmp_path: Path) -> None:
    network = read_folder(DEMO).network
    for part in cut_parts(network):
        own = part.network_of(network)
        assert told(read_folder(written(own, tmp_path / part.name)).network) == told(own)


def test_the_family_of_demands_stays_the_one_asked_for(tmp_path: Path) -> None:
    folder = Folder().replace("network.toml", 'demand_family = "auto"', 'demand_family = "gamma"')
    network = read_folder(folder.write(tmp_path / "folder")).network
    again = read_folder(written(network, tmp_path / "again", "gamma")).network
    assert again.demand.family.tolist() == network.demand.family.tolist()


def test_the_same_table_gives_the_same_bytes(tmp_path: Path) -> None:
    folder = Folder().write(tmp_path / "folder")
    first, second = (input_tables(read_folder(folder).network) for _ in range(2))
    assert {n: parquet_bytes(t) for n, t in first.items()} == {n: parquet_bytes(t) for n, t in second.items()}
