"""Workers of a Dask cluster.

Parts travel as bytes with their task, so that the scheduler can give a part to another worker when one is lost: no disk
is shared. Results come back as bytes too, and are forgotten by the cluster once they are here.
"""

from __future__ import annotations

import pickle
import threading
import time
import uuid
from collections.abc import Callable
from concurrent.futures import Future
from concurrent.futures.process import BrokenProcessPool
from contextlib import suppress
from importlib import import_module
from pathlib import Path
from typing import Any

from legworth.refresh.cluster_work import end_part, run_part_apart
from legworth.refresh.fingerprints import code_fingerprint
from legworth.refresh.part_exchange import PartInput, PartOutput
from legworth.refresh.running import PartTask
from network import SettingError

__all__ = ["Cluster"]

PATIENCE = 30.0
"""Seconds within which a scheduler must answer and a first worker must be there."""

WITHOUT_WORKERS = 120.0
"""Seconds for which a cluster may be without any worker; whoever looks after workers needs some to replace them."""

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
        Seconds within which the scheduler must answer, then and later, and a first worker must be there.
    without_workers
        Seconds for which there may be no worker later.

    Raises
    ------
    SettingError
        If the library is not installed, nobody answers, or there is no worker; the same from `capacity`, `submit` and
        `waiting` once the scheduler or all its workers have gone.
    """

    def __init__(self, address: str, patience: float = PATIENCE, without_workers: float = WITHOUT_WORKERS) -> None:
        try:
            dask, distributed = import_module("dask"), import_module("distributed")
        except ImportError:
            raise SettingError(
                "--cluster needs the library distributed; install it with: pip install 'legworth[cluster]'"
            ) from None
        self._address, self._patience, self._without_workers = address, patience, without_workers
        self._remote: dict[Future[PartOutput], Any] = {}
        self._threads, self._at_work = dict[str, int](), dict[str, tuple[str, ...]]()
        self._begun: dict[str, str] = {}
        self._looked, self._manned, self._topic = 0.0, time.monotonic(), f"legworth-{uuid.uuid4().hex}"
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
        self._client.subscribe_topic(self._topic, self._note)
        self._settings = dask.config.set({"distributed.admin.large-graph-warning-threshold": LARGE_PART})

    def capacity(self) -> int:
        """Threads of all workers now."""
        self._look()
        return max(1, sum(self._threads.values()))

    def submit(self, task: PartTask, part: PartInput) -> Future[PartOutput]:
        """Give a part to the scheduler."""
        self._await_scheduler()
        data = pickle.dumps(part, protocol=pickle.HIGHEST_PROTOCOL)
        key = f"{part.name}-{uuid.uuid4().hex}"
        remote = self._client.submit(run_part_apart, key, self._topic, task, data, key=key, pure=False)
        local: Future[PartOutput] = Future()
        self._remote[local] = remote

        def done(_: object) -> None:
            # In a thread of its own: fetching an answer again whose worker is lost must not hold up the others.
            threading.Thread(target=self._settle, args=(remote, local), daemon=True).start()

        remote.add_done_callback(done)
        return local

    def waiting(self, future: Future[PartOutput]) -> bool:
        """Whether no worker has told yet that it has begun, or the one that did has lost the part since."""
        self._look()
        remote = self._remote.get(future)
        return remote is not None and self._worker_on(remote.key) is None

    def end(self, future: Future[PartOutput]) -> None:
        """Give a part up and end its process; a worker that does not answer is restarted or sent away."""
        remote = self._remote.pop(future, None)
        if remote is None:
            return
        self._look()
        worker = self._worker_on(remote.key)
        ended = worker is None or self._ended(remote.key, [worker]) or remote.done()
        remote.cancel(force=True)
        if not ended:
            # Not by `Client.restart_workers`, which refuses workers that nobody would start again.
            how = {"wait_for_workers": False, "on_error": "return", "stimulus_id": f"end-{remote.key}"}
            with suppress(OSError, TimeoutError):
                self._ask(self._client.scheduler.restart_workers, workers=[worker], **how)

    def close(self) -> None:
        """Give up what is in flight and leave; the cluster goes on."""
        left = list(self._remote.values())
        self._remote.clear()
        with suppress(OSError, TimeoutError):
            if self._client.status == "running":
                self._ask(self._client.cancel, [remote for remote in left if not remote.done()], force=True)
            self._client.close(timeout=self._patience)
        self._settings.__exit__(None, None, None)

    def _settle(self, remote: Any, local: Future[PartOutput]) -> None:
        """Hand the outcome of a remote part to whoever waits for it here."""
        error: Exception | None = None
        output = None
        try:
            output = remote.result()
        except Exception as raised:
            lost = remote.cancelled() or type(raised).__name__ == "KilledWorker"
            error = BrokenProcessPool(str(raised)) if lost else raised
        if output is not None and output.code != code_fingerprint():
            error = SettingError(
                f"a worker of {self._address} runs another state of this program; give all the same and refresh again"
            )
        if error is not None:
            local.set_exception(error)
        elif output is not None:
            local.set_result(output)
        self._remote.pop(local, None)

    def _look(self) -> None:
        """Look which workers there are and what they have, if that was long ago.

        Raises
        ------
        SettingError
            If the scheduler does not answer, or has been without workers for too long.
        """
        if time.monotonic() - self._looked <= GLANCE:
            return
        self._await_scheduler()
        try:
            self._at_work, self._threads = self._ask(self._client.processing), self._ask(self._client.nthreads)
        except (OSError, TimeoutError) as error:
            raise self._gone() from error
        self._looked = time.monotonic()
        if self._threads:
            self._manned = self._looked
        elif self._looked - self._manned > self._without_workers:
            raise SettingError(
                f"the scheduler at {self._address} has lost its last worker, and for {self._without_workers:g} s "
                "no other has come; start some and refresh again"
            )

    def _await_scheduler(self) -> None:
        """Wait while the client tries to find its scheduler again; SettingError if it cannot."""
        # The client gives up by itself too, but may be much longer about it.
        most = time.monotonic() + self._patience
        while self._client.status == "connecting" and time.monotonic() < most:
            time.sleep(0.05)
        if self._client.status != "running":
            raise self._gone()

    def _gone(self) -> SettingError:
        return SettingError(
            f"the scheduler at {self._address} has stopped answering; see whether it still runs, and refresh again"
        )

    def _ask(self, question: Callable[..., Any], *of: Any, **how: Any) -> Any:
        """Ask something of the scheduler; TimeoutError or OSError if it does not answer."""
        return self._client.sync(question, *of, callback_timeout=self._patience, **how)

    def _ended(self, key: str, workers: list[str]) -> bool:
        """Have the process of a part ended on its worker; False if it cannot be asked, or has no such process."""
        try:
            return any(self._ask(self._client.run, end_part, key, workers=workers, on_error="ignore").values())
        except (OSError, TimeoutError):
            return False

    def _note(self, event: tuple[float, dict[str, str]]) -> None:
        """Note which worker has begun with a part."""
        self._begun[event[1]["part"]] = event[1]["worker"]

    def _worker_on(self, key: str) -> str | None:
        """Worker that has begun with a part and still has it."""
        worker = self._begun.get(key)
        return worker if worker is not None and key in self._at_work.get(worker, ()) else None
