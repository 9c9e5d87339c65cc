"""A store holds the nights of one network in one currency."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from legworth.store import Store
from network import SettingError
from tests.folders import Folder
from tests.legworth.refresh.nights import make


@pytest.mark.parametrize(
    ("old", "new", "told"),
    [('"EUR"', '"USD"', "in EUR, and this folder is .* in USD"), ('name = "', 'name = "Other ', "'Other ")],
    ids=["currency", "name"],
)
def test_a_night_of_another_network_is_refused(old: str, new: str, told: str, tmp_path: Path) -> None:
    store = tmp_path / "nights"
    first = make(Folder().write(tmp_path / "folder"), store).night
    other = Folder().replace("network.toml", old, new).write(tmp_path / "other")
    with pytest.raises(SettingError, match=f"holds nights of .*{told}.*; name a store of its own"):
        make(other, store)
    in_force = Store.open(store).in_force()
    assert in_force is not None and in_force.name == first.name
    manifest = json.loads((first.folder / "manifest.json").read_bytes())
    assert (manifest["network"], manifest["currency"]) == ("Tern Sound Ferries", "EUR")
