"""Who turns up: cancellations, no-shows, seats authorised beyond those on board, and denied boarding.

Every booking is cancelled by chance, at an instant even between the request and the departure of its first leg; its
fare is paid back and its seats return to sale. Of the bookings left, some passengers do not turn up: their fare is kept
and their seats fly empty. With more seats authorised for sale than there are on board, more passengers may turn
up on a leg than it holds; each of them, on each leg, costs what denied boarding costs. Bookings from before the
snapshot all turn up. Controls see the seats authorised and the demand as forecast, and nothing of all this.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from network import Network, SettingError
from network.arrays import FloatArray, IntArray

__all__ = ["Attendance", "rates_by_class"]

Rates = tuple[tuple[str, float], ...]


@dataclass(frozen=True)
class Attendance:
    """How many turn up, and what it costs if too many do.

    Attributes
    ----------
    cancelled, absent
        Chances that a booking is cancelled, and that a passenger still booked does not turn up: pairs of fare class
        and rate, the class ``*`` for all others.
    authorised
        Seats authorised for sale for every seat of the capacity, at least 1; parts of seats are dropped.
    denied_cost
        Currency for a passenger denied boarding on a leg.

    Raises
    ------
    SettingError
        If one is out of its limits.
    """

    cancelled: Rates = ()
    absent: Rates = ()
    authorised: float = 1.0
    denied_cost: float = 0.0

    def __post_init__(self) -> None:
        for _, rate in (*self.cancelled, *self.absent):
            if not 0 <= rate <= 1:
                raise SettingError(f"rate {rate} of cancellations or no-shows is not between 0 and 1")
        if not 1 <= self.authorised <= 2:
            raise SettingError(f"seats authorised must be 1 to 2 times the capacity, got {self.authorised}")
        if not 0 <= self.denied_cost < np.inf:
            raise SettingError(f"the cost of denied boarding must not be negative, got {self.denied_cost}")

    def rates(self, network: Network) -> tuple[FloatArray, FloatArray]:
        """(C,) chances of cancellation and of absence by fare class.

        Raises
        ------
        SettingError
            If a fare class is unknown.
        """
        return _of_classes(self.cancelled, network), _of_classes(self.absent, network)

    def seats(self, network: Network) -> IntArray:
        """(L,) seats for sale at the snapshot, with those authorised beyond the capacity."""
        capacity, sold = network.legs.capacity.astype(np.int64), network.legs.sold
        extra = np.floor(capacity * self.authorised + 1e-9).astype(np.int64) - capacity
        room = np.maximum(capacity + extra - sold, 0)
        # A leg closed for another reason than being full stays closed.
        return np.where((network.remaining == 0) & (sold < capacity), 0, np.maximum(room, network.remaining))


def rates_by_class(text: str) -> Rates:
    """Read ``0.1`` or ``A=0.02,B=0.05,*=0.1`` as rates by fare class.

    Raises
    ------
    SettingError
        If it is neither.

    Examples
    --------
    >>> rates_by_class("0.1")
    (('*', 0.1),)
    >>> rates_by_class("A=0.02, *=0.1")
    (('A', 0.02), ('*', 0.1))
    """
    found = []
    for piece in text.split(","):
        name, _, rate = piece.rpartition("=")
        try:
            found.append((name.strip() or "*", float(rate)))
        except ValueError:
            raise SettingError(f"rate {text!r} is not understood; write 0.1 or A=0.02,B=0.05,*=0.1") from None
    return tuple(found)


def _of_classes(rates: Rates, network: Network) -> FloatArray:
    known = dict(rates)
    unknown = set(known) - {"*", *network.fare_classes}
    if unknown:
        raise SettingError(f"there is no fare class {min(unknown)!r}; choose of {', '.join(network.fare_classes)} or *")
    return np.array([known.get(name, known.get("*", 0.0)) for name in network.fare_classes])
