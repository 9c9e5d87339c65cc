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
from concurrent.futures import Future
from importlib import import_module

from joblib.externals.loky.process_executor import ProcessPoolExecutor

from legworth.refresh.part_exchange import PartInput, PartOutput
from legworth.refresh.running import PartTask

__all__ = ["Processes"]

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
    """

    def __init__(self, count: int) -> None:
        self._pools: list[ProcessPoolExecutor | None] = [None] * count
        self._loaded: list[Future[None] | None] = [None] * count
        self._place: dict[Future[PartOutput], int] = {}

    def capacity(self) -> int:
        """Number of processes."""
        return len(self._pools)

    def submit(self, task: PartTask, part: PartInput) -> Future[PartOutput]:
        """Give a part to a process that is free, if there is a choice to one that has worked already."""
        self._release()
        free = sorted(set(range(len(self._pools))) - set(self._place.values()))
        place = next((place for place in free if self._pools[place] is not None), free[0])
        pool = self._pools[place]
        if pool is None:
            pool = self._pools[place] = ProcessPoolExecutor(
                max_workers=1, env=ONE_THREAD, initializer=_outlive_nobody, initargs=(os.getpid(),)
            )
            self._loaded[place] = pool.submit(_load)
        future: Future[PartOutput] = pool.submit(task, part)
        self._place[future] = place
        return future

    def waiting(self, future: Future[PartOutput]) -> bool:
        """Whether the process of a part is still loading libraries."""
        loaded = self._loaded[self._place[future]]
        return loaded is not None and not loaded.done()

    def end(self, future: Future[PartOutput]) -> None:
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
        pool = self._pools[place]
        self._pools[place] = None
        if pool is not None:
            pool.shutdown(wait=True, kill_workers=True)


def _outlive_nobody(parent: int) -> None:
    """End this worker and the solver that it runs once its parent is gone, however the parent ended.

    The worker leads a process group of its own, so that its solver goes with it, and so that an interrupt on the
    terminal reaches the parent alone, which ends its workers in order.
    """
    if hasattr(os, "setpgrp"):
        os.setpgrp()

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
