"""What docs/store.md shows is done as it stands there, in a folder of its own."""

from __future__ import annotations

import json
import re
import shlex
import shutil
import subprocess
from datetime import date
from pathlib import Path

import pytest

from legworth.store import Store, StoreError
from tests.commands import run
from tests.folders import Folder
from tests.legworth.store.small_nights import FIRST, publish_priced

DOCUMENT = (Path(__file__).parents[3] / "docs" / "store.md").read_text(encoding="utf-8")
BLOCKS = re.findall(r"```(python|sh|toml)\n(.*?)```", DOCUMENT, re.DOTALL)
COMMANDS = [
    shlex.split(line, comments=True)
    for kind, block in BLOCKS
    if kind == "sh"
    for line in block.splitlines()
    if not line.startswith("python -m benchmarks.")
]
PYTHON = [block for kind, block in BLOCKS if kind == "python"]


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with the network, the store with nights 41 and 42, and the hand-over that the document speaks of."""
    folder = tmp_path_factory.mktemp("documented")
    Folder().write(folder / "demo_network")
    store = Store.open(folder / "demo_network_nights", create=True)
    (store.path / "log" / "00040-2027-02-27.jsonl").write_text("")
    days = [(day - FIRST.date()).days for day in (date(2027, 2, 28), date(2027, 3, 1))]
    names = [publish_priced(store, day=day).name for day in days]
    assert names == ["00041-2027-02-28", "00042-2027-03-01"]
    assert run("nights", "--store", store.path, "hand-over", "--to", folder / "prices").code == 0
    return folder


@pytest.mark.parametrize("number", range(len(PYTHON)))
def test_python_runs(folder: Path, number: int, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(folder)
    seen: dict[str, object] = {}
    exec(compile(PYTHON[number], "docs/store.md", "exec"), seen)
    assert "prices" in seen


@pytest.mark.parametrize("command", COMMANDS, ids=" ".join)
def test_commands_run(folder: Path, tmp_path: Path, command: list[str], monkeypatch: pytest.MonkeyPatch) -> None:
    shutil.copytree(folder, tmp_path / "here")
    monkeypatch.chdir(tmp_path / "here")
    if command[0] == "sha256sum":
        if shutil.which(command[0]) is None:
            pytest.skip("sha256sum of GNU coreutils is not here")
        subprocess.run(command, cwd="prices", check=True, capture_output=True)
        return
    assert command[0] == "legworth"
    done = run(*command[1:])
    assert (done.code, done.err) == (0, ""), done.err


def test_the_document_has_examples_of_both_kinds() -> None:
    assert len(PYTHON) >= 2
    assert {command[4] for command in COMMANDS if command[0] == "legworth"} == {
        "list",
        "show",
        "compare",
        "verify",
        "query",
        "thin",
        "restore",
        "hand-over",
    }


def test_messages_about_the_marker_are_those_that_the_night_desk_looks_up(tmp_path: Path) -> None:
    table = (Path(__file__).parents[3] / "docs" / "reliability.md").read_text(encoding="utf-8")
    rows = [line.split(" | ") for line in table.splitlines() if line.startswith("| 2 | ")]
    patterns = {
        re.escape(text).replace(r"\.\.\.", ".*").replace("STORE", ".*").replace(r"\ N,", r"\ \d+,"): row[3]
        for row in rows
        for text in re.findall("`([^`]+)`", row[1])
    }
    lost = Store.open(tmp_path / "lost", create=True).path
    (lost / "store.json").unlink()
    (lost / "in_force").touch()
    for name, marker in (("damaged", "{}"), ("other", '{"layout": 2}')):
        (Store.open(tmp_path / name, create=True).path / "store.json").write_text(marker)
    (tmp_path / "letters").mkdir()
    (tmp_path / "letters" / "to_aunt").touch()
    mends = {}
    for name in ("lost", "damaged", "other", "letters"):
        with pytest.raises(StoreError) as refused:
            Store.open(tmp_path / name, create=True)
        (mends[name],) = {mend for pattern, mend in patterns.items() if re.search(pattern, str(refused.value))}
    assert mends["lost"] == mends["damaged"]
    assert "`STORE/store.json`" in mends["lost"]
    assert mends["other"].startswith("use that version")
    assert mends["letters"].startswith("name the store")


def test_the_marker_shown_is_that_of_a_store(folder: Path) -> None:
    (shown,) = re.findall(r"^  store\.json +(\{.*?\})", DOCUMENT, re.MULTILINE)
    assert json.loads(shown) == json.loads((folder / "demo_network_nights" / "store.json").read_text())
