"""What the commands print: short tables for people, and the same as JSON."""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import Path
from typing import Any

import numpy as np
from rich.console import Console
from rich.table import Table
from rich.text import Text

from heuristics.arrivals import days_before_departure
from legworth.pricing import PricedNetwork
from network import Fault, Network, counted

__all__ = [
    "CAUTION",
    "comparison_as_json",
    "console_for_output",
    "faults_as_json",
    "money",
    "price_text",
    "print_check",
    "print_comparison",
    "print_prices",
    "sizes",
]

CAUTION = (
    "These figures advise. Passenger-rights law, contracts, licensed practice and the carrier's own policy decide "
    "what is sold or refused, and come first."
)
DEAREST = 8
LOW = 0.75
"""Share of the adjusted seat value below which the mean bid price is remarked on."""

PIPE_WIDTH = 140
ALONE = {"network_only": "network control", "leg_only": "leg-level control"}
WORDS = {"network_only": "network sells, leg control refuses", "leg_only": "leg control sells, network refuses"}


def faults_as_json(faults: Iterable[Fault]) -> list[dict[str, Any]]:
    """Faults as plain records."""
    return [
        {
            "file": f.file,
            "line": f.line,
            "column": f.column,
            "problem": f.problem,
            "warning": f.warning,
            "count": f.count,
        }
        for f in faults
    ]


def sizes(network: Network, n_components: int) -> dict[str, Any]:
    """Name and sizes of a network."""
    return {
        "network": network.name,
        "currency": network.currency,
        "as_of": network.as_of.isoformat(),
        "stations": len(network.stations),
        "legs": network.n_legs,
        "itineraries": network.n_itineraries,
        "products": network.n_products,
        "components": n_components,
        "remaining_seats": int(network.remaining.sum()),
        "demand_to_come": float(network.demand.expected.sum()),
    }


def print_check(network: Network, warnings: Iterable[Fault], n_components: int) -> None:
    """Print warnings and sizes of a network without faults."""
    console = console_for_output()
    count = 0
    for warning in warnings:
        count += warning.count
        console.print(str(warning), highlight=False, soft_wrap=True)
    _print_heading(console, network, n_components)
    demand, warned = float(network.demand.expected.sum()), counted(count, "warning")
    console.print(f"{counted(demand, 'passenger')} expected to ask; {warned}, no faults", highlight=False)


def print_prices(priced: PricedNetwork, out: Path, table_format: str) -> None:
    """Print what pricing found and where it was written."""
    console = console_for_output()
    network, summary = priced.network, priced.summary
    for warning in priced.warnings:
        console.print(str(warning), markup=False, highlight=False, soft_wrap=True)
    _print_heading(console, network, len(summary["components"]))
    departed = summary["legs_departed"]
    gap = max(abs(part["certificate"]["gap"]) for part in summary["components"])
    facts = Table.grid(padding=(0, 2))
    facts.add_row(f"Optimum of the {summary['method']} program", money(summary["objective"]), f"proved to {gap:.0e}")
    facts.add_row("No control can expect more than", money(summary["bounds"]["revenue"]), "deterministic program")
    facts.add_row(
        "Legs with a price",
        f"{summary['legs_with_price']:,} of {network.n_legs - departed:,}",
        f"{summary['legs_without_seats']:,} without seats" + (f", and {departed:,} departed" if departed else ""),
    )
    facts.add_row(
        "Disagreement with leg-level control",
        money(summary["at_stake"]),
        f"{counted(summary['products_where_controls_disagree'], 'product')}, "
        f"{counted(summary['legs_where_controls_disagree'], 'leg')}",
    )
    console.print(facts, highlight=False)
    if departed < network.n_legs:
        console.print(_dearest(priced), highlight=False)
    _print_low_prices(console, priced)
    names = ", ".join([*(f"{name}.{table_format}" for name in priced.tables), "summary.json"])
    console.print(f"Written to {out}: {names}", highlight=False, markup=False, soft_wrap=True)
    console.print(CAUTION, style="dim", highlight=False, soft_wrap=True)


def _print_low_prices(console: Console, priced: PricedNetwork) -> None:
    """Say so where setting seats aside product by product makes bid prices low."""
    comparison = priced.tables["comparison"]
    price, value = float(comparison["bid_price"].mean()), float(comparison["adjusted_seat_value"].mean())
    if priced.summary["method"] == "probabilistic" and price < LOW * value:
        console.print(
            f"Caution: bid prices are low here, {price_text(price)} on average where displacement-adjusted EMSR-b has "
            f"{price_text(value)}. The probabilistic program sets seats aside for each product apart, which values "
            "seats low where products are many and small. Look at --method randomised and at price curves first.",
            highlight=False,
            soft_wrap=True,
        )


def print_comparison(priced: PricedNetwork, top: int, picture: Path) -> None:
    """Print the disagreements on which most money hangs."""
    console = console_for_output()
    network, summary, connections = priced.network, priced.summary, priced.tables["connections"]
    _print_heading(console, network, len(summary["components"]))
    rows = largest_disagreements(priced, top)
    console.print(
        f"Both controls agree on {network.n_products - summary['products_where_controls_disagree']:,} of "
        f"{counted(network.n_products, 'product')}; at stake on the others, to first order and "
        f"with seats counted more than once, {money(summary['at_stake'])} {network.currency}:",
        highlight=False,
    )
    for word, label in ALONE.items():
        chosen = connections["disagreement"] == word
        stake = float(connections["at_stake"][chosen].sum())
        console.print(f"  {int(chosen.sum()):,} that {label} alone would sell, {money(stake)}", highlight=False)
    most = f"The {counted(len(rows), 'disagreement')} with most at stake" if len(rows) > 1 else "The disagreement"
    table = Table(title=f"{most} ({network.currency})", title_justify="left")
    table.add_column("Itinerary")
    table.add_column("Class")
    table.add_column("Route")
    for heading in ("Fare", "Displaces", "Contributes", "At stake"):
        table.add_column(heading, justify="right")
    table.add_column("What happens")
    for row in rows:
        table.add_row(
            row["itinerary"],
            row["fare_class"],
            row["route"],
            *(price_text(row[name]) for name in ("fare", "displacement", "contribution")),
            price_text(row["at_stake"]),
            WORDS[row["disagreement"]],
        )
    if rows:
        console.print(table, highlight=False)
    _print_low_prices(console, priced)
    console.print(f"Picture: {picture}", highlight=False, markup=False, soft_wrap=True)
    console.print(CAUTION, style="dim", highlight=False, soft_wrap=True)


def comparison_as_json(priced: PricedNetwork, top: int, picture: Path) -> dict[str, Any]:
    """Disagreements and totals as one document."""
    summary = priced.summary
    wanted = ("network", "currency", "as_of", "method", "products_where_controls_disagree", "at_stake")
    return {
        **{name: summary[name] for name in wanted},
        "disagreements": largest_disagreements(priced, top),
        "picture": str(picture),
    }


def largest_disagreements(priced: PricedNetwork, top: int) -> list[dict[str, Any]]:
    """Rows of ``connections`` on which the controls disagree, most at stake first, with their routes."""
    connections = priced.tables["connections"]
    order = np.argsort(-connections["at_stake"].to_numpy(), kind="stable")[:top]
    order = order[connections["disagreement"].notna().to_numpy()[order]]
    records = connections.iloc[order].to_dict(orient="records")
    itineraries = priced.network.product_itinerary[order]
    return [
        {**{str(key): value for key, value in record.items()}, "route": route(priced.network, int(i))}
        for record, i in zip(records, itineraries, strict=True)
    ]


def route(network: Network, itinerary: int) -> str:
    """Stations of an itinerary in travel order, such as ``ORV-SAL-BRO``."""
    legs = network.path_leg[network.path_start[itinerary] : network.path_start[itinerary + 1]]
    stops = [network.legs.origin[legs[0]], *network.legs.destination[legs]]
    return "-".join(str(network.stations.name[stop]) for stop in stops)


def _dearest(priced: PricedNetwork) -> Table:
    """Legs still to depart, those with the dearest last seats first."""
    network, solution = priced.network, priced.solution
    to_depart = np.flatnonzero(days_before_departure(network) > 0)
    table = Table(title=f"The dearest last seats ({network.currency})", title_justify="left")
    table.add_column("Leg")
    table.add_column("Route")
    table.add_column("Departs")
    for heading in ("Seats left", "Bid price", "Next seat", "Leg-level value"):
        table.add_column(heading, justify="right")
    for leg in to_depart[np.argsort(-solution.bid_price[to_depart], kind="stable")[:DEAREST]]:
        legs = network.legs
        local = legs.departs[leg] + np.timedelta64(int(legs.departs_offset[leg]), "m")
        table.add_row(
            str(legs.name[leg]),
            f"{network.stations.name[legs.origin[leg]]}-{network.stations.name[legs.destination[leg]]}",
            str(local.astype("datetime64[m]")).replace("T", " "),
            f"{network.remaining[leg]:,}",
            price_text(solution.bid_price[leg]),
            price_text(solution.next_seat[leg]),
            price_text(priced.controls.plain.seat_value[leg]),
        )
    return table


def _print_heading(console: Console, network: Network, n_components: int) -> None:
    instant = network.as_of.strftime("%Y-%m-%d %H:%M %z")
    console.print(Text.assemble((network.name, "bold"), f", as of {instant}, in {network.currency}"))
    console.print(
        f"{counted(network.n_legs, 'leg')} in {counted(n_components, 'component')}, "
        f"{counted(network.n_itineraries, 'itinerary')}, {counted(network.n_products, 'product')}; "
        f"{counted(network.remaining.sum(), 'seat')} to sell",
        highlight=False,
    )


def console_for_output() -> Console:
    """Console that prints names as they are written, brackets and colons too."""
    console = Console(markup=False, emoji=False)
    return console if console.is_terminal else Console(markup=False, emoji=False, width=PIPE_WIDTH)


def money(value: float) -> str:
    """Whole currency units, thousands apart."""
    return f"{value:,.0f}"


def price_text(value: float) -> str:
    """Two decimals, thousands apart."""
    return f"{round(value, 2) + 0.0:,.2f}"
