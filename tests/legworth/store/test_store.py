"""Publishing, reading, restoring, and what a store says of itself."""

from __future__ import annotations

import os
import re
from datetime import datetime, timedelta
from pathlib import Path
from typing import Any

import pyarrow as pa
import pytest

from legworth.store import Forced, NightDamagedError, Store, StoreBusyError, StoreError, disk
from network.errors import SettingError
from tests.legworth.store.small_nights import (
    CHILDREN,
    FIRST,
    PARTS,
    fill,
    manifest_of,
    parquet,
    price_of,
    publish,
)


@pytest.fixture
def store(tmp_path: Path) -> Store:
    return Store.open(tmp_path / "store", create=True)


def test_a_published_night_is_in_force_whole_and_sound(store: Store) -> None:
    assert store.in_force() is None
    assert store.nights() == ()
    night = publish(store, 7.0)
    assert store.in_force() == night
    assert [found.name for found in store.nights()] == [night.name] == ["00001-2030-02-25"]
    assert night.verify() == ()
    assert price_of(night) == 7.0
    assert night.parts() == PARTS
    assert night.manifest.rows == {"bid_prices": 6}
    assert night.manifest.mixed == ()
    assert set(night.manifest.files) == {f"part={part}/{name}" for part in PARTS for name in FILES}
    assert [entry.event for entry in store.history()] == ["publish"]
    assert list((store.path / "aside").iterdir()) == []


FILES = ("bid_prices.parquet", "summary.json")


def test_whoever_holds_a_night_keeps_it(store: Store) -> None:
    held = publish(store, 1.0)
    publish(store, 2.0, day=1)
    assert price_of(held) == 1.0
    latest = store.in_force()
    assert latest is not None
    assert price_of(latest) == 2.0


def test_nothing_remains_of_a_night_that_is_not_published(store: Store) -> None:
    first = publish(store)
    with pytest.raises(KeyError), store.begin(FIRST) as aside:
        fill(aside, 2.0)
        raise KeyError
    with store.begin(FIRST) as aside:
        fill(aside, 3.0)
        aside.log.write_text("{}\n")
        aside.stop({"look_at": ["leg 7"], "at": FIRST})
    assert store.in_force() == first
    assert list((store.path / "aside").iterdir()) == []
    assert [path.name for path in (store.path / "stopped").iterdir()] == ["00002-2030-02-25.json"]
    assert publish(store).number == 3, "the number of a stopped night is not given again"


def test_order_does_not_depend_on_the_clock(store: Store, monkeypatch: pytest.MonkeyPatch) -> None:
    class SetBack(datetime):
        @classmethod
        def now(cls, tz: Any = None) -> Any:
            return datetime(1999, 12, 31, tzinfo=tz)

    first = publish(store, 1.0, day=5)
    monkeypatch.setattr("legworth.store.unfinished.datetime", SetBack)
    monkeypatch.setattr("legworth.store.history.datetime", SetBack)
    second = publish(store, 2.0, day=4)
    third = publish(store, 3.0, day=-400)
    assert third.manifest.published is not None
    assert third.manifest.published.year == 1999
    assert store.nights() == (store.night(first.name), store.night(second.name), store.night(third.name))
    assert store.in_force() == third
    assert [night.number for night in store.nights()] == [1, 2, 3]
    store.restore(second.name, "desk", "the third was of old data")
    fourth = publish(store, 4.0)
    assert fourth.number == 4
    assert store.in_force() == fourth


def test_only_one_night_is_made_at_a_time(store: Store) -> None:
    with store.begin(FIRST) as aside:
        fill(aside, 1.0)
        with pytest.raises(StoreBusyError, match="another process"), Store.open(store.path).begin(FIRST):
            pass
        with pytest.raises(StoreBusyError):
            Store.open(store.path).restore("00001-2030-02-25", "desk", "why not")
        assert aside.parts() == PARTS, "who is refused has cleared nothing"
        night = aside.publish(manifest_of(aside, FIRST))
    assert store.in_force() == night
    publish(Store.open(store.path))


def _hold(path: Path, ready: Any, forever: Any) -> None:
    with Store.open(path).begin(FIRST) as aside:
        fill(aside, 9.0)
        ready.set()
        forever.wait()


def test_the_lock_dies_with_the_process(store: Store) -> None:
    ready, forever = CHILDREN.Event(), CHILDREN.Event()
    process = CHILDREN.Process(target=_hold, args=(store.path, ready, forever))
    process.start()
    assert ready.wait(60)
    with pytest.raises(StoreBusyError), store.begin(FIRST):
        pass
    process.kill()
    process.join(60)
    assert len(list((store.path / "aside").iterdir())) == 1
    night = publish(store, 2.0)
    assert night.number == 2, "the number of the night cut off is not given again"
    assert list((store.path / "aside").iterdir()) == []


def test_everything_is_on_the_disk_before_a_night_is_in_force(store: Store, monkeypatch: pytest.MonkeyPatch) -> None:
    synced: set[int] = set()
    at_rename: list[set[int]] = []
    sync, replace = os.fsync, os.replace

    def noted_sync(handle: int) -> None:
        sync(handle)
        synced.add(os.fstat(handle).st_ino)

    def noted_replace(source: Any, target: Any) -> None:
        if Path(target).name == "in_force":
            at_rename.append({*synced, -Path(source).stat().st_ino})
        replace(source, target)

    first = publish(store)
    synced.clear()
    monkeypatch.setattr(os, "fsync", noted_sync)
    monkeypatch.setattr(os, "replace", noted_replace)
    night = publish(store, 2.0, day=1, last=first)
    (before,) = at_rename
    needed = [night.folder, *night.folder.rglob("*"), store.path / "nights", store.history_file]
    assert {path.stat().st_ino for path in needed} <= before
    assert {-inode for inode in before if inode < 0} <= synced, "and so is what the rename puts in place"
    assert store.path.stat().st_ino in synced


def test_files_taken_over_are_shared_and_never_written_into(store: Store) -> None:
    first = publish(store, 1.0)
    second = publish(store, 1.0, day=1, last=first)
    path = f"part={PARTS[-1]}/bid_prices.parquet"
    assert (first.folder / path).samefile(second.folder / path)
    with store.begin(FIRST) as aside:
        aside.take_over(path, second)
        aside.write(path, b"something else")
    assert first.verify() == second.verify() == ()


def test_files_are_copied_where_links_do_not_work(store: Store, monkeypatch: pytest.MonkeyPatch) -> None:
    def refused(self: Path, target: Path) -> None:
        raise PermissionError(1, "Operation not permitted")

    first = publish(store, 1.0)
    monkeypatch.setattr(Path, "hardlink_to", refused)
    second = publish(store, 1.0, day=1, last=first)
    path = f"part={PARTS[-1]}/bid_prices.parquet"
    assert not (first.folder / path).samefile(second.folder / path)
    assert second.verify() == ()
    assert second.manifest.files[path] == first.manifest.files[path]


def test_a_changed_file_is_not_taken_over(store: Store) -> None:
    first = publish(store)
    path = f"part={PARTS[-1]}/bid_prices.parquet"
    data = (first.folder / path).read_bytes()
    (first.folder / path).write_bytes(data[:-20] + b"?" + data[-19:])
    with pytest.raises(NightDamagedError, match="changed since it was published"), store.begin(FIRST) as aside:
        aside.take_over(path, first)
    with pytest.raises(StoreError, match="has no file"), store.begin(FIRST) as aside:
        aside.take_over("part=1/no.parquet", first)
    (first.folder / path).unlink()
    with pytest.raises(NightDamagedError, match="has lost"), store.begin(FIRST) as aside:
        aside.take_over(path, first)


@pytest.mark.parametrize(
    "path",
    ["", "../x", "/etc/x", "manifest.json", "part=/x", "part=a/b/c", "a/b", "part=a/.hidden", "part=a\\b", "x\n"],
)
def test_only_paths_of_a_night_are_written(store: Store, path: str) -> None:
    with store.begin(FIRST) as aside, pytest.raises(StoreError, match="cannot be a file of a night"):
        aside.write(path, b"")


def test_a_manifest_must_be_that_of_the_night(store: Store) -> None:
    with store.begin(FIRST) as aside:
        fill(aside, 1.0)
        good = manifest_of(aside, FIRST)
        for wrong in (
            {"night": "00009-2030-02-25"},
            {"number": 9},
            {"parts": good.parts[:1]},
            {"parts": good.parts * 2},
        ):
            with pytest.raises(ValueError, match="manifest"):
                aside.publish(good.model_copy(update=wrong))
        aside.write("part=x/broken.parquet", b"no parquet")
        with pytest.raises(StoreError, match="is not a Parquet file"):
            aside.publish(manifest_of(aside, FIRST))
    assert store.nights() == ()


def test_tables_are_put_together_from_parts(store: Store) -> None:
    with store.begin(FIRST) as aside:
        fill(aside, 1.0)
        words = pa.array(["a", "b"]).dictionary_encode()
        aside.write("part=2030-03-01/odd.parquet", parquet(pa.table({"word": words, "n": pa.array([1, 2], pa.int8())})))
        aside.write("part=2030-03-02/odd.parquet", parquet(pa.table({"n": [3], "more": ["x"]})))
        assert aside.table("bid_prices", ["bid_price"], [PARTS[1]]).num_rows == 3
        night = aside.publish(manifest_of(aside, FIRST))
    whole = night.table("odd")
    assert whole.select(["part", "word", "n", "more"]).to_pydict() == {
        "part": ["2030-03-01", "2030-03-01", "2030-03-02"],
        "word": ["a", "b", None],
        "n": [1, 2, 3],
        "more": [None, None, "x"],
    }
    assert night.manifest.mixed == ("odd",)
    assert night.table("odd", ["n"], ["2030-03-02"]).to_pydict() == {"part": ["2030-03-02"], "n": [3]}
    assert night.table("bid_prices", ["leg"]).column_names == ["part", "leg"]
    for call in (("nothing",), ("odd", ["nothing"]), ("odd", None, ["nowhere"])):
        with pytest.raises(StoreError, match="no"):
            night.table(*call)


def test_restoring_puts_an_earlier_night_back_and_says_who_and_why(store: Store) -> None:
    first, second = publish(store, 1.0), publish(store, 2.0, day=1)
    assert store.restore(first.name, "night desk", "second was priced from old demand") == first
    assert store.in_force() == first
    last = store.history()[-1]
    assert (last.event, last.night, last.who, last.reason) == (
        "restore",
        first.name,
        "night desk",
        "second was priced from old demand",
    )
    with pytest.raises(StoreError, match="give one"):
        store.restore(second.name, "night desk", " ")
    with pytest.raises(StoreError, match="has no night '00009-2030-01-01'; its latest are: 00001"):
        store.restore("00009-2030-01-01", "night desk", "why")
    (second.folder / f"part={PARTS[0]}" / "summary.json").unlink()
    with pytest.raises(NightDamagedError, match="cannot be put in force"):
        store.restore(second.name, "night desk", "why")
    assert store.in_force() == first


def test_a_forced_night_says_who_and_why(store: Store) -> None:
    publish(store, 1.0, forced=Forced(who="night desk", reason="new timetable"))
    (entry,) = store.history()
    assert (entry.event, entry.who, entry.reason) == ("force", "night desk", "new timetable")


def test_what_is_no_store_is_said_to_be_none(tmp_path: Path) -> None:
    with pytest.raises(SettingError, match="is no store of nights"):
        Store.open(tmp_path / "nowhere")
    assert not (tmp_path / "nowhere").exists()
    (tmp_path / "file").write_text("")
    (tmp_path / "full").mkdir()
    (tmp_path / "full" / "letters").write_text("")
    (tmp_path / "newer").mkdir()
    (tmp_path / "newer" / "store.json").write_text('{"layout": 99}')
    for name, why in (
        ("file", "is a file"),
        ("full", "holds letters; name an empty folder"),
        ("newer", "newer has layout 99, and this program reads layout 1; use one that made it"),
    ):
        with pytest.raises(SettingError, match=why):
            Store.open(tmp_path / name, create=True)
    (tmp_path / "interrupted").mkdir()
    (tmp_path / "interrupted" / "nights").mkdir()
    (tmp_path / "interrupted" / "store.json.12.new").write_text("")
    publish(Store.open(tmp_path / "interrupted", create=True))
    assert not list((tmp_path / "interrupted").glob("*.new"))


@pytest.mark.parametrize("create", [True, False])
@pytest.mark.parametrize("marker", ["", "[[", "{}", "[]", "1", "null", '{"layout": null}', '{"layout": true}', None])
def test_a_damaged_marker_is_mended_as_the_message_says(store: Store, marker: str | None, create: bool) -> None:
    night = publish(store)
    path = store.path / "store.json"
    path.unlink()
    why = rf"no store of nights and holds history\.jsonl; if it was one, put ({{.*}}) into {re.escape(str(path))};"
    if marker is not None:
        path.write_text(marker)
        why = r"store\.json is damaged; put (\{.*\}) into it"
    with pytest.raises(StoreError, match=why) as refused:
        Store.open(store.path, create=create)
    mend = re.search(why, str(refused.value))
    assert mend is not None
    path.write_text(mend[1])
    assert Store.open(str(store.path)).in_force() == night


def test_a_torn_line_of_the_history_spoils_no_other(store: Store) -> None:
    publish(store)
    with store.history_file.open("ab") as file:
        file.write(b'{"event": "publish", "nig')
    publish(store, day=1)
    assert [entry.event for entry in store.history()] == ["publish", "publish"]
    with pytest.raises(OSError, match="no"):
        disk.append_line(store.path / "no" / "folder", "x")


def test_a_line_that_cannot_be_written_leaves_the_history_as_it_was(
    store: Store, monkeypatch: pytest.MonkeyPatch
) -> None:
    first = publish(store)
    before = store.history_file.read_bytes()
    write, sync = os.write, os.fsync

    def half(handle: int, data: bytes) -> int:
        return write(handle, data[:40])

    def refused(handle: int) -> None:
        if os.fstat(handle).st_ino == store.history_file.stat().st_ino:
            raise OSError(5, "Input/output error")
        sync(handle)

    for name, double in (("write", half), ("fsync", refused)):
        with monkeypatch.context() as patch, pytest.raises(StoreError, match="cannot write to"):
            patch.setattr(os, name, double)
            publish(store, 2.0, day=1)
        assert store.history_file.read_bytes() == before
        assert store.nights() == (first,)
        assert store.in_force() == first


def test_what_says_which_night_is_in_force_is_never_written_into(store: Store) -> None:
    publish(store)
    with (store.path / "in_force").open("rb") as held:
        before = (store.path / "in_force").read_bytes()
        publish(store, 2.0, day=1)
        assert held.read() == before
    assert (store.path / "in_force").read_bytes() != before


def test_names_sort_beyond_five_digits(store: Store) -> None:
    (store.path / "stopped" / "99999-2030-01-01.json").write_text("{}")
    first = publish(store, 1.0)
    assert first.name == "100000-2030-02-25"
    second = publish(store, 2.0, day=1)
    assert store.nights()[-1].name == second.name
    assert timedelta(days=1) == second.manifest.as_of - first.manifest.as_of
