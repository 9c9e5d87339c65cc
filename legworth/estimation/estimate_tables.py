"""The estimate as tables: demand and booking curves of a network folder, and what they are made of."""

from __future__ import annotations

import numpy as np
import pandas as pd

from legworth.estimation.recipe import Estimated
from network import Network, input_schemas, table_schema
from network.arrays import FloatArray

__all__ = ["estimate_tables"]

DIGITS = 6
"""Significant digits of passengers; more would be noise."""


def estimate_tables(found: Estimated) -> dict[str, pd.DataFrame]:
    """Return ``demand`` and ``booking_curves`` as the schemas of a folder declare them, and ``estimates``."""
    network = found.network
    mean, deviation = _rounded(network.demand.mean), _rounded(network.demand.deviation)
    names = _product_names(network)
    curve = pd.Categorical.from_codes(network.curve, categories=pd.Index(network.curves.name, dtype="str"))
    tables = {
        "demand": pd.DataFrame({**names, "mean": mean, "deviation": deviation, "curve": curve}),
        "booking_curves": _curves(network),
        "estimates": _estimates(found, names, mean, deviation).assign(curve=curve),
    }
    for name, frame in tables.items():
        schema = table_schema("legworth", name) if name == "estimates" else input_schemas()[name]
        if tuple(frame.columns) != schema.names:
            raise ValueError(f"table {name} does not have the columns that its schema declares")
    return tables


def _rounded(values: FloatArray) -> FloatArray:
    """Figures to `DIGITS` digits."""
    size = np.floor(np.log10(np.maximum(np.abs(values), 1e-300)))
    unit = 10.0 ** (DIGITS - 1 - np.maximum(size, -DIGITS))
    return np.asarray(np.round(values * unit) / unit)


def _product_names(network: Network) -> dict[str, pd.Categorical]:
    return {
        "itinerary": pd.Categorical.from_codes(
            network.product_itinerary, categories=pd.Index(network.itinerary, dtype="str")
        ),
        "fare_class": pd.Categorical.from_codes(
            network.product_class, categories=pd.Index(network.fare_classes, dtype="str")
        ),
    }


def _curves(network: Network) -> pd.DataFrame:
    curves = network.curves
    return pd.DataFrame(
        {
            "curve": np.repeat(curves.name, np.diff(curves.start)).astype(str),
            "days_before": curves.days_before,
            "share": np.round(np.maximum.accumulate(curves.share.reshape(len(curves), -1), axis=1), 6).ravel(),
        }
    )


def _estimates(
    found: Estimated, names: dict[str, pd.Categorical], mean: FloatArray, deviation: FloatArray
) -> pd.DataFrame:
    network, departures, parts = found.network, found.departures, found.estimate.forecast
    at = network.product_itinerary
    return pd.DataFrame(
        {
            **names,
            "departure": departures.date[at].astype(str),
            "days_left": np.round(departures.days_left[at], 4),
            "mean": mean,
            "deviation": deviation,
            "estimated_mean": _rounded(parts.mean),
            "estimated_deviation": _rounded(parts.deviation),
            "adjustments": pd.Series(found.adjusted.names, dtype="str"),
            "rate": _rounded(parts.rate),
            "effect": _rounded(parts.effect),
            "to_come": np.clip(_rounded(parts.to_come), 0.0, 1.0),
            "update": _rounded(parts.update),
            "own_weight": np.clip(_rounded(parts.own_weight), 0.0, 1.0),
            "observations": np.round(parts.observations, 2),
            "weak": parts.weak,
        }
    )
