"""Files of a run moved into place together."""

from __future__ import annotations

from pathlib import Path

import pandas as pd
import pytest

from legworth.placing import folder_aside, place_together
from legworth.writing import write_results
from network import SettingError


def content(folder: Path) -> dict[str, str]:
    return {path.name: path.read_text() for path in folder.iterdir() if path.is_file()}


@pytest.fixture
def out(tmp_path: Path) -> Path:
    """A folder with files of an earlier run, and others."""
    for name in ("legs.csv", "stations.csv", "legs.parquet", "fares.csv"):
        (tmp_path / name).write_text(f"old {name}")
    aside = tmp_path / ".aside"
    aside.mkdir()
    for name in ("legs.csv", "stations.csv", "new.csv", "last.csv"):
        (aside / name).write_text(f"new {name}")
    return tmp_path


def test_all_are_moved_and_the_others_left_alone(out: Path) -> None:
    place_together(out / ".aside", out, ["legs.csv", "stations.csv", "new.csv"], ["legs.parquet", "none.parquet"])
    assert content(out) == {
        "legs.csv": "new legs.csv",
        "stations.csv": "new stations.csv",
        "new.csv": "new new.csv",
        "fares.csv": "old fares.csv",
    }


@pytest.mark.parametrize("fails", range(4))
@pytest.mark.parametrize("error", [OSError(28, "No space left on device"), KeyboardInterrupt()])
@pytest.mark.parametrize("linked", [True, False])
def test_a_move_that_fails_puts_all_back(
    out: Path, monkeypatch: pytest.MonkeyPatch, fails: int, error: BaseException, *, linked: bool
) -> None:
    """Whichever of the moves fails, and whether the file system has links or not."""
    before, replace = content(out), Path.replace
    names = ["legs.csv", "new.csv", "stations.csv", "last.csv"]

    def failing(self: Path, target: Path) -> Path:
        if self.parent.name == ".aside" and self.name == names[fails]:
            raise error
        return replace(self, target)

    def no_links(*_: object) -> None:
        raise OSError(95, "Operation not supported")

    monkeypatch.setattr(Path, "replace", failing)
    if not linked:
        monkeypatch.setattr("legworth.placing.os.link", no_links)
    with pytest.raises(type(error)):
        place_together(out / ".aside", out, names, ["legs.parquet"])
    assert content(out) == before


def test_a_removal_that_fails_puts_all_back(out: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    before, unlink = content(out), Path.unlink

    def failing(self: Path, missing_ok: bool = False) -> None:
        if self.name == "legs.parquet":
            raise OSError(13, "Permission denied")
        unlink(self, missing_ok=missing_ok)

    monkeypatch.setattr(Path, "unlink", failing)
    with pytest.raises(OSError, match="Permission"):
        place_together(out / ".aside", out, ["legs.csv", "new.csv"], ["legs.parquet"])
    assert content(out) == before


def test_a_folder_that_nothing_came_of_goes_again(tmp_path: Path) -> None:
    place = tmp_path / "deep" / "out"
    with (
        pytest.raises(SettingError, match=r"cannot write to .*out \(No space left on device\)"),
        folder_aside(place, []),
    ):
        raise OSError(28, "No space left on device")
    assert not place.exists()
    with folder_aside(place, ["a.csv"]) as aside:
        (aside / "a.csv").write_text("a")
        place_together(aside, place, ["a.csv"])
    assert [path.name for path in place.iterdir()] == ["a.csv"]


def test_a_folder_in_the_place_of_a_file_is_told_before_anything_is_done(out: Path) -> None:
    (out / "demand.csv").mkdir()
    with (
        pytest.raises(SettingError, match=r"demand\.csv is a folder, where a result is to go"),
        folder_aside(out, ["legs.csv", "demand.csv"]),
    ):
        raise AssertionError("nothing is to be done")


@pytest.mark.parametrize("fails", ["bid_prices.csv", "summary.json", "comparison.csv"])
def test_results_that_cannot_all_be_placed_leave_those_of_the_earlier_run(
    fails: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    old, new = pd.DataFrame({"leg": ["L1"]}), pd.DataFrame({"leg": ["L2"]})
    write_results(tmp_path, {"bid_prices": old, "comparison": old}, {"run": 1})
    before = content(tmp_path)
    replace, unlink = Path.replace, Path.unlink

    def failing(path: Path, *more: object, **how: object) -> object:
        if path.name == fails and path.parent.name != ".before":
            raise OSError(5, "Input/output error")
        return replace(path, *more) if more else unlink(path, **how)  # type: ignore[arg-type]

    with monkeypatch.context() as patched:
        patched.setattr(Path, "replace", failing)
        patched.setattr(Path, "unlink", failing)
        with pytest.raises(SettingError, match="Input/output error"):
            write_results(tmp_path, {"bid_prices": new}, {"run": 2})
    assert content(tmp_path) == before
    write_results(tmp_path, {"bid_prices": new}, {"run": 2})
    assert sorted(path.name for path in tmp_path.iterdir()) == ["bid_prices.csv", "summary.json"]
