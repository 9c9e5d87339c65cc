"""The command, as it is typed."""

from __future__ import annotations

import json
import re
from pathlib import Path

import pandas as pd
import pytest

from tests.commands import run
from tests.folders import Folder


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return Folder().write(tmp_path_factory.mktemp("network"))


def test_writes_its_files_and_prints_its_table(folder: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    outcome = run("simulate", folder, "--out", out, "--paths", "20", "--methods", "curves, leg", "--leg", "L2")
    assert outcome.code == 0
    assert outcome.err == ""
    assert sorted(path.name for path in out.iterdir()) == ["simulation.csv", "simulation.html", "simulation.json"]
    table = pd.read_csv(out / "simulation.csv")
    assert table["method"].tolist() == ["curves", "leg", "leg+"]
    for name in ("curves", "leg+", "hindsight", "simulation.html"):
        assert name in outcome.out
    document = json.loads((out / "simulation.json").read_text(encoding="utf-8"))
    assert [control["method"] for control in document["controls"]] == table["method"].tolist()
    assert list(document["prices_over_time"]) == ["L2"]


def test_page_stands_by_itself(folder: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    assert run("simulate", folder, "--out", out, "--paths", "10", "--methods", "curves", "--stress").code == 0
    page = (out / "simulation.html").read_text(encoding="utf-8")
    assert page.count("<svg") == 3
    assert "<script" not in page
    assert not re.search(r"""(?:src|href)\s*=\s*["'](?!#)""", page)
    assert "Tern Sound Ferries" in page
    assert "When the forecast is wrong" in page
    assert "$" not in re.sub(r"<svg.*?</svg>", "", page, flags=re.DOTALL)


def test_json_on_the_screen_is_that_of_the_file(folder: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    arguments = ("--out", out, "--paths", "10", "--methods", "leg,curves+", "--reading-days", "3,1", "--json")
    outcome = run("simulate", folder, *arguments)
    assert outcome.code == 0
    assert json.loads(outcome.out) == json.loads((out / "simulation.json").read_text(encoding="utf-8"))
    assert json.loads(outcome.out)["settings"]["reading_days"] == [3.0, 1.0]


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["--methods", "lag"], "unknown method 'lag'"),
        (["--reading-days", "3,soon"], "not a list of numbers"),
        (["--leg", "L9"], "no leg 'L9'"),
        (["--paths", "1"], "1 is not in the range"),
    ],
)
def test_wrong_options_end_with_code_2_and_write_nothing(
    folder: Path, tmp_path: Path, arguments: list[str], message: str
) -> None:
    out = tmp_path / "out"
    outcome = run("simulate", folder, "--out", out, "--paths", "10", *arguments)
    assert outcome.code == 2
    assert message in outcome.err
    assert "Traceback" not in outcome.err
    assert not out.exists()


def test_a_file_in_the_place_of_the_folder_is_told(folder: Path, tmp_path: Path) -> None:
    (tmp_path / "taken").write_text("a file")
    outcome = run("simulate", folder, "--out", tmp_path / "taken" / "out", "--paths", "10", "--methods", "leg")
    assert outcome.code == 2
    assert "cannot write to" in outcome.err
