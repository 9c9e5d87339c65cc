"""A log that can be written no longer does not decide whether a night goes into force, or what is told of it."""

from __future__ import annotations

from pathlib import Path

import pytest

from legworth.refresh import night
from legworth.refresh.journal import Journal
from network import SolverStoppedError
from tests.folders import Folder
from tests.legworth.refresh.nights import Fails, in_force, make

FULL = Path("/dev/full")
"""A disk without space: every write to it fails."""

pytestmark = pytest.mark.skipif(not FULL.exists(), reason="needs a device that is always full")


@pytest.fixture
def full(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(night, "Journal", lambda path: Journal(FULL))


@pytest.mark.usefixtures("full")
def test_a_night_whose_log_is_cut_short_is_published_and_that_is_told_once(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    found = make(Folder().write(tmp_path / "folder"), tmp_path / "store").night
    assert in_force(tmp_path / "store") == found
    assert capsys.readouterr().err.count("warning: cannot write /dev/full (No space left on device)") == 1


@pytest.mark.usefixtures("full")
def test_a_night_that_fails_says_why_and_not_that_its_log_is_full(tmp_path: Path) -> None:
    with pytest.raises(SolverStoppedError, match="gave up"):
        make(Folder().write(tmp_path / "folder"), tmp_path / "store", task=Fails("2030-03-01"))
    assert in_force(tmp_path / "store") is None
