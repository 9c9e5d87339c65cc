"""Parts that fail are run once more, alone; a process that dies or hangs harms no other part."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable
from concurrent.futures.process import BrokenProcessPool
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from legworth.refresh import PartInput, PartOutput, cut_parts, run_part
from legworth.refresh.processes import Processes
from legworth.refresh.running import Failure, run_parts
from network import NotCertifiedError, SolverStoppedError, read_folder
from network.errors import LegworthError
from tests.folders import Folder
from tests.legworth.refresh.nights import (
    PRICING,
    DiesOnce,
    Fails,
    Hangs,
    InPlace,
    LosesItsWorker,
    half_an_answer,
    length,
    stop_and_be_killed,
)

ALL = ["2030-03-01", "2030-03-02", "2030-03-03"]
MIDDLE = ALL[1]


@pytest.fixture(scope="module")
def parts(tmp_path_factory: pytest.TempPathFactory) -> list[PartInput]:
    network = read_folder(Folder().write(tmp_path_factory.mktemp("folder"))).network
    return [PartInput(part.name, part.network_of(network), 1, PRICING) for part in cut_parts(network)]


def run(
    parts: list[PartInput], workers: Any, task: Callable[[PartInput], PartOutput], seconds: float = 60.0
) -> tuple[dict[str, PartOutput], list[Failure]]:
    failures: list[Failure] = []
    found = {output.name: output for output in run_parts(parts, workers, task, seconds, failures.append)}
    return found, failures


def solver(output: PartOutput) -> str:
    return str(output.summary["solver"]).split()[0]


def test_a_part_that_its_solver_cannot_do_is_done_by_the_other_after_all_others(parts: list[PartInput]) -> None:
    workers = InPlace()
    found, failures = run(parts, workers, Fails(ALL[0], "cbc"))
    assert workers.worked == [*ALL, ALL[0]]
    assert {name: solver(output) for name, output in found.items()} == dict(
        zip(ALL, ("highs", "cbc", "cbc"), strict=True)
    )
    assert failures == [Failure(ALL[0], "gave up", True, "highs")]
    assert workers.closed


def test_fingerprints_are_of_the_solver_asked_for_not_of_the_one_that_stood_in(parts: list[PartInput]) -> None:
    found, _ = run(parts, InPlace(), Fails(ALL[0], "cbc"))
    plain, _ = run(parts, InPlace(), Fails("none"))
    assert found[ALL[0]].fingerprints == plain[ALL[0]].fingerprints


@pytest.mark.parametrize("error", [SolverStoppedError, NotCertifiedError])
def test_a_part_that_neither_solver_can_do_stops_the_night_by_name(
    parts: list[PartInput], error: type[LegworthError]
) -> None:
    workers = InPlace()
    with pytest.raises(error, match=f"part {MIDDLE}: gave up"):
        run(parts, workers, Fails(MIDDLE, error=error))
    assert workers.worked == [*ALL, MIDDLE]
    assert workers.closed


def test_a_fault_of_any_other_kind_stops_the_night_by_name_too(parts: list[PartInput]) -> None:
    with pytest.raises(LegworthError, match=f"part {MIDDLE}: ValueError: gave up"):
        run(parts, InPlace(), Fails(MIDDLE, error=ValueError))


def test_a_process_that_dies_is_replaced_and_its_part_run_again(parts: list[PartInput], tmp_path: Path) -> None:
    found, failures = run(parts, Processes(2), DiesOnce(MIDDLE, tmp_path))
    plain, _ = run(parts, InPlace(), Fails("none"))
    assert failures == [Failure(MIDDLE, "its process died", True, "cbc")]
    assert {name: output.written for name, output in found.items()} == {n: o.written for n, o in plain.items()}


def in_time(what: Callable[[], object]) -> bool:
    """Whether something ends within a minute."""
    doing = threading.Thread(target=what, daemon=True)
    doing.start()
    doing.join(60)
    return not doing.is_alive()


def test_a_process_that_dies_in_the_middle_of_its_answer_is_not_waited_for() -> None:
    workers = Processes(1)
    future = workers.submit(half_an_answer, False)
    with pytest.raises(BrokenProcessPool):
        future.result(timeout=60)
    assert in_time(workers.close)


def test_a_process_that_hangs_in_the_middle_of_its_answer_can_be_ended() -> None:
    workers = Processes(1)
    future = workers.submit(half_an_answer, True)
    with pytest.raises(TimeoutError):
        future.result(timeout=5)
    assert in_time(lambda: workers.end(future))
    assert workers.submit(length, b"abc").result(timeout=60) == 3
    assert in_time(workers.close)


def test_nobody_goes_on_sending_a_part_to_a_process_that_was_killed() -> None:
    before = set(threading.enumerate())
    workers = Processes(1)
    assert workers.submit(length, b"abc").result(timeout=60) == 3
    stopped = workers.submit(stop_and_be_killed, 2.0)
    pool = workers._pools[0]
    assert pool is not None
    longer_than_a_pipe = pool.submit(length, bytes(10_000_000))
    for future in (stopped, longer_than_a_pipe):
        with pytest.raises(BrokenProcessPool):
            future.result(timeout=60)
    assert in_time(workers.close)
    left = [thread for thread in threading.enumerate() if thread not in before]
    for thread in left:
        thread.join(10)
    assert not any(thread.is_alive() for thread in left)


def test_a_solver_whose_process_was_killed_is_ended_too(parts: list[PartInput], tmp_path: Path) -> None:
    note = tmp_path / "solver"
    found, failures = run(parts, Processes(1), LosesItsWorker(note))
    assert sorted(found) == ALL
    assert [failure.problem for failure in failures] == ["its process died"]
    stat = Path(f"/proc/{note.read_text()}/stat")
    ended = time.monotonic() + 30
    while stat.exists() and stat.read_text().rpartition(")")[2].split()[0] != "Z" and time.monotonic() < ended:
        time.sleep(0.02)
    assert time.monotonic() < ended


def test_a_part_that_kills_every_process_stops_the_night_by_name(parts: list[PartInput], tmp_path: Path) -> None:
    with pytest.raises(SolverStoppedError, match=f"part {MIDDLE}: its process died twice"):
        run(parts, Processes(1), DiesOnce(MIDDLE, tmp_path, always=True))


def test_a_solver_that_hangs_is_ended_and_the_other_takes_its_part(parts: list[PartInput]) -> None:
    workers = Processes(2)
    for begun in [workers.submit(run_part, part) for part in parts[:2]]:
        begun.result()  # what a process does for the first time takes longer
    found, failures = run(parts, workers, Hangs(MIDDLE, "cbc"), seconds=6.0)
    assert sorted(found) == ALL
    assert solver(found[MIDDLE]) == "highs"
    assert failures == [Failure(MIDDLE, "took more than 6 s", True, "highs")]


class Sluggish(InPlace):
    """Workers that never finish a part, and say whether one of them has it yet."""

    def submit(self, task: Any, part: PartInput) -> Any:
        self.worked.append(part.name)
        return super().submit(lambda _: None, part).__class__()

    def end(self, future: Any) -> None:
        self.ended = [*getattr(self, "ended", []), future]


def test_a_part_that_hangs_with_both_solvers_stops_the_night_by_name(parts: list[PartInput]) -> None:
    workers = Sluggish()
    with pytest.raises(SolverStoppedError, match=f"part {ALL[0]}: took more than 0.01 s with either solver"):
        run(parts[:1], workers, Fails("none"), seconds=0.01)
    assert len(workers.ended) == 2


def test_no_more_parts_are_drawn_than_there_are_workers(parts: list[PartInput]) -> None:
    drawn: list[str] = []

    def drawing() -> Any:
        for part in [replace(parts[0], name=f"part {n}") for n in range(6)]:
            drawn.append(part.name)
            yield part

    running = run_parts(drawing(), InPlace(most=2), Fails("none"), 60.0, lambda failure: None)
    next(running)
    assert len(drawn) <= 2
    running.close()
