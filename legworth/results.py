"""Result tables: arrays by position become labelled tables, as their schemas declare them."""

from __future__ import annotations

from functools import cache

import numpy as np
import pandas as pd

from legworth.control import ControlComparison
from lp import NetworkSolution
from network import Network, TableSchema, table_schema

__all__ = ["RESULT_TABLES", "result_schemas", "result_tables"]

RESULT_TABLES = ("bid_prices", "protection", "comparison", "connections", "price_curves")


@cache
def result_schemas() -> dict[str, TableSchema]:
    """The schemas of the result tables, in writing order."""
    return {name: table_schema("legworth", name) for name in RESULT_TABLES}


def result_tables(network: Network, solution: NetworkSolution, controls: ControlComparison) -> dict[str, pd.DataFrame]:
    """Label the results.

    Returns
    -------
    dict
        Every table of `RESULT_TABLES` but the price curves, its columns named and ordered as its schema declares.
    """
    tables = {
        "bid_prices": _bid_prices(network, solution),
        "protection": _protection(network, controls),
        "comparison": _comparison(network, solution, controls),
        "connections": _connections(network, controls),
    }
    for name, frame in tables.items():
        if tuple(frame.columns) != result_schemas()[name].names:
            raise ValueError(f"table {name} does not have the columns that its schema declares")
    return tables


def _names(values: np.ndarray, position: np.ndarray | slice = slice(None)) -> pd.Categorical:
    codes = np.arange(len(values))[position]
    return pd.Categorical.from_codes(codes, categories=pd.Index(values, dtype="str"))


def _bid_prices(network: Network, solution: NetworkSolution) -> pd.DataFrame:
    return pd.DataFrame(
        {
            "leg": _names(network.legs.name),
            "bid_price": solution.bid_price,
            "next_seat": solution.next_seat,
            "remaining": network.remaining,
            "expected_sales": solution.expected_sales,
        }
    )


def _protection(network: Network, controls: ControlComparison) -> pd.DataFrame:
    protection = controls.adjusted
    products = protection.products
    product = products.product
    return pd.DataFrame(
        {
            "leg": _names(network.legs.name, products.leg),
            "rank": products.rank,
            "itinerary": _names(network.itinerary, network.product_itinerary[product]),
            "fare_class": _names(np.array(network.fare_classes), network.product_class[product]),
            "adjusted_fare": products.adjusted_fare,
            "mean": network.demand.mean[product],
            "deviation": network.demand.deviation[product],
            "protection": protection.protection,
            "booking_limit": protection.booking_limit,
        }
    )


def _comparison(network: Network, solution: NetworkSolution, controls: ControlComparison) -> pd.DataFrame:
    return pd.DataFrame(
        {
            "leg": _names(network.legs.name),
            "bid_price": solution.bid_price,
            "adjusted_seat_value": controls.adjusted.seat_value,
            "leg_seat_value": controls.plain.seat_value,
            "difference": solution.bid_price - controls.plain.seat_value,
            "agrees": controls.agrees,
        }
    )


def _connections(network: Network, controls: ControlComparison) -> pd.DataFrame:
    found = controls.connections
    words = np.where(found.open, 0, 1)
    disagreement = pd.Categorical.from_codes(
        np.where(found.disagrees, words, -1), categories=pd.Index(["network_only", "leg_only"], dtype="str")
    )
    return pd.DataFrame(
        {
            "itinerary": _names(network.itinerary, network.product_itinerary),
            "fare_class": _names(np.array(network.fare_classes), network.product_class),
            "fare": network.fare,
            "displacement": found.displacement,
            "contribution": found.contribution,
            "open": found.open,
            "open_by_leg_control": found.open_by_leg_control,
            "disagreement": disagreement,
            "at_stake": found.at_stake,
        }
    )
