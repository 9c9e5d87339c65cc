"""A night on a Dask cluster: parts that hang, die or take a worker along, and clusters that go away."""

from __future__ import annotations

import json
import os
import signal
import threading
import time
from collections.abc import Callable
from pathlib import Path

import pytest

from legworth.refresh import PartInput, RefreshOptions, cut_parts, refresh
from legworth.refresh.cluster import Cluster
from legworth.refresh.processes import Processes
from legworth.refresh.running import PartTask, Workers
from legworth.store import Night
from network import SettingError, SolverStoppedError, read_folder
from tests.folders import Folder
from tests.legworth.refresh.clusters import cluster
from tests.legworth.refresh.nights import (
    PRICING,
    DiesOnce,
    Fails,
    Hangs,
    HangsInSolver,
    Slow,
    contents,
    in_force,
    limits,
    make,
)

MIDDLE = "2030-03-02"
SECONDS = 7.0
"""Time limit of a part: several times what a part takes on a busy machine once its process has loaded its libraries."""


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """A network of three parts with a time limit."""
    return limits(Folder(), part_seconds=SECONDS).write(tmp_path / "folder")


def night(folder: Path, store: Path, workers: Workers, task: PartTask) -> Night:
    found = refresh(folder, store, RefreshOptions(PRICING), workers=workers, task=task).night
    assert in_force(store) == found
    return found


def pids(client: Cluster) -> set[int]:
    """Numbers of the worker processes."""
    client._client.wait_for_workers(2, timeout=60)
    return set(client._client.run(os.getpid).values())


def solver(found: Night, part: str) -> str:
    """Name of the solver that priced a part."""
    summary = json.loads((found.folder / f"part={part}" / "summary.json").read_text())
    return str(summary["solver"]).split()[0]


def log_of(store: Path, name: str) -> str:
    return (store / "log" / f"{name}.jsonl").read_text()


def ended(pid: str) -> bool:
    """Whether a process ends within half a minute."""
    stat, most = Path(f"/proc/{pid}/stat"), time.monotonic() + 30
    while stat.exists() and stat.read_text().rpartition(")")[2].split()[0] != "Z" and time.monotonic() < most:
        time.sleep(0.02)
    return time.monotonic() < most


def meanwhile(when: Callable[[], bool], what: Callable[[], object]) -> threading.Thread:
    """Do something as soon as something is so."""

    def wait() -> None:
        while not when():
            time.sleep(0.02)
        what()

    doing = threading.Thread(target=wait, daemon=True)
    doing.start()
    return doing


def test_a_part_that_hangs_with_one_solver_is_ended_and_done_with_the_other(
    folder: Path, two_workers: str, tmp_path: Path
) -> None:
    note = tmp_path / "solver"
    client = Cluster(two_workers)
    before = pids(client)
    found = night(folder, tmp_path / "cluster", client, HangsInSolver(MIDDLE, "cbc", note))
    alike = night(folder, tmp_path / "processes", Processes(2), Fails(MIDDLE, "cbc"))
    assert contents(found) == contents(alike)
    solvers = {part.name: solver(found, part.name) for part in found.manifest.parts}
    assert solvers == {"2030-03-01": "cbc", MIDDLE: "highs", "2030-03-03": "cbc"}
    assert f"part {MIDDLE}: took more than {SECONDS:g} s; it is tried once more, by highs" in log_of(
        tmp_path / "cluster", found.name
    )
    assert ended(note.read_text())
    again = Cluster(two_workers)
    assert pids(again) == before, "its process was ended, its worker was not"
    again.close()


def test_a_part_that_hangs_with_both_solvers_stops_the_night_by_name_and_the_next_one_has_all_workers(
    folder: Path, two_workers: str, tmp_path: Path
) -> None:
    store = tmp_path / "store"
    last = make(folder, store).night
    limits(Folder(), part_seconds=SECONDS).cell("legs.csv", 4, "sold", "1").write(folder)
    with pytest.raises(
        SolverStoppedError, match=f"part {MIDDLE}: took more than {SECONDS:g} s with either solver"
    ) as error:
        refresh(folder, store, RefreshOptions(PRICING), workers=Cluster(two_workers), task=Hangs(MIDDLE))
    assert error.value.exit_code == 3
    assert in_force(store) == last
    (tmp_path / "marks").mkdir()
    night(folder, store, Cluster(two_workers), Slow(1.0, tmp_path / "marks"))
    assert len({mark.name.split("-")[-1] for mark in (tmp_path / "marks").iterdir()}) == 2


def test_a_part_that_dies_takes_no_worker_along_and_stops_the_night_by_name(
    folder: Path, two_workers: str, tmp_path: Path
) -> None:
    client = Cluster(two_workers)
    before = pids(client)
    died = DiesOnce(MIDDLE, tmp_path)
    assert contents(night(folder, tmp_path / "store", client, died)) == contents(make(folder, tmp_path / "plain").night)
    with pytest.raises(SolverStoppedError, match=f"part {MIDDLE}: its process died twice"):
        refresh(
            folder,
            tmp_path / "never",
            RefreshOptions(PRICING),
            workers=Cluster(two_workers),
            task=DiesOnce(MIDDLE, tmp_path, always=True),
        )
    assert in_force(tmp_path / "never") is None
    again = Cluster(two_workers)
    assert pids(again) == before
    again.close()


def test_a_worker_that_hangs_as_a_whole_is_replaced_and_its_part_done_by_another(
    folder: Path, two_workers: str, tmp_path: Path
) -> None:
    marks = tmp_path / "marks"
    marks.mkdir()
    client = Cluster(two_workers, patience=8.0)
    before = pids(client)
    stopped: list[int] = []

    def begun() -> bool:
        return any(marks.iterdir())

    def stop() -> None:
        time.sleep(1.0)  # until it has told that it has begun
        stopped.append(int(next(marks.iterdir()).name.split("-")[-1]))
        os.kill(stopped[0], signal.SIGSTOP)

    doing = meanwhile(begun, stop)
    found = night(folder, tmp_path / "store", client, Slow(3.0, marks))
    doing.join()
    assert stopped[0] in before
    assert found.manifest.parts and ended(str(stopped[0]))
    assert "took more than" in log_of(tmp_path / "store", found.name)


def test_the_cluster_forgets_parts_that_are_here_or_given_up(folder: Path, two_workers: str) -> None:
    network = read_folder(folder).network
    first, *_, last = (PartInput(part.name, part.network_of(network), 1, PRICING) for part in cut_parts(network))
    client = Cluster(two_workers)
    hanging, done = client.submit(Hangs(first.name), first), client.submit(Hangs(first.name), last)
    assert done.result(timeout=120).name == last.name
    while client.waiting(hanging):
        time.sleep(0.1)
    client.end(hanging)

    def known(dask_scheduler: object) -> int:
        return len(dask_scheduler.tasks)  # type: ignore[attr-defined]

    most = time.monotonic() + 30
    while client._client.run_on_scheduler(known) and time.monotonic() < most:
        time.sleep(0.05)
    assert client._client.run_on_scheduler(known) == 0
    client.close()


def test_a_part_that_hangs_for_a_night_that_was_killed_is_ended(folder: Path, two_workers: str, tmp_path: Path) -> None:
    network = read_folder(folder).network
    part = cut_parts(network)[0]
    client, note = Cluster(two_workers), tmp_path / "solver"
    client.submit(HangsInSolver(part.name, "cbc", note), PartInput(part.name, part.network_of(network), 1, PRICING))
    while not (note.exists() and note.read_text()):
        time.sleep(0.05)
    assert Path(f"/proc/{note.read_text()}").exists()
    client._client.close()  # cancels nothing, as a process that is killed
    assert ended(note.read_text())


@pytest.mark.parametrize("gone", ["worker", "scheduler", "answers"])
def test_a_cluster_that_goes_away_ends_the_night_soon_and_says_so(gone: str, folder: Path, tmp_path: Path) -> None:
    store = tmp_path / "store"
    last = make(folder, store).night
    marks = tmp_path / "marks"
    marks.mkdir()
    with cluster(tmp_path, 1, nanny=False) as started:
        if gone == "worker":  # which nobody would restart, so that it had better live on
            found = night(folder, tmp_path / "other", Cluster(started.file), Hangs(MIDDLE, "cbc"))
            assert solver(found, MIDDLE) == "highs"
        limits(Folder(), part_seconds=3600.0).cell("legs.csv", 4, "sold", "1").write(folder)
        process = started.workers[0] if gone == "worker" else started.scheduler
        signalled = signal.SIGSTOP if gone == "answers" else signal.SIGKILL
        said = (
            "has lost its last worker, and for 2 s no other has come" if gone == "worker" else "has stopped answering"
        )
        client = Cluster(started.file, patience=8.0, without_workers=2.0)
        doing = meanwhile(lambda: any(marks.iterdir()), lambda: process.send_signal(signalled))
        begin = time.monotonic()
        with pytest.raises(SettingError, match=f"{said}.*refresh again") as error:
            refresh(folder, store, RefreshOptions(PRICING), workers=client, task=Slow(600.0, marks))
        doing.join(1)
        assert not doing.is_alive(), "the night ended before the cluster went away"
        assert time.monotonic() - begin < 180, "parts may take an hour, and the night waited for them"
        process.kill()
    assert "\n" not in str(error.value)
    assert error.value.exit_code == 2
    assert in_force(store) == last
