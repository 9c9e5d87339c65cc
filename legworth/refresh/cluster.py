"""Workers of a Dask cluster.

Parts travel as bytes with their task, so that the scheduler can give a part to another worker when one dies: no disk is
shared. Results come back as bytes too.
"""

from __future__ import annotations

import pickle
import time
import uuid
from concurrent.futures import Future
from concurrent.futures.process import BrokenProcessPool
from importlib import import_module
from pathlib import Path
from typing import Any

from legworth.refresh.fingerprints import code_fingerprint
from legworth.refresh.part_exchange import PartInput, PartOutput
from legworth.refresh.running import PartTask
from network import SettingError

__all__ = ["Cluster"]

PATIENCE = 30.0
"""Seconds within which a scheduler must answer and a first worker must be there."""

GLANCE = 0.5
"""Seconds for which it is taken as known which worker has which part."""

LARGE_PART = "1 GB"
"""Size of a part from which on Dask remarks on it; parts are meant to travel."""


class Cluster:
    """The workers of a Dask scheduler.

    Parameters
    ----------
    address
        Address of the scheduler, such as ``tcp://host:8786``, or the path of its scheduler file.
    patience
        Seconds within which the scheduler must answer and a first worker must be there.

    Raises
    ------
    SettingError
        If the library is not installed, nobody answers, or there is no worker.
    """

    def __init__(self, address: str, patience: float = PATIENCE) -> None:
        try:
            dask, distributed = import_module("dask"), import_module("distributed")
        except ImportError:
            raise SettingError(
                "--cluster needs the library distributed; install it with: pip install 'legworth[cluster]'"
            ) from None
        self._address = address
        self._remote: dict[Future[PartOutput], Any] = {}
        self._looked, self._at_work = 0.0, dict[str, tuple[str, ...]]()
        self._settings = dask.config.set({"distributed.admin.large-graph-warning-threshold": LARGE_PART})
        where: dict[str, Any] = {"scheduler_file": address} if Path(address).is_file() else {"address": address}
        try:
            self._client = distributed.Client(**where, timeout=patience, set_as_default=False)
        except (OSError, ValueError, TypeError) as error:
            raise SettingError(f"no Dask scheduler answers at {address} ({error}); start one, or correct it") from error
        try:
            self._client.wait_for_workers(1, timeout=patience)
        except TimeoutError:
            self._client.close()
            raise SettingError(f"the scheduler at {address} has no worker; start some") from None

    def capacity(self) -> int:
        """Threads of all workers now."""
        return max(1, int(sum(self._client.nthreads().values())))

    def submit(self, task: PartTask, part: PartInput) -> Future[PartOutput]:
        """Give a part to the scheduler."""
        data = pickle.dumps(part, protocol=pickle.HIGHEST_PROTOCOL)
        remote = self._client.submit(run_packed, task, data, key=f"{part.name}-{uuid.uuid4().hex}", pure=False)
        local: Future[PartOutput] = Future()
        self._remote[local] = remote
        remote.add_done_callback(lambda done: _settle(done, local, self._address))
        return local

    def waiting(self, future: Future[PartOutput]) -> bool:
        """Whether more parts are with the worker than it has threads, or none has it yet."""
        if time.monotonic() - self._looked > GLANCE:
            self._at_work, self._looked = dict(self._client.processing()), time.monotonic()
        worker = self._worker(future)
        return worker is None or len(self._at_work[worker]) > self._client.nthreads().get(worker, 1)

    def end(self, future: Future[PartOutput]) -> None:
        """Give a part up and restart the worker that has it; whatever else it had goes to others."""
        worker = self._worker(future)
        self._remote.pop(future).cancel(force=True)
        if worker is not None:
            self._client.restart_workers([worker], raise_for_error=False)

    def close(self) -> None:
        """Give up what is in flight and leave; the cluster goes on."""
        for remote in self._remote.values():
            remote.cancel(force=True)
        self._remote.clear()
        self._client.close()
        self._settings.__exit__(None, None, None)

    def _worker(self, future: Future[PartOutput]) -> str | None:
        key = self._remote[future].key
        return next((worker for worker, keys in self._at_work.items() if key in keys), None)


def run_packed(task: PartTask, data: bytes) -> PartOutput:
    """Run a task on a part that has travelled as bytes."""
    return task(pickle.loads(data))


def _settle(remote: Any, local: Future[PartOutput], address: str) -> None:
    """Hand the outcome of a remote part to whoever waits for it here."""
    if remote.cancelled() and remote.status != "lost":
        local.set_exception(BrokenProcessPool("given up by the scheduler"))
        return
    try:
        output = remote.result()
    except Exception as error:
        died = type(error).__name__ == "KilledWorker"
        local.set_exception(BrokenProcessPool(str(error)) if died else error)
        return
    if output.code != code_fingerprint():
        local.set_exception(
            SettingError(
                f"a worker of {address} runs another state of this program; give all the same and refresh again"
            )
        )
        return
    local.set_result(output)
