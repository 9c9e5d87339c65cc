"""Files of a run moved into place together."""

from __future__ import annotations

from pathlib import Path

import pytest

from legworth.placing import place_together


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
