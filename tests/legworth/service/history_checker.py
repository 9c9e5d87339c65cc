"""Checks a history of orders against what the ledger holds: nothing lost, nothing sold twice, nothing oversold.

A history is what the clients know: every order with its key, and the answer that reached them. The ledger is what the
database holds after everybody has stopped: counts, and the journal. An order whose answer never came is open: the
journal decides whether it was carried out.
"""

from __future__ import annotations

from collections import Counter, defaultdict
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

from legworth.service.orders import SeatCount

__all__ = ["Entry", "Event", "faults"]


@dataclass(frozen=True)
class Event:
    """An order as its client knows it; ``accepted`` is None as long as no answer has come."""

    key: str
    kind: str
    legs: tuple[str, ...]
    seats: int
    accepted: bool | None
    sale: str | None = None


@dataclass(frozen=True)
class Entry:
    """A row of the journal."""

    key: str
    kind: str
    legs: tuple[str, ...]
    seats: int
    accepted: bool
    sale: str | None = None


def faults(
    before: Mapping[str, SeatCount], after: Mapping[str, SeatCount], journal: Iterable[Entry], events: Sequence[Event]
) -> list[str]:
    """Everything that is wrong; nothing if the history is sound.

    Parameters
    ----------
    before, after
        Counts by leg at the beginning and at the end.
    journal
        All rows of the journal, in their order.
    events
        Every order sent, once for each key, with the last answer.
    """
    rows = list(journal)
    found = [f"key {key} is in the journal {n} times" for key, n in Counter(row.key for row in rows).items() if n > 1]
    by_key = {row.key: row for row in rows}
    for event in events:
        row = by_key.get(event.key)
        if row is None:
            if event.accepted is not None:
                found.append(f"key {event.key} was answered but is not in the journal")
            continue
        if event.accepted is not None and row.accepted != event.accepted:
            found.append(f"key {event.key} was answered {event.accepted}, the journal says {row.accepted}")
        if (row.kind, row.legs, row.seats, row.sale) != (event.kind, event.legs, event.seats, event.sale):
            found.append(f"key {event.key} stands in the journal as another order")
    sent = {event.key for event in events}
    found += [f"key {row.key} is in the journal but nobody sent it" for row in rows if row.key not in sent]
    return found + _counts(before, after, rows) + _acknowledged(before, after, events)


def _acknowledged(
    before: Mapping[str, SeatCount], after: Mapping[str, SeatCount], events: Sequence[Event]
) -> list[str]:
    """Compare the counts with what clients were told alone, without the journal; open orders allow a span."""
    found = []
    for leg, count in after.items():
        least = most = before[leg].sold if leg in before else 0
        for event in events:
            if leg not in event.legs or event.accepted is False:
                continue
            moved = event.seats if event.kind == "sale" else -event.seats
            least += moved if event.accepted else min(moved, 0)
            most += moved if event.accepted else max(moved, 0)
        if not least <= count.sold <= most:
            found.append(f"{leg} has {count.sold} seats sold, clients were told of {least} to {most}")
    return found


def _counts(before: Mapping[str, SeatCount], after: Mapping[str, SeatCount], rows: Sequence[Entry]) -> list[str]:
    """Play the journal again, row by row, and compare with the counts at the end."""
    found = []
    sold = {leg: count.sold for leg, count in before.items()}
    left: dict[str, int] = defaultdict(int)
    for row in rows:
        if not row.accepted:
            continue
        if row.kind == "sale":
            left[row.key] += row.seats
        else:
            left[row.sale or ""] -= row.seats
            if left[row.sale or ""] < 0:
                found.append(f"key {row.key} gave back seats of {row.sale} that were not sold")
        for leg in row.legs:
            sold[leg] += row.seats if row.kind == "sale" else -row.seats
            if sold[leg] > before[leg].capacity:
                found.append(f"key {row.key} oversold {leg}: {sold[leg]} of {before[leg].capacity}")
    for leg, count in after.items():
        if count.sold != sold.get(leg):
            found.append(f"{leg} has {count.sold} seats sold, the journal makes {sold.get(leg)}")
        if count.capacity != before[leg].capacity:
            found.append(f"{leg} has changed its capacity")
    return found + [f"{leg} is gone" for leg in before if leg not in after]
