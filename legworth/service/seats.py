"""The seats left on every leg as last known here: read by answers, never by sales, which ask the ledger itself."""

from __future__ import annotations

from collections.abc import Iterable

from legworth.service.ledger import Ledger
from legworth.service.orders import SeatCount

__all__ = ["SeatsLeft"]


class SeatsLeft:
    """Seats left by leg, kept in step with the ledger.

    With one service on a ledger it is exact after every order; where several share one it lags by the time
    between two looks at the ledger.

    Parameters
    ----------
    ledger
        Where the counts live.
    """

    def __init__(self, ledger: Ledger) -> None:
        self._ledger = ledger
        self.counts: dict[str, SeatCount] = {}
        self.left: dict[str, int] = {}
        self.reload()

    def reload(self) -> None:
        """Read all counts again."""
        self.note(self._ledger.counts().values())

    def add(self, counts: Iterable[SeatCount]) -> None:
        """Add the legs of a new night that the ledger does not know yet."""
        fresh = [count for count in counts if count.leg not in self.counts]
        self._ledger.add_legs(fresh)
        self.note(fresh)

    def note(self, counts: Iterable[SeatCount]) -> None:
        """Take over counts as they now stand in the ledger."""
        for count in counts:
            self.counts[count.leg] = count
            self.left[count.leg] = count.remaining
