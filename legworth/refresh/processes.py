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
        self._loaded: list[Future[int] | None] = [None] * count
        self._gone = [False] * count
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
            _only_the_worker_writes(pool)
        future: Future[Answer] = pool.submit(task, part)
        self._place[future] = place
        return future

    def waiting(self, future: Future[Any]) -> bool:
        """Whether the process of a part is still loading libraries; looks after processes that died as well."""
        place = self._place[future]
        self._bury(place)
        loaded = self._loaded[place]
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

    def _bury(self, place: int) -> None:
        """Let a pool know that its process is gone.

        It listens for the rest of a result for ever if its process was killed while it sent one, since it holds the
        sending end as well. A process must be gone at two looks: the pool may be about to notice by itself.
        """
        pool = self._pools[place]
        gone = pool is not None and not any(process.is_alive() for process in list(pool._processes.values()))
        if pool is not None and gone and self._gone[place]:
            pool._result_queue._writer.close()
        self._gone[place] = gone

    def _drop(self, place: int) -> None:
        pool, loaded = self._pools[place], self._loaded[place]
        self._pools[place] = self._loaded[place] = None
        self._gone[place] = False
        if pool is None:
            return
        pool._result_queue._writer.close()  # see _bury
        pool.shutdown(wait=True, kill_workers=True)
        if hasattr(os, "killpg") and loaded is not None and loaded.done() and loaded.exception() is None:
            # A process that was killed leaves the solver that it ran behind, alone in its group.
            with suppress(ProcessLookupError):
                os.killpg(loaded.result(), signal.SIGKILL)


def _only_the_worker_writes(pool: ProcessPoolExecutor) -> None:
    """Close this process's own end for writing results, which the worker has by now.

    As long as it is open, a worker that is killed in the middle of an answer leaves the reader waiting for the rest
    for ever, since there is still somebody who could write it.
    """
    pool._result_queue._writer.close()


def _outlive_nobody(parent: int) -> None:
    """End this worker and the solver that it runs once its parent is gone, however the parent ended.

    The worker leads a process group of its own, so that its solver goes with it, and so that an interrupt on the
    terminal reaches the parent alone, which ends its workers in order.
    """
    if hasattr(os, "setpgrp"):
        os.setpgrp()
    # The pool would replace a process that has grown, and cannot: see _only_the_worker_writes.
    process_executor._MAX_MEMORY_LEAK_SIZE = float("inf")

    def watch() -> None:
        while os.getppid() == parent:
            time.sleep(GLANCE)
        if hasattr(os, "killpg"):
            os.killpg(os.getpgrp(), signal.SIGKILL)
        os._exit(1)

    threading.Thread(target=watch, daemon=True).start()


def _load() -> int:
    """Load what pricing a part needs; return the process, which is its process group too."""
    import_module("legworth.refresh.tasks")
    return os.getpid()
