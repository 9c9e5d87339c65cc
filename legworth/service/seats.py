"""The seats left on every leg as last known here: read by answers, never by sales, which ask the ledger itself."""

from __future__ import annotations

import threading
from collections.abc import Iterable

from legworth.service.ledger import Ledger
from legworth.service.orders import SeatCount

__all__ = ["SeatsLeft"]


class SeatsLeft:
    """Seats left by leg, kept in step with the ledger.

    It is exact for the orders of this service as soon as they are answered; those of other services on the same
    ledger are known after the next `catch_up`.

    Parameters
    ----------
    ledger
        Where the counts live.
    """

    def __init__(self, ledger: Ledger) -> None:
        self._ledger = ledger
        self._guard = threading.Lock()
        self._noted: set[str] = set()
        self.counts: dict[str, SeatCount] = {}
        self.left: dict[str, int] = {}
        # What is read between two looks is read again at the next: a row may come later than one of a higher number.
        self._before = self._last = ledger.progress()
        self.note(ledger.counts().values())

    def catch_up(self) -> None:
        """Take over what other services have written.

        Raises
        ------
        LedgerError
            If the ledger cannot be read.
        """
        now = self._ledger.progress()
        if now != self._before:
            legs = self._ledger.moved_legs(self._before)
            self._refresh(legs)
        self._before, self._last = self._last, now

    def add(self, counts: Iterable[SeatCount]) -> None:
        """Add the legs of a new night that the ledger does not know yet; those that it knows keep their counts."""
        fresh = [count for count in counts if count.leg not in self.counts]
        if fresh:
            self._ledger.add_legs(fresh)
            self._refresh({count.leg for count in fresh})

    def note(self, counts: Iterable[SeatCount]) -> None:
        """Take over counts as they now stand in the ledger."""
        with self._guard:
            for count in counts:
                self._noted.add(count.leg)
                self._take(count)

    def _refresh(self, legs: set[str]) -> None:
        """Read the counts of some legs; what `note` is told meanwhile is newer, and stays."""
        with self._guard:
            self._noted.clear()
        found = self._ledger.counts(legs)
        with self._guard:
            for leg, count in found.items():
                if leg not in self._noted:
                    self._take(count)

    def _take(self, count: SeatCount) -> None:
        self.counts[count.leg] = count
        self.left[count.leg] = count.remaining
