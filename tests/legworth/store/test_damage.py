"""Damaged nights are known as such, whatever was done to them, and stop nobody from working on."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from legworth.store import Night, NightDamagedError, Store
from network.store_settings import StoreSettings
from tests.legworth.store.small_nights import PARTS, price_of, publish
from tests.networks import examples

SAVED = "part=2030-03-01/bid_prices.parquet"


@pytest.fixture
def store(tmp_path: Path) -> Store:
    return Store.open(tmp_path / "store", create=True)


def _as_folder(path: Path) -> None:
    path.unlink()
    path.mkdir()


def _other_night(path: Path) -> None:
    path.write_text(path.read_text().replace("00002-", "00001-"))


def _other_layout(path: Path) -> None:
    path.write_text(json.dumps(json.loads(path.read_text()) | {"layout": 99}))


MANIFESTS: dict[str, Callable[[Path], object]] = {
    "missing": Path.unlink,
    "a folder": _as_folder,
    "empty": lambda path: path.write_bytes(b""),
    "cut": lambda path: path.write_bytes(path.read_bytes()[:-100]),
    "no text": lambda path: path.write_bytes(b"\xff\xfe\x00"),
    "a list": lambda path: path.write_bytes(b"[]"),
    "deep": lambda path: path.write_bytes(b"[" * 100_000),
    "of another night": _other_night,
    "of another layout": _other_layout,
    "lacking a field": lambda path: path.write_text('{"layout": 1}'),
}


@pytest.mark.parametrize("spoil", MANIFESTS.values(), ids=MANIFESTS.keys())
@pytest.mark.parametrize("published", [True, False], ids=["expected", "nobody knows which"])
def test_a_night_with_a_bad_manifest_is_damaged(store: Store, spoil: Callable[[Path], object], published: bool) -> None:
    first, second = publish(store, 1.0), publish(store, 2.0, day=1)
    spoil(second.folder / "manifest.json")
    found = Night(second.name, second.folder, second.expected if published else None)
    assert len(found.verify()) == 1
    assert "\n" not in found.verify()[0]
    with pytest.raises(NightDamagedError, match="00002"):
        found.table("bid_prices")
    with pytest.raises(NightDamagedError, match="night 00002-2030-02-26, which is in force, is damaged"):
        store.in_force()
    assert [bool(night.verify()) for night in store.nights()] == [False, True]
    assert store.restore(first.name, "desk", "the second is damaged") == first
    assert store.in_force() == first
    assert publish(store, 3.0, day=2).number == 3


@pytest.mark.parametrize(
    ("mark", "why"),
    [
        (b"", "in_force is damaged"),
        (b"{", "in_force is damaged"),
        (b"[1]", "in_force is damaged"),
        (b'{"night": "00001-2030-02-25"}', "in_force is damaged"),
        (b"\xff", "in_force is damaged"),
        (b"[" * 100_000, "in_force is damaged"),
        (b'{"night": "00007-2030-02-25", "manifest": "x"}', "no readable manifest"),
        (b'{"night": "../00001-2030-02-25", "manifest": "x"}', "no such name"),
        (b'{"night": "00001-2030-02-25", "manifest": "x"}', "not the one that was published"),
    ],
)
def test_a_bad_mark_is_damage_and_the_next_night_mends_it(store: Store, mark: bytes, why: str) -> None:
    first = publish(store, 1.0)
    (store.path / "in_force").write_bytes(mark)
    with pytest.raises(NightDamagedError, match=why):
        store.in_force()
    assert store.nights() == (first,)
    second = publish(store, 2.0, day=1)
    assert store.in_force() == second
    assert second.number == 2


def test_nothing_is_thinned_while_nobody_knows_what_is_in_force(store: Store) -> None:
    for day in range(4):
        publish(store, 1.0, day=day)
    (store.path / "in_force").write_bytes(b"?")
    with pytest.raises(NightDamagedError):
        store.thin(StoreSettings(keep_newest=1, keep_weeks=0, keep_months=0))
    assert len(store.nights()) == 4


def test_a_night_that_lost_a_file_is_not_in_force(store: Store) -> None:
    night = publish(store, 1.0)
    held = store.in_force()
    assert held is not None
    (night.folder / SAVED).unlink()
    with pytest.raises(NightDamagedError, match=f"{SAVED} is missing"):
        store.in_force()
    with pytest.raises(NightDamagedError, match=f"has lost {SAVED}"):
        held.table("bid_prices")
    assert held.table("bid_prices", parts=[PARTS[1]]).num_rows == 3
    (night.folder / SAVED).write_bytes(b"x" * night.manifest.files[SAVED].bytes)
    with pytest.raises(NightDamagedError, match="cannot be read"):
        held.table("bid_prices")


def test_a_whole_night_that_is_gone_is_damage(store: Store) -> None:
    first, second = publish(store, 1.0), publish(store, 2.0, day=1)
    second.folder.rename(store.path / "elsewhere")
    with pytest.raises(NightDamagedError, match="no readable manifest"):
        store.in_force()
    assert store.nights() == (first,)
    assert price_of(first) == 1.0


@examples(60)
@given(data=st.data())
def test_verify_names_the_file_that_was_touched(tmp_path_factory: pytest.TempPathFactory, data: st.DataObject) -> None:
    store = Store.open(tmp_path_factory.mktemp("damage") / "store", create=True)
    night = publish(store, 1.0)
    name = data.draw(st.sampled_from(sorted([*night.manifest.files, "manifest.json"])))
    path = night.folder / name
    content = path.read_bytes()
    place = data.draw(st.integers(0, len(content) - 1))
    match data.draw(st.sampled_from(["flip", "cut", "append", "remove", "add"])):
        case "flip":
            flipped = content[place] ^ (1 << data.draw(st.integers(0, 7)))
            path.write_bytes(content[:place] + bytes([flipped]) + content[place + 1 :])
        case "cut":
            path.write_bytes(content[:place])
        case "append":
            path.write_bytes(content + b"\n")
        case "remove":
            path.unlink()
        case _:
            name = "part=2030-03-01/stranger.parquet"
            (night.folder / name).write_bytes(content)
    (fault,) = store.night(night.name).verify()
    assert name in fault
