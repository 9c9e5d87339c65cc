"""The same input gives the same bytes, whoever works: one process, several, or a cluster that loses a worker."""

from __future__ import annotations

import os
import shutil
import signal
import sys
import threading
import time
from dataclasses import replace
from pathlib import Path

import pytest

from legworth.refresh import RefreshOptions, refresh
from legworth.refresh.cluster import Cluster
from legworth.refresh.processes import Processes
from legworth.refresh.running import Workers
from legworth.store import Night
from network import SettingError
from tests.folders import Folder
from tests.legworth.refresh.nights import PRICING, Slow, contents, in_force, make

ROOT = Path(__file__).parents[3]
DEMO = ROOT / "demo_network"
CHANGED = ("VL11-0301", "VL12-0303")


@pytest.fixture(scope="module")
def nights(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Path, Night]:
    """The demo a day later with some seats sold, the store it meets, and the night that comes out without processes."""
    where = tmp_path_factory.mktemp("demo")
    folder = shutil.copytree(DEMO, where / "folder")
    make(folder, where / "before")
    settings, legs = folder / "network.toml", folder / "legs.csv"
    settings.write_text(settings.read_text().replace("2027-02-26T02:30", "2027-02-27T02:30"))
    rows = legs.read_text().splitlines()
    for n, row in enumerate(rows):
        if row.startswith(CHANGED):
            *others, sold = row.split(",")
            rows[n] = ",".join([*others, str(int(sold) + 1)])
    legs.write_text("\n".join(rows) + "\n")
    shutil.copytree(where / "before", where / "plain")
    return folder, where / "before", make(folder, where / "plain").night


def made_by(workers: Workers, nights: tuple[Path, Path, Night], store: Path, task: object = None) -> Night:
    folder, before, _ = nights
    shutil.copytree(before, store)
    how = {} if task is None else {"task": task}
    found = refresh(folder, store, RefreshOptions(PRICING), workers=workers, **how).night  # type: ignore[arg-type]
    assert in_force(store) == found
    return found


def test_a_night_is_partly_solved_and_partly_taken_over(nights: tuple[Path, Path, Night]) -> None:
    solved = [part.name for part in nights[2].manifest.parts if part.taken_over_from is None]
    assert solved == ["2027-03-01", "2027-03-03"]
    assert len(nights[2].manifest.parts) == 12


@pytest.mark.parametrize("count", [1, 2, 4])
def test_any_number_of_processes_gives_the_same_bytes(
    count: int, nights: tuple[Path, Path, Night], tmp_path: Path
) -> None:
    assert contents(made_by(Processes(count), nights, tmp_path / "store")) == contents(nights[2])


def test_a_cluster_that_loses_a_worker_gives_the_same_bytes(
    nights: tuple[Path, Path, Night], two_workers: str, tmp_path: Path
) -> None:
    marks = tmp_path / "marks"
    marks.mkdir()
    client = Cluster(two_workers)
    client._client.wait_for_workers(2, timeout=60)
    first = next(iter(client._client.run(os.getpid).values()))
    killed = threading.Event()

    def kill() -> None:
        """Kill the first worker while it works on its second part."""
        while sum(mark.name.endswith(f"-{first}") for mark in marks.iterdir()) < 2:
            time.sleep(0.01)
        os.kill(first, signal.SIGKILL)
        killed.set()

    threading.Thread(target=kill, daemon=True).start()
    found = made_by(client, nights, tmp_path / "store", Slow(0.2, marks))
    assert killed.is_set()
    assert contents(found) == contents(nights[2])


def test_a_scheduler_that_does_not_answer_is_told_in_one_line(tmp_path: Path) -> None:
    with pytest.raises(SettingError, match=r"no Dask scheduler answers at tcp://127\.0\.0\.1:9"):
        Cluster("tcp://127.0.0.1:9", patience=0.5)
    folder = Folder().write(tmp_path / "folder")
    options = replace(RefreshOptions(PRICING), cluster="nowhere")
    with pytest.raises(SettingError, match="no Dask scheduler answers at nowhere"):
        refresh(folder, tmp_path / "store", options)
    assert in_force(tmp_path / "store") is None


def test_without_the_library_it_says_how_to_get_it(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(sys.modules, "distributed", None)
    with pytest.raises(SettingError, match=r"legworth\[cluster\]"):
        Cluster("tcp://127.0.0.1:9")
