"""The same input gives the same bytes, whoever works: one process, several, or a cluster that loses a worker."""

from __future__ import annotations

import shutil
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import replace
from pathlib import Path

import pytest

from legworth.refresh import PartInput, RefreshOptions, cut_parts, refresh, run_part
from legworth.refresh.cluster import Cluster
from legworth.refresh.processes import Processes
from legworth.refresh.running import Workers
from legworth.store import Night
from network import SettingError, read_folder
from tests.folders import Folder
from tests.legworth.refresh.nights import PRICING, Hangs, Slow, contents, in_force, make

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


@contextmanager
def cluster(where: Path, workers: int, nanny: bool = False) -> Iterator[tuple[str, list[subprocess.Popen[bytes]]]]:
    """A scheduler and workers of one thread each, on loopback."""
    file = where / "scheduler.json"
    plain = {"cwd": ROOT, "stdout": subprocess.DEVNULL, "stderr": subprocess.DEVNULL}
    quiet = ["--no-dashboard", "--scheduler-file", str(file)]
    command = [sys.executable, "-m", "distributed.cli.dask_scheduler", "--host", "127.0.0.1", "--port", "0", *quiet]
    worker = [sys.executable, "-m", "distributed.cli.dask_worker", "--host", "127.0.0.1", "--nthreads", "1", *quiet]
    local = ["--local-directory", str(where), "--nanny" if nanny else "--no-nanny"]
    local += ["--preload", "legworth.refresh.tasks"]
    with ExitStack() as stack:
        started: list[subprocess.Popen[bytes]] = []
        for arguments in [command] + [[*worker, *local]] * workers:
            started.append(stack.enter_context(subprocess.Popen(arguments, **plain)))  # type: ignore[call-overload]
            stack.callback(started[-1].terminate)
        for _ in range(600):
            if file.exists() and file.stat().st_size:
                break
            time.sleep(0.05)
        yield str(file), started[1:]


def test_a_cluster_that_loses_a_worker_gives_the_same_bytes(nights: tuple[Path, Path, Night], tmp_path: Path) -> None:
    marks = tmp_path / "marks"
    marks.mkdir()
    with cluster(tmp_path, 2) as (file, workers):
        killed = threading.Event()

        def kill() -> None:
            """Kill the first worker while it works on its second part."""
            first = str(workers[0].pid)
            while sum(mark.name.endswith(f"-{first}") for mark in marks.iterdir()) < 2:
                time.sleep(0.01)
            workers[0].send_signal(signal.SIGKILL)
            killed.set()

        killer = threading.Thread(target=kill, daemon=True)
        killer.start()
        client = Cluster(file)
        client._client.wait_for_workers(2, timeout=30)
        found = made_by(client, nights, tmp_path / "store", Slow(0.2, marks))
        assert killed.is_set()
        assert workers[0].wait(10) == -signal.SIGKILL
    assert contents(found) == contents(nights[2])


def test_a_part_that_hangs_on_a_cluster_is_ended_and_its_worker_works_on(tmp_path: Path) -> None:
    network = read_folder(Folder().write(tmp_path / "folder")).network
    first, *_, last = (PartInput(part.name, part.network_of(network), 1, PRICING) for part in cut_parts(network))
    with cluster(tmp_path, 1, nanny=True) as (file, _):
        client = Cluster(file)
        hanging = client.submit(Hangs(first.name), first)
        while client.waiting(hanging):
            time.sleep(0.1)
        client.end(hanging)
        output = client.submit(run_part, last).result(timeout=120)
        client.close()
    assert output.written == run_part(last).written


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
