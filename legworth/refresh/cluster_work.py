"""What a worker of a cluster does with a part: gives it to a process of its own, and can end that process.

Each thread of a worker has a process, which prices one part after another. So a part that hangs is ended, with the
solver that it runs, while the worker, its other parts and whatever else the cluster does go on; a part that takes
all memory ends its own process and not the worker, so that no scheduler gives it to one worker after another; and what
a process leaves among temporary files goes with the folder of the worker.
"""

from __future__ import annotations

import multiprocessing
import pickle
import threading
from concurrent.futures import Future, wait
from importlib import import_module
from multiprocessing.util import Finalize
from pathlib import Path
from typing import Any

from legworth.refresh.part_exchange import PartOutput
from legworth.refresh.processes import Processes
from legworth.refresh.running import PartTask

__all__ = ["end_part", "run_part_apart"]

GLANCE = 0.5
"""Seconds after which a thread looks whether its worker is closing."""

GONE = ("closing", "closed", "stopping", "stopped", "failed")
"""States of a worker that is about to end."""

_lock = threading.Lock()
_free: list[Processes] = []
_busy: dict[str, tuple[Processes, Future[PartOutput]]] = {}


def run_part_apart(name: str, topic: str, task: PartTask, data: bytes) -> PartOutput:
    """Run a task, in a process of its own, on a part that has travelled as bytes.

    Parameters
    ----------
    name
        Key of the task, under which `end_part` finds it.
    topic
        Topic of events, on which name and worker are told once the process has loaded its libraries.
    task, data
        The task, and the pickled part.

    Raises
    ------
    BrokenProcessPool
        If the process died or was ended, or nobody waits for it any more.
    """
    worker = import_module("distributed").get_worker()
    with _lock:
        processes = _free.pop() if _free else Processes(1, Path(worker.local_directory))
        try:
            future = _begun(processes, task, data)
        except BaseException:
            processes.close()
            raise
        _busy[name] = processes, future
    told = False
    try:
        while not wait([future], GLANCE).done:
            if worker.status.name in GONE or not _wanted(worker, name):
                end_part(name)
                break
            if not told and not _loading(name):
                worker.log_event(topic, {"part": name, "worker": worker.address})
                told = True
        return future.result()
    finally:
        with _lock:
            _free.append(_busy.pop(name)[0])


def end_part(name: str) -> bool:
    """End the process that works on a part; False if no process of this worker does."""
    with _lock:
        found = _busy.get(name)
        if found is None or found[1].done():
            return False
        processes, future = found
        processes.end(future)
        return True


def _loading(name: str) -> bool:
    with _lock:
        processes, future = _busy[name]
        return not future.done() and processes.waiting(future)


def _wanted(worker: Any, name: str) -> bool:
    """Whether the scheduler still waits for a task; it does not once the night that gave it was killed."""
    found = worker.state.tasks.get(name)
    return found is not None and found.state != "cancelled"


def _close_all() -> None:
    """End all processes."""
    for processes in [*_free, *(busy for busy, _ in _busy.values())]:
        processes.close()


# A worker under a nanny waits for its processes as it ends, before it would tell them to.
Finalize(None, _close_all, exitpriority=100)


def _begun(processes: Processes, task: PartTask, data: bytes) -> Future[PartOutput]:
    """Begin a task. A worker under a nanny may start no process by itself, lest they stay behind; ours never do."""
    worker = multiprocessing.current_process()
    daemon = worker.daemon
    worker.daemon = False
    try:
        return processes.submit(_Unpacked(task), data)
    finally:
        worker.daemon = daemon


class _Unpacked:
    """A task on a part that is still packed."""

    def __init__(self, task: PartTask) -> None:
        self._task = task

    def __call__(self, data: bytes) -> Any:
        return self._task(pickle.loads(data))
