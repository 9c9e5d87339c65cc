"""Workers that are processes of this machine, one pool of one process each.

A pool of several processes breaks as a whole when one dies, and does not tell which part killed it. With a pool for
each process exactly one part fails, and a process that hangs can be ended, with the solver that it started, without
touching the others.
"""

from __future__ import annotations

import os
import signal
import threading
import time
from collections.abc import Callable
from concurrent.futures import Future
from contextlib import suppress
from importlib import import_module
from pathlib import Path
from typing import Any, TypeVar

from joblib.externals.loky import process_executor
from joblib.externals.loky.backend.utils import kill_process_tree
from joblib.externals.loky.process_executor import ProcessPoolExecutor

__all__ = ["Processes"]

Given = TypeVar("Given")
Answer = TypeVar("Answer")

ONE_THREAD = dict.fromkeys(("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "BLIS_NUM_THREADS"), "1")
"""Environment of a worker: its parts are worked on side by side, so within a part everything runs in one thread."""

GLANCE = 0.5
"""Seconds after which a worker looks whether its parent is still there."""


class Processes:
    """Processes of this machine.

    Parameters
    ----------
    count
        How many.
    scratch
        Folder for temporary files of workers and solvers; that of the system if None.
    """

    def __init__(self, count: int, scratch: Path | None = None) -> None:
        temporary = {} if scratch is None else dict.fromkeys(("TMPDIR", "TMP", "TEMP"), str(scratch))
        self._environment = {**ONE_THREAD, **temporary}
        self._pools: list[ProcessPoolExecutor | None] = [None] * count
        self._loaded: list[Future[None] | None] = [None] * count
        self._groups: list[tuple[int, ...]] = [()] * count
        self._place: dict[Future[Any], int] = {}

    def capacity(self) -> int:
        """Number of processes."""
        return len(self._pools)

    def submit(self, task: Callable[[Given], Answer], part: Given) -> Future[Answer]:
        """Give a part to a process that is free, if there is a choice to one that has worked already."""
        self._release()
        free = sorted(set(range(len(self._pools))) - set(self._place.values()))
        place = next((place for place in free if self._pools[place] is not None), free[0])
        pool = self._pools[place]
        if pool is None:
            pool = self._pools[place] = ProcessPoolExecutor(
                max_workers=1, env=self._environment, initializer=_outlive_nobody, initargs=(os.getpid(),)
            )
            self._loaded[place] = pool.submit(_load)
            self._groups[place] = tuple(pool._processes)
            _leave_to_the_worker(pool)
        future: Future[Answer] = pool.submit(task, part)
        self._place[future] = place
        return future

    def waiting(self, future: Future[Any]) -> bool:
        """Whether the process of a part is still loading libraries."""
        loaded = self._loaded[self._place[future]]
        return loaded is not None and not loaded.done()

    def end(self, future: Future[Any]) -> None:
        """Kill the process of a part, and the solver that it runs."""
        self._drop(self._place.pop(future))

    def close(self) -> None:
        """Kill all processes."""
        for place in range(len(self._pools)):
            self._drop(place)
        self._place.clear()

    def _release(self) -> None:
        """Note which processes are done with their part, and give up those that died on it."""
        for future in [future for future in self._place if future.done()]:
            place = self._place.pop(future)
            if future.exception() is not None:
                self._drop(place)

    def _drop(self, place: int) -> None:
        """Kill the process at a place and the solver that it runs, or left behind when it was killed itself.

        Processes go first: a pool reads the answer that it is being sent to the end before it looks at anything else.
        """
        pool, group = self._pools[place], self._groups[place]
        self._pools[place], self._loaded[place], self._groups[place] = None, None, ()
        if pool is None:
            return
        for process in list(pool._processes.values()):
            kill_process_tree(process)
        if hasattr(os, "killpg"):
            for leader in group:
                with suppress(ProcessLookupError):
                    os.killpg(leader, signal.SIGKILL)
        pool.shutdown(wait=True, kill_workers=True)


def _leave_to_the_worker(pool: ProcessPoolExecutor) -> None:
    """Close this process's copies of the ends that are the worker's, which has its own by now.

    As long as they are open, a worker that is killed in the middle of an answer leaves its reader here waiting for the
    rest for ever, since there is still somebody who could write it; likewise whoever is sending it a part.
    """
    pool._result_queue._writer.close()
    pool._call_queue._reader.close()


def _outlive_nobody(parent: int) -> None:
    """End this worker and the solver that it runs once its parent is gone, however the parent ended.

    The worker leads a process group of its own, so that its solver goes with it, and so that an interrupt on the
    terminal reaches the parent alone, which ends its workers in order.
    """
    if hasattr(os, "setpgrp"):
        os.setpgrp()
    # The pool would replace a process that has grown, and cannot: see _leave_to_the_worker.
    process_executor._MAX_MEMORY_LEAK_SIZE = float("inf")

    def watch() -> None:
        while os.getppid() == parent:
            time.sleep(GLANCE)
        if hasattr(os, "killpg"):
            os.killpg(os.getpgrp(), signal.SIGKILL)
        os._exit(1)

    threading.Thread(target=watch, daemon=True).start()


def _load() -> None:
    """Load what pricing a part needs."""
    import_module("legworth.refresh.tasks")
