"""Bad input never yields a number: every fault is listed with its place and its mend, and nothing is written."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import pytest

from network import Fault
from tests.commands import Outcome, run
from tests.folders import Folder
from tests.legworth.bad_input.cells import CELLS
from tests.legworth.bad_input.files import FILES, HEADERS
from tests.legworth.bad_input.kinds import Place
from tests.legworth.bad_input.relations import RELATIONS, SEVERAL
from tests.legworth.bad_input.settings import SETTINGS

ROOT = Path(__file__).parents[2]
CASES = {**HEADERS, **FILES, **CELLS, **RELATIONS, **SETTINGS, **SEVERAL}


def refused(outcome: Outcome, places: list[Place]) -> list[str]:
    """Check that a run was refused for these places alone, and return its lines."""
    assert outcome.code == 2
    assert outcome.out == ""
    assert "Traceback" not in outcome.err
    *lines, last = outcome.err.splitlines()
    for file, line, column in places:
        place = f"{file}:{line}: " if line else f"{file}: "
        assert any(text.startswith(place + (f"{column}: " if column else "")) for text in lines), place + column
    count = "1 fault" if len(places) == 1 else f"{len(places)} faults"
    assert last == f"{count}; nothing was computed or written"
    return lines


def test_there_are_cases_enough() -> None:
    assert len(CASES) == sum(map(len, (HEADERS, FILES, CELLS, RELATIONS, SETTINGS, SEVERAL))) > 100


@pytest.mark.parametrize("name", CASES)
def test_every_fault_is_listed_and_nothing_else(name: str, tmp_path: Path) -> None:
    spoil, places = CASES[name]
    folder, out = spoil(Folder()).write(tmp_path / "folder"), tmp_path / "out"
    before = sorted(tmp_path.rglob("*"))
    lines = refused(run("price", folder, "--out", out), places)
    document = run("price", folder, "--out", out, "--json")
    faults = json.loads(document.out)["faults"]
    assert document.code == 2
    assert sorted((fault["file"], fault["line"], fault["column"]) for fault in faults) == sorted(places)
    assert [str(Fault(**fault)) for fault in faults] == lines
    for fault in faults:
        assert "; " in fault["problem"], "what is wrong; what would mend it"
        assert not fault["warning"]
    assert sorted(tmp_path.rglob("*")) == before


@pytest.mark.parametrize("command", ["check", "price", "compare"])
def test_every_command_lists_the_same_faults(command: str, tmp_path: Path) -> None:
    spoil, places = CASES["one in every table"]
    folder = spoil(Folder()).write(tmp_path / "folder")
    where = {"check": [], "price": ["--out", tmp_path / "out"], "compare": ["--picture", tmp_path / "out.png"]}
    refused(run(command, folder, *where[command]), places)
    assert [path.name for path in tmp_path.iterdir()] == ["folder"]


def test_a_result_of_an_earlier_run_stays(tmp_path: Path) -> None:
    out = tmp_path / "out"
    out.mkdir()
    (out / "bid_prices.csv").write_text("of yesterday")
    spoil, places = CASES["missing values"]
    refused(run("price", spoil(Folder()).write(tmp_path / "folder"), "--out", out), places)
    assert [(path.name, path.read_text()) for path in out.iterdir()] == [("bid_prices.csv", "of yesterday")]


def test_faults_beyond_the_limit_are_counted(tmp_path: Path) -> None:
    folder = Folder().add("fares.csv", *[f"NOR-HUB,A,{'x' if n % 2 else 1}" for n in range(80)])
    folder.write(tmp_path / "folder")
    outcome = run("check", tmp_path / "folder")
    *lines, last = outcome.err.splitlines()
    assert last == "120 faults; nothing was computed or written"
    assert len(lines) == 2 * 26
    assert "fares.csv:70: fare: and 15 more like it from here on" in lines
    assert "fares.csv:44: itinerary and fare_class: and 55 more like it from here on" in lines
    faults = json.loads(run("check", tmp_path / "folder", "--json").out)["faults"]
    assert sum(fault["count"] for fault in faults) == 120


@pytest.mark.parametrize(
    ("name", "words"),
    [("nowhere", "there is no such folder"), ("network.toml", "is a file"), ("n" * 300, "cannot be opened")],
)
def test_what_is_no_folder_is_refused(name: str, words: str, tmp_path: Path) -> None:
    folder = Folder().write(tmp_path) / name
    [line] = refused(run("price", folder, "--out", tmp_path / "out"), [(str(folder), 0, "")])
    assert words in line
    assert not (tmp_path / "out").exists()


def test_a_file_that_may_not_be_read_is_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    folder = Folder().write(tmp_path)

    def denied(path: Path, *_: object, **__: object) -> bytes:
        raise PermissionError(13, "Permission denied", str(path))

    monkeypatch.setattr(Path, "read_bytes", denied)
    monkeypatch.setattr(Path, "read_text", denied)
    files = [
        "network.toml",
        *(f"{t}.csv" for t in ("stations", "legs", "itineraries", "fares", "demand", "booking_curves")),
    ]
    lines = refused(run("check", folder), [(file, 0, "") for file in files])
    assert all("Permission denied" in line for line in lines)


def test_names_that_could_command_a_terminal_are_escaped(tmp_path: Path) -> None:
    folder = Folder().cell("legs.csv", 2, "origin", "\x1b[31mNOR\x07").write(tmp_path)
    [line] = refused(run("check", folder), [("legs.csv", 2, "origin")])
    assert line.isprintable()


def real(*arguments: str | Path) -> Outcome:
    """Run the command line as a process of its own."""
    done = subprocess.run(
        [sys.executable, "-m", "legworth.cli", *map(str, arguments)],
        cwd=ROOT, capture_output=True, encoding="utf-8", timeout=120, check=False,
    )  # fmt: skip
    return Outcome(done.returncode, done.stdout, done.stderr)


@pytest.mark.parametrize("name", ["one in every table", "missing tables"])
def test_a_process_of_its_own_ends_alike(name: str, tmp_path: Path) -> None:
    spoil, places = CASES[name]
    folder = spoil(Folder()).write(tmp_path / "folder")
    assert refused(real("price", folder, "--out", tmp_path / "out"), places)
    assert [path.name for path in tmp_path.iterdir()] == ["folder"]


def test_a_process_of_its_own_gives_the_same_json(tmp_path: Path) -> None:
    spoil, _ = CASES["unknown stations"]
    folder = spoil(Folder()).write(tmp_path)
    assert real("check", folder, "--json") == run("check", folder, "--json")
