"""Tables of the report on prices and products: heads with units, and cells as text."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

from legworth.refresh.changes import Changes
from legworth.refresh.changes_causes import How
from legworth.refresh.changes_prices import PriceMove
from legworth.refresh.changes_products import Dispute, Flip
from legworth.refresh.changes_words import flip_reason, rounded_steps, shown_move, signed
from legworth.report import WORDS, money, price_text

__all__ = [
    "Head",
    "PageTable",
    "dispute_tables",
    "flip_tables",
    "move_table",
    "shown_of",
]

SOLVED = {How.PART: "part solved again", How.LEG: "this leg alone", How.NOT: "not told apart"}


@dataclass(frozen=True)
class Head:
    """Head of a column: its text with the unit, and whether the column holds words."""

    text: str
    word: bool = False


@dataclass(frozen=True)
class PageTable:
    """A table of the page.

    Attributes
    ----------
    key
        Name within the page.
    caption
        What it shows, and in which order.
    heads
        Heads of the columns; the first names the row.
    rows
        Cells as text.
    """

    key: str
    caption: str
    heads: tuple[Head, ...]
    rows: tuple[tuple[str, ...], ...] = field(default=())


def move_table(moves: Sequence[PriceMove], currency: str) -> PageTable:
    """Largest price moves with their causes."""
    seat = f"{currency} a seat"
    heads = (
        Head("Leg", word=True),
        Head("Route", word=True),
        Head("Departs, local", word=True),
        Head(f"Price tonight, {seat}"),
        Head(f"Last night, {seat}"),
        Head(f"Move, {seat}"),
        Head(f"Move times seats, {currency}"),
        Head("Seats left tonight"),
        Head("Seats left last night"),
        Head(f"by seats, {currency}"),
        Head(f"by demand, {currency}"),
        Head(f"by fares, {currency}"),
        Head(f"by the rest, {currency}"),
        Head("Causes found by", word=True),
    )
    rows = []
    for move in moves:
        told = move.cause.how is not How.NOT
        steps = [signed(step) if told else "" for step in rounded_steps(move)]
        rows.append(
            (
                *(move.leg, move.route, move.departs, price_text(move.now), price_text(move.then)),
                *(signed(shown_move(move)), money(move.money), f"{move.seats_now:,}", f"{move.seats_then:,}"),
                *(*steps, SOLVED[move.cause.how]),
            )
        )
    caption = f"The {len(rows)} largest moves, most money first; the four causes in {seat} add up to the move"
    return PageTable("moves", caption, heads, tuple(rows))


def flip_tables(changes: Changes) -> list[PageTable]:
    """Products that closed and that opened."""
    found, currency = changes.products, changes.tonight.currency
    tables = []
    for key, word, flips, total in (
        ("closed", "closed", found.closed, found.closed_totals.products),
        ("opened", "opened", found.opened, found.opened_totals.products),
    ):
        if flips:
            caption = f"Products {word} since last night, {shown_of(len(flips), total)}, worth most first"
            tables.append(
                PageTable(key, caption, _flip_heads(currency), tuple(_flip(flip, currency) for flip in flips))
            )
    return tables


def _flip_heads(currency: str) -> tuple[Head, ...]:
    return (
        Head("Itinerary", word=True),
        Head("Class", word=True),
        Head(f"Fare, {currency}"),
        Head(f"Contribution tonight, {currency}"),
        Head(f"Last night, {currency}"),
        Head("Passengers expected"),
        Head(f"Their fares, {currency}"),
        Head(f"Worth, {currency}"),
        Head("Because", word=True),
    )


def _flip(flip: Flip, currency: str) -> tuple[str, ...]:
    return (
        flip.itinerary,
        flip.fare_class,
        price_text(flip.fare),
        signed(flip.contribution),
        signed(flip.contribution_then),
        f"{flip.passengers:,.1f}",
        money(flip.fare * flip.passengers),
        money(flip.worth),
        flip_reason(flip, currency),
    )


def dispute_tables(changes: Changes) -> list[PageTable]:
    """Disagreements with leg-level control: the largest, the new ones and those gone."""
    found, currency = changes.products, changes.tonight.currency
    total = found.tonight.products
    kinds = [("disputes", f"Most at stake tonight, {shown_of(len(found.disputes), total)}", found.disputes)]
    if found.last is not None:
        kinds += [
            (
                "new",
                f"New since last night, {shown_of(len(found.new_disputes), found.new_totals[0])}",
                found.new_disputes,
            ),
            (
                "gone",
                f"Gone since last night, {shown_of(len(found.gone_disputes), found.gone_totals[0])}",
                found.gone_disputes,
            ),
        ]
    return [
        PageTable(key, f"{caption}, most money first", _dispute_heads(currency), tuple(map(_dispute, lines)))
        for key, caption, lines in kinds
        if lines
    ]


def _dispute_heads(currency: str) -> tuple[Head, ...]:
    return (
        Head("Itinerary", word=True),
        Head("Class", word=True),
        Head(f"Fare, {currency}"),
        Head(f"At stake tonight, {currency}"),
        Head(f"Last night, {currency}"),
        Head("Who sells it", word=True),
        Head("Since last night", word=True),
    )


def _dispute(line: Dispute) -> tuple[str, ...]:
    now, then = line.disagreement, line.disagreement_then
    return (
        line.itinerary,
        line.fare_class,
        price_text(line.fare),
        money(line.at_stake) if now else "",
        money(line.at_stake_then) if then else "",
        WORDS.get(now, "both decide alike"),
        f"gone; {WORDS[then]} until then" if line.status == "gone" else line.status,
    )


def shown_of(shown: int, total: int) -> str:
    """How many of all rows are shown."""
    return f"all {total:,}" if shown == total else f"{shown:,} of {total:,}"
