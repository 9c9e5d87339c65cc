"""A change in words: one line for everything that differs, so that a reader sees what was priced."""

from __future__ import annotations

from collections.abc import Sequence

from legworth.change_account import ChangeAccount
from legworth.report import price_text
from network import counted

__all__ = ["change_lines"]

SHOWN = 10
"""Lines of one kind that are printed; the rest are counted."""


def change_lines(account: ChangeAccount, currency: str) -> list[str]:
    """Lines that say what is changed."""
    if account.is_empty:
        return ["Nothing that is priced is changed."]
    seats = [
        f"{move.leg}: {move.seats_before:,} -> {counted(move.seats_after, 'seat')}, "
        f"{move.left_before:,} -> {move.left_after:,} left to sell"
        for move in account.seats
    ]
    cancelled = [f"{leg.leg}: cancelled, {_sold(leg.sold)}" for leg in account.cancelled]
    added = [f"{leg.leg}: added, {counted(leg.seats, 'seat')}, {leg.left:,} left to sell" for leg in account.added]
    fares = [
        f"{move.itinerary} {move.fare_class}: fare {price_text(move.fare_before)} -> {price_text(move.fare_after)} "
        f"{currency}"
        for move in account.fares
    ]
    lines = ["What is changed:"]
    for kind, noun in ((seats, "leg with other seats"), (cancelled, "cancelled leg"), (added, "added leg")):
        lines += _first(kind, noun, noun.replace("leg", "legs"))
    lines += _first(fares, "product with another fare", "products with other fares")
    lines += [f"  {line}" for line in _counts(account)]
    if any(leg.sold for leg in account.cancelled):
        lines.append(
            "Carrying those who hold the sold seats another way, or paying them back, is not in these figures."
        )
    return lines


def _sold(sold: int) -> str:
    return f"{counted(sold, 'seat is', 'seats are') if sold else 'no seat is'} sold on it"


def _first(lines: Sequence[str], noun: str, several: str) -> list[str]:
    rest = len(lines) - SHOWN
    shown = [f"  {line}" for line in lines[:SHOWN]]
    return [*shown, f"  and {rest:,} more {noun if rest == 1 else several}"] if rest > 0 else shown


def _counts(account: ChangeAccount) -> list[str]:
    """Differences that are counted, not listed."""
    counts = (
        (account.legs_at_other_times, "leg with other times or stations", "legs with other times or stations"),
        (account.itineraries_added, "added itinerary", None),
        (account.itineraries_rerouted, "itinerary on other legs", "itineraries on other legs"),
        (
            account.products_lost,
            "product taken from an itinerary that stays",
            "products taken from itineraries that stay",
        ),
        (account.products_added, "product added to an itinerary that stays", "products added to itineraries that stay"),
        (account.products_with_other_demand, "product with other demand", "products with other demand"),
    )
    return [counted(number, one, several) for number, one, several in counts if number]
