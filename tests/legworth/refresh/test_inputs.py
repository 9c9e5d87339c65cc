"""The tables of a night are those of one moment, and what was hashed is what was read."""

from __future__ import annotations

import hashlib
import os
from collections.abc import Callable
from pathlib import Path

import pytest

from legworth.refresh import inputs
from legworth.refresh.inputs import take_snapshot
from network import SettingError, read_folder
from tests.folders import Folder, by_name

Meddle = Callable[[Path], None]


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    return Folder().write(tmp_path / "folder")


def meddling(monkeypatch: pytest.MonkeyPatch, folder: Path, meddle: Meddle, times: int) -> None:
    """Change the folder right after it was copied, so many times."""
    copy, left = inputs._copy, [times]

    def copied(*arguments: object) -> object:
        found = copy(*arguments)  # type: ignore[arg-type]
        if left[0] > 0:
            left[0] -= 1
            meddle(folder)
        return found

    monkeypatch.setattr(inputs, "_copy", copied)


def same_length(folder: Path) -> None:
    """Write other figures of the same length, under the time of the old ones."""
    path = folder / "legs.csv"
    stat = path.stat()
    path.write_bytes(path.read_bytes().replace(b",24,12", b",24,13"))
    os.utime(path, ns=(stat.st_atime_ns, stat.st_mtime_ns))


def replaced(folder: Path) -> None:
    """Put another file in the place of one by a rename, as careful writers do."""
    new = folder / "fares.csv.new"
    new.write_bytes((folder / "fares.csv").read_bytes())
    new.replace(folder / "fares.csv")


MEDDLE: dict[str, Meddle] = {
    "changed": lambda folder: (folder / "fares.csv").write_bytes(b"itinerary,fare_class,fare\n"),
    "same length and time": same_length,
    "replaced": replaced,
    "removed": lambda folder: (folder / "booking_curves.csv").unlink(),
    "added": lambda folder: (folder / "legs.parquet").write_bytes(b"x"),
}


@pytest.mark.parametrize("how", MEDDLE)
def test_a_table_changed_meanwhile_is_noticed_and_read_again(
    how: str, folder: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    meddling(monkeypatch, folder, MEDDLE[how], 1)
    told: list[str] = []
    snapshot = take_snapshot(folder, tmp_path / "copy", told.append)
    assert len(told) == 1
    assert {path.name: path.read_bytes() for path in snapshot.folder.iterdir()} == {
        path.name: path.read_bytes() for path in folder.iterdir()
    }


def test_a_table_changed_again_and_again_stops_the_night(
    folder: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    meddling(monkeypatch, folder, replaced, 2)
    with pytest.raises(SettingError, match=r"fares\.csv was changed while the tables were read, twice"):
        take_snapshot(folder, tmp_path / "copy")


def test_a_link_turned_to_another_folder_meanwhile_is_not_followed(
    folder: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    other = Folder().cell("fares.csv", 2, "fare", "121").write(tmp_path / "other")
    link = tmp_path / "link"
    link.symlink_to(folder, target_is_directory=True)

    def turn(_: Path) -> None:
        link.unlink()
        link.symlink_to(other, target_is_directory=True)

    meddling(monkeypatch, folder, turn, 1)
    snapshot = take_snapshot(link, tmp_path / "copy")
    assert (snapshot.folder / "fares.csv").read_bytes() == (folder / "fares.csv").read_bytes()


def test_the_copy_is_the_folder_and_the_hashes_are_those_of_the_copy(folder: Path, tmp_path: Path) -> None:
    (folder / "notes.txt").write_text("not a table")
    snapshot = take_snapshot(folder, tmp_path / "copy")
    assert by_name(read_folder(snapshot.folder).network) == by_name(read_folder(folder).network)
    assert set(snapshot.files) == {"network.toml", *(f"{name}.csv" for name in inputs.INPUT_TABLES)}
    for name, entry in snapshot.files.items():
        data = (snapshot.folder / name).read_bytes()
        assert (entry.sha256, entry.bytes) == (hashlib.sha256(data).hexdigest(), len(data))


def test_a_disk_that_is_full_while_tables_are_copied_is_told_by_the_name_of_the_folder(
    folder: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def full(*_: object) -> None:
        raise OSError(28, "No space left on device")  # as a write does, which names no file

    monkeypatch.setattr(inputs, "_copy", full)
    with pytest.raises(SettingError, match=r"^folder: cannot be copied \(No space left on device\); free space"):
        take_snapshot(folder, tmp_path / "copy")
