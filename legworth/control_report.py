"""What ``decide``, ``connection`` and ``change`` print."""

from __future__ import annotations

from dataclasses import asdict
from typing import Any

import pandas as pd
from rich.table import Table

from legworth.change import ChangeStudy
from legworth.change_lines import change_lines
from legworth.connection import ConnectionStudy
from legworth.report import CAUTION, console_for_output, money, price_text
from network import Network, counted

__all__ = [
    "change_as_json",
    "connections_as_json",
    "decisions_as_json",
    "print_change",
    "print_connections",
    "print_decisions",
]

SHOWN = 20


def print_decisions(network: Network, decisions: pd.DataFrame, source: str) -> None:
    """Print the first answers and how many there are of each kind."""
    console = console_for_output()
    for row in decisions.head(SHOWN).itertuples(index=False):
        wanted = f"{row.request}: {row.itinerary} {row.fare_class if isinstance(row.fare_class, str) else ''}".rstrip()
        console.print(f"{wanted}, {row.seats} travelling. {row.sentence}", highlight=False, soft_wrap=True)
    if len(decisions) > SHOWN:
        console.print(f"... and {len(decisions) - SHOWN:,} more", highlight=False)
    accepted = int((decisions["answer"] == "accept").sum())
    console.print(
        f"{accepted:,} accepted, {len(decisions) - accepted:,} refused; prices in {network.currency}, {source}",
        highlight=False,
        soft_wrap=True,
    )
    console.print(CAUTION, style="dim", highlight=False, soft_wrap=True)


def decisions_as_json(decisions: pd.DataFrame, source: str) -> dict[str, Any]:
    """Answers as one document."""
    plain = decisions.astype(object).where(decisions.notna(), None)
    return {"prices": source, "decisions": plain.to_dict(orient="records")}


def print_connections(network: Network, studies: list[ConnectionStudy], method: str) -> None:
    """Print every itinerary: classes, parties, and who is displaced."""
    console = console_for_output()
    for study in studies:
        legs = " + ".join(
            f"{leg} {price_text(price)} ({counted(seats, 'seat')} left)"
            for leg, price, seats in zip(study.legs, study.bid_prices, study.remaining, strict=True)
        )
        console.print(f"{study.itinerary}: {legs}, in {network.currency}", style="bold", highlight=False)
        classes = Table(title="By fare class", title_justify="left")
        classes.add_column("Class")
        for heading in ("Fare", "Displaces", "Contributes"):
            classes.add_column(heading, justify="right")
        classes.add_column("Network control")
        classes.add_column("Leg-level control")
        for line in study.classes:
            classes.add_row(
                line.fare_class,
                price_text(line.fare),
                price_text(line.displacement),
                price_text(line.contribution),
                "open" if line.open else "closed",
                "open" if line.open_by_leg_control else "closed",
            )
        console.print(classes, highlight=False)
        if study.parties:
            console.print(_parties(study, method), highlight=False)
            console.print(_displaced(study), highlight=False)
        else:
            console.print("No party of these sizes fits into the seats left.", highlight=False)
    console.print(CAUTION, style="dim", highlight=False, soft_wrap=True)


def _parties(study: ConnectionStudy, method: str) -> Table:
    title = f"Least acceptable fare by party, by the {method} program solved without those seats"
    table = Table(title=title, title_justify="left")
    for heading in ("Party", "Displaces", "Least fare each", "By bid prices", "Difference"):
        table.add_column(heading, justify="right")
    for line in study.parties:
        table.add_row(
            f"{line.seats}",
            price_text(line.displacement),
            price_text(line.least_fare),
            price_text(line.by_bid_price),
            price_text(line.displacement - line.by_bid_price),
        )
    return table


def _displaced(study: ConnectionStudy) -> Table:
    title = f"Whom a party of {study.displaced_by} displaces, in expected passengers (below zero: gains)"
    table = Table(title=title, title_justify="left")
    table.add_column("Itinerary")
    table.add_column("Class")
    table.add_column("Fare", justify="right")
    table.add_column("On the legs")
    table.add_column("Passengers", justify="right")
    for row in study.displaced:
        legs = " ".join(row.legs) or "(knock-on)"
        table.add_row(row.itinerary, row.fare_class, price_text(row.fare), legs, f"{row.passengers:.2f}")
    return table


def connections_as_json(studies: list[ConnectionStudy], picture: str | None) -> dict[str, Any]:
    """Studies as one document."""
    return {"connections": [asdict(study) for study in studies], "picture": picture}


def print_change(network: Network, study: ChangeStudy, method: str) -> None:
    """Print what is changed, revenue before and after, and what moves."""
    console = console_for_output()
    for line in change_lines(study.account, network.currency):
        console.print(line, highlight=False, soft_wrap=True)
    gain = study.after - study.before
    console.print(
        f"Optimum of the {method} program before {money(study.before)}, after {money(study.after)}: "
        f"{gain:+,.2f} {network.currency}",
        style="bold",
        highlight=False,
    )
    if study.account.fares and not study.account.products_with_other_demand:
        console.print("Demand is taken to stay the same at the new fares.", highlight=False)
    if study.lost_itineraries:
        lost = counted(study.lost_itineraries, "itinerary is", "itineraries are")
        console.print(
            f"{lost} no longer sold; carrying their passengers another way is not looked at",
            highlight=False,
            soft_wrap=True,
        )
    if study.freed:
        freed = ", ".join(f"{leg} {passengers:.1f}" for leg, passengers in study.freed)
        console.print(f"Passengers they would have carried on other legs: {freed}", highlight=False, soft_wrap=True)
    table = Table(title="Legs whose bid prices move most", title_justify="left")
    table.add_column("Leg")
    for heading in ("Price before", "Price after", "Passengers before", "Passengers after"):
        table.add_column(heading, justify="right")
    for move in study.moves:
        table.add_row(
            move.leg,
            price_text(move.price_before),
            price_text(move.price_after),
            f"{move.sales_before:,.1f}",
            f"{move.sales_after:,.1f}",
        )
    console.print(table if study.moves else "No bid price moves.", highlight=False)
    console.print(CAUTION, style="dim", highlight=False, soft_wrap=True)


def change_as_json(study: ChangeStudy) -> dict[str, Any]:
    """The study as one document."""
    found = asdict(study)
    return {"changes": found.pop("account"), **found, "gain": study.after - study.before}
