"""Whatever cuts a publication off, and wherever: a whole night is in force, and the next one gets in.

``LEGWORTH_STORE_KILLS`` sets how many publishing processes are killed at random moments (12 if it is not set).
"""

from __future__ import annotations

import os
import random
import subprocess
import tempfile
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest

from legworth.store import Night, NightDamagedError, Store, StoreError
from legworth.store.hand_over import HandOverOptions, hand_over
from legworth.store.hand_over_reading import read_hand_over
from tests.legworth.store.small_nights import CHILDREN, FIRST, Operations, killed, price_of, publish, run_child

KILLS = int(os.environ.get("LEGWORTH_STORE_KILLS", "12"))
REFUSED, PUBLISHED, NOT_REACHED = 3, 4, 5


@pytest.fixture
def folder() -> Iterator[Path]:
    """A folder in memory where the system has one, since nobody cuts the power here."""
    memory = Path("/dev/shm")
    with tempfile.TemporaryDirectory(dir=memory if memory.is_dir() else None) as name:
        yield Path(name)


def first_price(night: Night) -> float:
    """Price of the first row: a part taken over has that of the night before."""
    return float(night.table("bid_prices")["bid_price"][0].as_py())


def assert_sound(path: Path, known: set[float]) -> float:
    """The night in force is whole and one of those known, nothing else shows; return its price."""
    store = Store.open(path)
    night = store.in_force()
    assert night is not None
    for found in store.nights():
        assert found.verify() == ()
    assert first_price(night) in known
    return first_price(night)


def assert_next_gets_in(path: Path) -> None:
    """Another night is published, and nothing is left of what was cut off."""
    store = Store.open(path)
    before = store.history()
    night = publish(store, 1000.0, day=9)
    assert store.in_force() == night
    assert list((path / "aside").iterdir()) == []
    assert not list(path.glob("*.new"))
    put, last = [entry for entry in store.history() if entry.event != "withdrawn"], store.history()[-1]
    assert last.night == night.name
    assert len(put) - len([entry for entry in before if entry.event != "withdrawn"]) == 1


def _publish_and_stop_at(path: Path, moment: int, on: bool, act: Callable[[], None]) -> None:
    store = Store.open(path)
    last = store.in_force()
    operations = Operations(path, moment, act, on=on)
    try:
        publish(store, 2.0, day=1, last=last if moment % 2 else None)
    except StoreError:
        os._exit(REFUSED)
    os._exit(PUBLISHED if operations.count >= moment else NOT_REACHED)


def _no_space() -> None:
    raise OSError(28, "No space left on device", "somewhere")


def test_a_process_killed_at_any_file_operation_leaves_a_whole_night_in_force(folder: Path) -> None:
    codes, prices = [], []
    for moment in range(1, 200):
        path = folder / str(moment)
        publish(Store.open(path, create=True), 1.0)
        codes.append(run_child(_publish_and_stop_at, path, moment, False, killed))
        prices.append(assert_sound(path, {1.0, 2.0}))
        assert_next_gets_in(path)
        if codes[-1] == NOT_REACHED:
            break
    assert set(codes[:-1]) == {-9}
    assert codes[-1] == NOT_REACHED
    assert len(codes) > 30
    assert prices == sorted(prices), "once the new night is in force, no later moment takes it back"
    assert prices[-1] == 2.0


@pytest.mark.parametrize("on", [False, True], ids=["once", "from then on"])
def test_an_operation_that_fails_is_one_line_and_changes_nothing(folder: Path, on: bool) -> None:
    codes = []
    for moment in range(2 - on, 200, 3):
        path = folder / str(moment)
        publish(Store.open(path, create=True), 1.0)
        codes.append(run_child(_publish_and_stop_at, path, moment, on, _no_space))
        assert assert_sound(path, {1.0, 2.0}) == (1.0 if codes[-1] == REFUSED else 2.0)
        if not on:
            assert len(Store.open(path).nights()) == (1 if codes[-1] == REFUSED else 2)
        assert_next_gets_in(path)
        if codes[-1] == NOT_REACHED:
            break
    assert codes[-1] == NOT_REACHED
    assert codes.count(REFUSED) > 10
    assert set(codes) <= {REFUSED, PUBLISHED, NOT_REACHED}


def _publish_on_and_on(path: Path, ready: Any) -> None:
    store = Store.open(path)
    number = store.nights()[-1].number
    ready.set()
    while True:
        number += 1
        publish(store, float(number), day=number)


def test_processes_killed_at_random_moments_leave_a_whole_night_in_force(folder: Path) -> None:
    path, moments = folder / "store", random.Random(20_300_225)
    publish(Store.open(path, create=True), 1.0)
    latest, published = 1, 0
    for _ in range(KILLS):
        ready = CHILDREN.Event()
        process = CHILDREN.Process(target=_publish_on_and_on, args=(path, ready))
        process.start()
        assert ready.wait(60)
        time.sleep(moments.uniform(0.0, 0.06))
        process.kill()
        process.join(60)
        store = Store.open(path)
        night = store.in_force()
        assert night is not None
        assert night.number >= latest, "the store never goes back by itself"
        assert night.verify() == ()
        assert price_of(night) > 0
        published += night.number - latest
        latest = night.number
    assert published > KILLS / 10, "some nights got through, or this tests nothing"
    assert all(night.verify() == () for night in Store.open(path).nights())
    assert_next_gets_in(path)


def test_a_reader_sees_whole_nights_while_others_are_published(folder: Path) -> None:
    path = folder / "store"
    store = Store.open(path, create=True)
    publish(store, 1.0)
    ready = CHILDREN.Event()
    process = CHILDREN.Process(target=_publish_on_and_on, args=(path, ready))
    process.start()
    assert ready.wait(60)
    seen: list[int] = []
    try:
        while len(set(seen)) < 20 or len(seen) < 60:
            night = store.in_force()
            assert night is not None
            assert price_of(night) == night.number
            assert night.verify() == ()
            seen.append(night.number)
            assert process.is_alive()
    finally:
        process.kill()
        process.join(60)
    assert seen == sorted(seen)


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[Callable[[int], Path]]:
    """Mount file systems of a few kilobytes."""
    mounted: list[Path] = []

    def mount(kilobytes: int) -> Path:
        path = tmp_path / f"disk{len(mounted)}"
        path.mkdir()
        try:
            subprocess.run(
                ["mount", "-t", "tmpfs", "-o", f"size={kilobytes}k", "tmpfs", path], check=True, capture_output=True
            )
        except (OSError, subprocess.CalledProcessError):
            pytest.skip("this user may not mount a small file system; failing operations are tested above")
        mounted.append(path)
        return path

    yield mount
    for path in mounted:
        subprocess.run(["umount", path], check=True)


def test_a_full_disk_leaves_the_night_in_force(small_disk: Callable[[int], Path]) -> None:
    disk = small_disk(256)
    path = disk / "store"
    store = Store.open(path, create=True)
    publish(store, 1.0)
    refused = 0
    for free in range(0, 72, 4):
        ballast = disk / "ballast"
        ballast.write_bytes(b"")
        space = os.statvfs(disk)
        ballast.write_bytes(b"x" * max(space.f_bavail * space.f_bsize - free * 1024, 0))
        try:
            publish(store, 2.0, day=1)
        except StoreError as error:
            refused += 1
            assert "No space left on device" in str(error)
            assert "free space and try again" in str(error)
            assert "\n" not in str(error)
            assert assert_sound(path, {1.0}) == 1.0
            assert list((path / "aside").iterdir()) == []
            assert len(store.nights()) == 1
        else:
            break
    assert refused > 3
    ballast.unlink()
    assert assert_sound(path, {2.0}) == 2.0
    assert_next_gets_in(path)


def test_a_full_disk_cuts_a_hand_over_off_for_all_to_see(small_disk: Callable[[int], Path], tmp_path: Path) -> None:
    night = publish(Store.open(tmp_path / "store", create=True), 1.0)
    for kilobytes in (4, 8, 12):
        folder = small_disk(kilobytes) / "prices"
        with pytest.raises(StoreError, match="No space left on device"):
            hand_over(night, folder, FIRST)
        with pytest.raises(NightDamagedError, match="not whole"):
            read_hand_over(folder)
    hand_over(night, small_disk(128) / "prices", FIRST)


def _hand_over_and_stop_at(path: Path, prices: Path, moment: int, act: Callable[[], None]) -> None:
    night = Store.open(path).in_force()
    assert night is not None
    operations = Operations(prices, moment, act)
    try:
        hand_over(night, prices, FIRST, HandOverOptions(by_part=True))
    except StoreError:
        os._exit(REFUSED)
    os._exit(PUBLISHED if operations.count >= moment else NOT_REACHED)


@pytest.mark.parametrize("act", [killed, _no_space], ids=["killed", "refused"])
def test_a_hand_over_cut_off_anywhere_is_the_old_one_or_none_or_the_new_one(
    folder: Path, act: Callable[[], None]
) -> None:
    store = Store.open(folder / "store", create=True)
    first, second = publish(store, 1.0), publish(store, 2.0, day=1)
    codes, found = [], []
    for moment in range(1, 200, 3):
        prices = folder / str(moment)
        hand_over(first, prices, FIRST)
        codes.append(run_child(_hand_over_and_stop_at, store.path, prices, moment, act))
        try:
            found.append(read_hand_over(prices).night)
        except NightDamagedError:
            found.append("")
        hand_over(second, prices, FIRST)
        assert read_hand_over(prices).night == second.name
        assert {path.name for path in prices.iterdir() if path.name.startswith(".")} == {".lock"}
        if codes[-1] == NOT_REACHED:
            break
    assert codes[-1] == NOT_REACHED
    assert len(codes) > 10
    assert set(found) == {first.name, "", second.name}
    if act is killed:
        order = [first.name, "", second.name]
        assert [order.index(name) for name in found] == sorted(order.index(name) for name in found)
    else:
        assert [name == second.name for name in found] == [code != REFUSED for code in codes]
