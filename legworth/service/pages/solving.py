"""Questions that need a solve: asked for on purpose, worked on one at a time beside the service, kept for a while."""

from __future__ import annotations

import threading
from collections import OrderedDict
from collections.abc import Callable, Hashable
from concurrent.futures import Future, ThreadPoolExecutor
from time import monotonic
from typing import Any

from legworth.store import Manifest
from lp import LpOptions, Method, SolverOptions
from lp.columns import TAIL
from network.errors import LegworthError

__all__ = ["PATIENCE", "Solver", "SolvesWaitError", "exact_program"]

PATIENCE = 1.5
"""Seconds that a page waits for a solve before it says so; it then looks again by itself."""

KEPT = 64
KEPT_SECONDS = 120.0
MOST_WAITING = 8


class SolvesWaitError(LegworthError):
    """Too many solves wait already."""

    http_status = 503


class Solver:
    """Carries solves out in a thread, and keeps their answers for two minutes.

    The same question asked again while it is worked on, or soon after, is one solve.
    """

    def __init__(self) -> None:
        self._thread = ThreadPoolExecutor(1, thread_name_prefix="planner-solve")
        self._jobs: OrderedDict[Hashable, tuple[Future[Any], float]] = OrderedDict()
        self._lock = threading.Lock()

    def close(self) -> None:
        """Take no more questions, and drop those that wait."""
        self._thread.shutdown(wait=False, cancel_futures=True)

    def ask(self, key: Hashable, work: Callable[[], Any]) -> Future[Any]:
        """Ask a question, or take the answer that is there.

        Raises
        ------
        SolvesWaitError
            If too many others wait.
        """
        with self._lock:
            now = monotonic()
            known = self._jobs.get(key)
            if known is not None and (not known[0].done() or now - known[1] < KEPT_SECONDS):
                return known[0]
            if sum(not job.done() for job, _ in self._jobs.values()) >= MOST_WAITING:
                raise SolvesWaitError("too many questions wait for a solve; ask again in a minute")
            future = self._thread.submit(work)
            self._jobs[key] = (future, now)
            self._jobs.move_to_end(key)
            while len(self._jobs) > KEPT:
                self._jobs.popitem(last=False)
            return future


def exact_program(manifest: Manifest) -> tuple[LpOptions, str]:
    """Return the program that gives exact values for a night, and a remark if another one priced it."""
    said = {name: value for name, value in manifest.settings.items() if value is not None}
    method = Method(said.get("method", Method.PROBABILISTIC))
    note = ""
    if method is Method.RANDOMISED:
        method = Method.PROBABILISTIC
        note = (
            "The night was priced by the randomised program, which has no exact values; "
            "these are those of the probabilistic program."
        )
    solver = SolverOptions(name=said.get("solver", "cbc"))
    return LpOptions(method=method, solver=solver, tail=said.get("tail", TAIL)), note
