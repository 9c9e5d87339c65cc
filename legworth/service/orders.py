"""Orders to sell seats and to give them back, judged one after the other against the counts as they stand."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from datetime import UTC, datetime
from hashlib import sha256
from typing import Any

from legworth.service.errors import KeyReusedError, LedgerError, UnknownLegError, UnknownSaleError
from network import SettingError

__all__ = [
    "Batch",
    "Cancellation",
    "Judge",
    "Order",
    "Outcome",
    "Overwriting",
    "Sale",
    "SeatCount",
    "answer_order",
    "present",
]

Judge = Callable[[Mapping[str, int]], dict[str, Any]]
"""Takes the seats left on every leg of an order and answers, with ``accepted`` as one of its entries."""


@dataclass(frozen=True)
class SeatCount:
    """Seats of one leg: authorised for sale, and sold."""

    leg: str
    capacity: int
    sold: int

    @property
    def remaining(self) -> int:
        """Seats left, never negative."""
        return max(self.capacity - self.sold, 0)

    @property
    def oversold(self) -> bool:
        """Whether more seats are sold than authorised, as after a change of vehicle."""
        return self.sold > self.capacity


@dataclass(frozen=True)
class Sale:
    """An order to sell seats on all of some legs.

    Attributes
    ----------
    key
        The caller's key; the same key is carried out once.
    legs
        Names of the legs, each once.
    seats
        Passengers, at least 1.
    request
        What was asked, to tell a retry from another order under the same key.
    judge
        Accepts or refuses in view of the seats left. It must refuse if fewer than ``seats`` are left; the ledger
        refuses to sell them in any case.
    who
        Whose token it came with.
    hindrance
        Why it can no longer be judged, such as a leg that the night in force does not sell; it is raised unless the
        key has its answer already.
    """

    key: str
    legs: tuple[str, ...]
    seats: int
    request: Mapping[str, Any]
    judge: Judge
    who: str = ""
    hindrance: Exception | None = None


@dataclass(frozen=True)
class Cancellation:
    """An order to give seats of an earlier sale back: all that are left of it if ``seats`` is None."""

    key: str
    sale: str
    seats: int | None = None
    who: str = ""

    @property
    def request(self) -> Mapping[str, Any]:
        """What was asked, to tell a retry from another order under the same key."""
        return {"sale": self.sale, "seats": self.seats}


@dataclass(frozen=True)
class Overwriting:
    """Counts of the carrier's own inventory, which replace those of the ledger."""

    counts: tuple[SeatCount, ...]
    who: str
    why: str


@dataclass(frozen=True)
class Outcome:
    """Answer to an order, as it stands in the journal; ``repeated`` if the key had been carried out before."""

    answer: dict[str, Any]
    repeated: bool


Order = Sale | Cancellation


@dataclass
class Batch:
    """Counts, answers and sales that a batch sees and changes before it is written."""

    counts: dict[str, SeatCount]
    known: dict[str, Any]
    sales: dict[str, tuple[tuple[str, ...], int]]
    cancelled: dict[str, int]
    entries: list[dict[str, Any]]
    changed: set[str]


def answer_order(batch: Batch, order: Order) -> Outcome:
    """Answer one order and note what it changes."""
    digest = sha256(json.dumps(order.request, sort_keys=True).encode()).hexdigest()
    kind = "sale" if isinstance(order, Sale) else "cancellation"
    earlier = batch.known.get(order.key)
    if earlier is not None:
        if (earlier.kind, earlier.digest) != (kind, digest):
            raise KeyReusedError(f"the key {order.key!r} was used for another order; take a new one")
        return Outcome(json.loads(earlier.answer), repeated=True)
    if isinstance(order, Sale):
        legs, seats, sale, answer = _sold(batch, order)
    else:
        legs, seats, sale, answer = _given_back(batch, order)
    words = json.dumps(answer)
    batch.entries.append(
        {
            "key": order.key,
            "kind": kind,
            "sale": sale,
            "legs": " ".join(legs),
            "seats": seats,
            "accepted": bool(answer["accepted"]),
            "digest": digest,
            "answer": words,
            "who": order.who,
            "at_any_price": bool(answer.get("at_any_price", False)),
            "at": present(),
        }
    )
    batch.known[order.key] = _Entry(kind, digest, words)
    return Outcome(answer, repeated=False)


@dataclass(frozen=True)
class _Entry:
    """What a later order of the same batch needs of a journal row."""

    kind: str
    digest: str
    answer: str


def _sold(batch: Batch, order: Sale) -> tuple[tuple[str, ...], int, str | None, dict[str, Any]]:
    if order.hindrance is not None:
        raise order.hindrance
    unknown = [leg for leg in order.legs if leg not in batch.counts]
    if unknown:
        raise UnknownLegError(f"{unknown[0]!r} is not a leg on sale; correct its name")
    if order.seats < 1 or len(set(order.legs)) != len(order.legs) or not order.legs:
        raise SettingError("a sale needs at least one seat, and each of its legs once")
    left = {leg: batch.counts[leg].remaining for leg in order.legs}
    answer = dict(order.judge(left))
    if answer["accepted"]:
        short = [leg for leg in order.legs if left[leg] < order.seats]
        if short:
            raise LedgerError(f"{short[0]} has only {left[short[0]]} seats left; nothing was sold")
        _move(batch, order.legs, order.seats)
        batch.sales[order.key] = (order.legs, order.seats)
    return order.legs, order.seats, None, answer


def _given_back(batch: Batch, order: Cancellation) -> tuple[tuple[str, ...], int, str | None, dict[str, Any]]:
    if order.sale not in batch.sales:
        raise UnknownSaleError(f"no sale has the key {order.sale!r}; give the key under which the seats were sold")
    legs, sold = batch.sales[order.sale]
    left = sold - batch.cancelled.get(order.sale, 0)
    seats = left if order.seats is None else order.seats
    accepted = 1 <= seats <= left
    if accepted:
        _move(batch, legs, -seats)
        batch.cancelled[order.sale] = batch.cancelled.get(order.sale, 0) + seats
        sentence = f"Cancelled: {seats} of {sold} seats of the sale."
    else:
        sentence = f"Refused: {left} seats of the sale are left to cancel."
    answer = {
        "accepted": accepted,
        "sale": order.sale,
        "seats": seats,
        "left": left - seats * accepted,
        "sentence": sentence,
    }
    return legs, seats, order.sale, answer


def _move(batch: Batch, legs: Iterable[str], seats: int) -> None:
    for leg in legs:
        count = batch.counts[leg]
        batch.counts[leg] = SeatCount(leg, count.capacity, max(count.sold + seats, 0))
        batch.changed.add(leg)


def present() -> str:
    """Return the present instant, ISO 8601 in UTC."""
    return datetime.now(UTC).isoformat(timespec="milliseconds")
