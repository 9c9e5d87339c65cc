"""The command as the night desk runs it: output, exit codes, and what is left when it is killed.

``LEGWORTH_KILLS`` sets how often the command is killed at a random moment; the default keeps the tests quick.
"""

from __future__ import annotations

import json
import os
import random
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from legworth.store import Store
from tests.commands import run
from tests.folders import Folder
from tests.legworth.refresh.nights import contents, in_force, limits, make

ROOT = Path(__file__).parents[3]
DEMO = ROOT / "demo_network"
KILLS = int(os.environ.get("LEGWORTH_KILLS", "1"))


def started(*arguments: str | Path) -> subprocess.Popen[bytes]:
    """Begin a command in a process of its own."""
    command = [sys.executable, "-m", "legworth.cli", *map(str, arguments)]
    return subprocess.Popen(command, cwd=ROOT, stdout=subprocess.PIPE, stderr=subprocess.PIPE)


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    return Folder().write(tmp_path / "folder")


def test_the_demo_is_refreshed_beside_itself_and_quietly(tmp_path: Path) -> None:
    demo = tmp_path / "demo_network"
    demo.symlink_to(DEMO, target_is_directory=True)
    outcome = run("refresh", demo, "--jobs", "2")
    store = tmp_path / "demo_network_nights"
    found = in_force(store)
    assert (outcome.code, outcome.err) == (0, "")
    assert found is not None
    assert f"night {found.name} is in force" in outcome.out
    assert f"what moved: {found.folder / 'changes.html'}\n" in outcome.out  # whole, whatever the width
    assert "12, 12 solved and 0 taken over, all certified" in outcome.out
    assert sum(part.products for part in found.manifest.parts) == 16_116
    assert (found.folder / "changes.html").read_text(encoding="utf-8").lower().startswith("<!doctype html>")
    assert json.loads((found.folder / "changes.json").read_bytes())
    log = [json.loads(line) for line in (store / "log" / f"{found.name}.jsonl").read_text().splitlines()]
    assert {"begun", "part", "checks", "published"} <= {event["event"] for event in log}
    assert all({"at", "level"} <= event.keys() for event in log)


def test_json_is_the_summary_of_the_manifest(folder: Path, tmp_path: Path) -> None:
    store = tmp_path / "nights"
    document = json.loads(run("refresh", folder, "--store", store, "--json").out)
    found = in_force(store)
    assert found is not None
    assert (document["ok"], document["night"], document["before"]) == (True, found.name, None)
    assert (document["parts"], document["taken_over"], document["legs"]) == (3, 0, 5)
    assert document["inputs"].keys() == found.manifest.inputs.keys()
    assert [check["name"] for check in document["checks"]] == [check.name for check in found.manifest.checks]


def test_a_stopped_night_has_an_exit_code_of_its_own_and_names_the_leg(folder: Path, tmp_path: Path) -> None:
    store = tmp_path / "nights"
    make(folder, store)
    limits(Folder().cell("legs.csv", 6, "sold", "9"), few_legs=0).write(folder)
    stopped = run("refresh", folder, "--store", store)
    assert (stopped.code, stopped.out) == (4, "")
    assert "the last one stays in force" in stopped.err
    assert "look first at L5: bid price" in stopped.err
    assert str(store / "stopped" / "00002-2030-02-25.json") in stopped.err
    forced = run("refresh", folder, "--store", store, "--force", "sold out fast")
    assert forced.code == 0
    assert "sold out fast" in forced.out


@pytest.mark.parametrize(
    ("arguments", "code"),
    [
        (["--curves", "guess"], 2),
        (["--jobs", "0"], 2),
        (["--force", " "], 2),
        (["--cluster", "nowhere"], 2),
        (["--store", "FOLDER/legs.csv"], 2),
        (["--store", "FOLDER"], 2),
    ],
)
def test_options_that_cannot_be_are_refused(arguments: list[str], code: int, folder: Path) -> None:
    outcome = run("refresh", folder, *(argument.replace("FOLDER", str(folder)) for argument in arguments))
    assert (outcome.code, outcome.out) == (code, "")
    assert outcome.err


def test_of_two_at_once_one_publishes_and_the_other_says_so(folder: Path, tmp_path: Path) -> None:
    store = tmp_path / "nights"
    both = [started("refresh", folder, "--store", store) for _ in range(2)]
    ended = [(process.communicate(timeout=120)[1], process.returncode) for process in both]
    codes = sorted(code for _, code in ended)
    found = in_force(store)
    assert found is not None
    assert codes in ([0, 2], [0, 0])  # the second may have begun after the first had ended
    assert found.number == codes.count(0)
    if codes == [0, 2]:
        assert any(b"another process is putting a night into" in error for error, _ in ended)


def test_an_interrupt_leaves_the_last_night_in_force_and_nothing_aside(folder: Path, tmp_path: Path) -> None:
    store = tmp_path / "nights"
    process = started("refresh", folder, "--store", store)
    deadline = time.monotonic() + 60
    while not list(store.glob("log/*.jsonl")) and time.monotonic() < deadline:
        time.sleep(0.01)
    process.send_signal(signal.SIGINT)
    _, error = process.communicate(timeout=60)
    assert (process.returncode, error.decode().strip()) == (130, "interrupted")
    assert in_force(store) is None
    assert list((store / "aside").iterdir()) == []


def test_killed_at_any_moment_the_night_in_force_is_whole(folder: Path, tmp_path: Path) -> None:
    store = tmp_path / "nights"
    began = time.monotonic()
    process = started("refresh", folder, "--store", store)
    process.communicate(timeout=120)
    assert process.returncode == 0
    first, lasts = in_force(store), time.monotonic() - began
    assert first is not None
    moments = random.Random(KILLS)
    published = {first.name}
    for _ in range(KILLS):
        process = started("refresh", folder, "--store", store)
        time.sleep(moments.uniform(0.3, 1.1) * lasts)
        process.kill()
        process.communicate()
        found = in_force(store)
        assert found is not None
        assert {night.name for night in Store.open(store).nights()} >= published
        published.add(found.name)
    assert run("refresh", folder, "--store", store).code == 0
    last = in_force(store)
    assert last is not None
    assert last.name not in published
    assert {n: d for n, d in contents(last).items() if "summary" not in n} == {
        n: d for n, d in contents(first).items() if "summary" not in n
    }
    assert list((store / "aside").iterdir()) == []
