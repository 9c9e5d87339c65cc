"""What no control can be expected to beat: upper bounds on expected revenue."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from heuristics.bounds import poisson_bounds
from legworth.curves import CurveMethod, network_curves
from legworth.simulation.methods import FAST
from lp import LpOptions, Method, solve
from network import Family, Network

__all__ = ["Bound", "expectation_bounds", "sum_bounds"]

LABELS = {
    "hindsight": "hindsight optimum, mean over paths",
    "deterministic": "deterministic program",
    "decomposition": "decomposition, one leg kept",
    "legs_apart": "decomposition, all legs kept that no product joins",
    "split_by_price": "fares split by bid prices",
    "fare_splits": "best fare splits found (Lagrangian bound)",
}
POISSON_ONLY = ("decomposition", "legs_apart", "split_by_price", "fare_splits")


@dataclass(frozen=True)
class Bound:
    """An upper bound on expected revenue.

    Attributes
    ----------
    name, label
        Which.
    value
        Currency.
    standard_error
        Of the value, 0 if it is exact.
    caveat
        For what it holds if not for what was simulated: then it is a figure for orientation.
    """

    name: str
    label: str
    value: float
    standard_error: float
    caveat: str = ""

    @classmethod
    def of(cls, name: str, value: float, standard_error: float = 0.0, caveat: str = "") -> Bound:
        """Label a bound."""
        return cls(name, LABELS[name], value, standard_error, caveat)

    @property
    def holds(self) -> bool:
        """Whether no control can be expected to beat it in what was simulated."""
        return not self.caveat


def expectation_bounds(network: Network, *, fare_splits: bool = False) -> tuple[dict[str, float], bool]:
    """Bounds of one part of a network that follow from its forecast, and whether its demand is all Poisson."""
    solution = solve(network, LpOptions(Method.DETERMINISTIC, FAST))
    found = poisson_bounds(network, solution.bid_price)
    bounds = {
        "deterministic": solution.bound,
        "decomposition": found.one_leg,
        "legs_apart": found.legs_apart,
        "split_by_price": found.split,
    }
    if fare_splits:
        bounds["fare_splits"] = network_curves(network, solution.bid_price, CurveMethod.FARE_SPLITS).bounds[
            "fare_splits"
        ]
    wanted = network.demand.mean > 0
    return bounds, bool(np.all(network.demand.family[wanted] == Family.POISSON))


def sum_bounds(parts: Iterable[tuple[dict[str, float], bool]], *, everybody_comes: bool) -> list[Bound]:
    """Add the bounds of separate parts up, given whether nobody cancels or stays away and no leg is oversold."""
    found = list(parts)
    poisson = all(only for _, only in found)
    bounds = []
    for name in found[0][0]:
        caveat = "" if poisson or name not in POISSON_ONLY else "for Poisson demand only"
        if not everybody_comes:
            caveat = "where all who book turn up"
        bounds.append(Bound.of(name, sum(values[name] for values, _ in found), caveat=caveat))
    return bounds
