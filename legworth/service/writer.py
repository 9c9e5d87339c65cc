"""One thread that writes the ledger: orders that wait together share one transaction, and so one write to the disk."""

from __future__ import annotations

import queue
import threading
from collections.abc import Callable, Sequence
from concurrent.futures import Future
from typing import Any

from legworth.service.errors import LedgerError
from legworth.service.ledger import Ledger
from legworth.service.orders import Order, Outcome, Overwriting, SeatCount

__all__ = ["LedgerWriter"]

MOST_TOGETHER = 256
"""Orders in one transaction at most, so that none waits long."""

_Waiting = tuple[Order | Overwriting, "Future[Any]"]


class LedgerWriter:
    """Carries out orders from many threads, in the order in which they come.

    Parameters
    ----------
    ledger
        Where they are carried out.
    most_waiting
        Orders that may wait; further ones are turned away at once.
    written
        Called, in the order of the transactions, with the counts that each has moved, before its orders are answered.
    """

    def __init__(
        self,
        ledger: Ledger,
        most_waiting: int = 10_000,
        written: Callable[[Sequence[SeatCount]], None] = lambda counts: None,
    ) -> None:
        self._ledger = ledger
        self._written = written
        self._waiting: queue.Queue[_Waiting | None] = queue.Queue(most_waiting)
        self._closing = threading.Lock()
        self._closed = False
        self._thread = threading.Thread(target=self._write, name="ledger", daemon=True)
        self._thread.start()

    @property
    def waiting(self) -> int:
        """Orders that wait, about."""
        return self._waiting.qsize()

    def submit(self, order: Order) -> Future[Outcome]:
        """Hand an order in; the future holds its outcome once that is on the disk, or the error.

        Raises
        ------
        LedgerError
            If too many orders wait already, or the writer is closed.
        """
        return self._enter(order)

    def overwrite(self, order: Overwriting) -> Future[list[SeatCount]]:
        """Hand counts in; the future holds those that moved, once they are on the disk; raises as `submit` does."""
        return self._enter(order)

    def _enter(self, order: Order | Overwriting) -> Future[Any]:
        answer: Future[Any] = Future()
        with self._closing:
            if self._closed:
                raise LedgerError("the service is stopping; send the order again under the same key")
            try:
                self._waiting.put_nowait((order, answer))
            except queue.Full as error:
                raise LedgerError("too many orders wait; send the order again under the same key") from error
        return answer

    def close(self) -> None:
        """Carry out what waits, then stop."""
        with self._closing:
            if self._closed:
                return
            self._closed = True
        self._waiting.put(None)
        self._thread.join()

    def _write(self) -> None:
        while (first := self._waiting.get()) is not None:
            together = [first]
            last = False
            while len(together) < MOST_TOGETHER and not self._waiting.empty():
                following = self._waiting.get()
                if following is None:
                    last = True
                    break
                together.append(following)
            self._carry_out(together)
            if last:
                return

    def _carry_out(self, together: list[_Waiting]) -> None:
        """Carry out orders in runs between the overwritings."""
        run: list[tuple[Order, Future[Any]]] = []
        for order, answer in together:
            if not answer.set_running_or_notify_cancel():
                continue
            if isinstance(order, Overwriting):
                self._finish(run)
                run = []
                self._overwrite(order, answer)
            else:
                run.append((order, answer))
        self._finish(run)

    def _overwrite(self, order: Overwriting, answer: Future[Any]) -> None:
        try:
            moved = self._ledger.overwrite(order.counts, order.who, order.why)
            self._written(moved)
            answer.set_result(moved)
        except Exception as error:  # whoever waits must hear of it, and the thread must live on
            answer.set_exception(error)

    def _finish(self, run: Sequence[tuple[Order, Future[Any]]]) -> None:
        if not run:
            return
        try:
            carried = self._ledger.carry_out([order for order, _ in run])
            self._written(carried.counts)
        except Exception as error:  # whoever waits must hear of it, and the thread must live on
            for _, answer in run:
                answer.set_exception(error)
            return
        for (_, answer), outcome in zip(run, carried.outcomes, strict=True):
            if isinstance(outcome, Exception):
                answer.set_exception(outcome)
            else:
                answer.set_result(outcome)
