"""The result table of a simulation: one row a method, with error bars, on the same paths."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from scipy import stats

from heuristics.arrivals import days_before_departure
from legworth.simulation.bounds import Bound
from legworth.simulation.settings import BASELINE
from legworth.simulation.study import Simulation
from network import Network, table_schema
from network.arrays import FloatArray

__all__ = ["confidence", "load_factor", "result_table", "tightest"]

LEVEL = 0.95


def result_table(found: Simulation) -> pd.DataFrame:
    """Label the results as the schema ``simulation`` declares, in the order of the entries."""
    baseline, best = found.tallies[BASELINE], tightest(found.bounds)
    known = float(found.hindsight.mean())
    rows: list[dict[str, Any]] = []
    for entry in found.entries:
        figures = found.tallies[entry.name]
        paths = len(figures.revenue)
        gain, low, high = confidence(figures.revenue - baseline.revenue[:paths])
        # Of a few paths the revenue is first set against what hindsight earns on the same ones.
        same = float(found.hindsight[:paths].mean())
        carried = float(figures.passengers.sum())
        rows.append(
            {
                "method": entry.name,
                "label": entry.label,
                "paths": paths,
                "revenue": float(figures.revenue.mean()),
                "standard_error": float(figures.revenue.std(ddof=1) / np.sqrt(paths)),
                "difference": gain,
                "difference_low": low,
                "difference_high": high,
                "share_of_bound": _share(float(figures.revenue.mean()) * known, same * best.value),
                "load_factor": load_factor(found.network, figures.occupied),
                "connecting_share": _share(float(figures.connecting.sum()), carried),
                "refused_high": float(figures.refused_high.mean()),
                "spoiled_seats": float(figures.spoiled.mean()),
                "cancelled": float(figures.cancelled.mean()),
                "denied_boardings": float(figures.denied.mean()),
            }
        )
    frame = pd.DataFrame(rows)
    if tuple(frame.columns) != table_schema("legworth", "simulation").names:
        raise ValueError("the table of the simulation does not have the columns that its schema declares")
    return frame


def confidence(values: FloatArray) -> tuple[float, float, float]:
    """Mean of independent values, (P,), and the limits of its 95 % interval by Student's t."""
    mean = float(values.mean())
    half = float(stats.t.ppf((1 + LEVEL) / 2, len(values) - 1) * values.std(ddof=1) / np.sqrt(len(values)))
    return mean, mean - half, mean + half


def tightest(bounds: list[Bound]) -> Bound:
    """Return the least of the bounds that hold.

    The deterministic program is left out: in expectation it never lies below the hindsight optimum, whose value is
    concave in demand, so where it seems to, that is the chance of the paths drawn.
    """
    candidates = [bound for bound in bounds if bound.holds and bound.name != "deterministic"]
    return min(candidates, key=lambda bound: bound.value)


def load_factor(network: Network, occupied: FloatArray) -> float:
    """Seats taken at departure as a share of all on legs still to depart, mean over paths; 0 without seats.

    Parameters
    ----------
    network
        Capacities, and the seats that are still for sale at the snapshot.
    occupied
        (P,) seats taken by passengers booked after it, over all legs.
    """
    ahead = days_before_departure(network) > 0
    capacity = float(network.legs.capacity[ahead].sum())
    free = float(np.minimum(network.remaining, network.legs.capacity)[ahead].sum())
    return _share(capacity - free + float(occupied.mean()), capacity)


def _share(part: float, whole: float) -> float:
    return part / whole if whole > 0 else 0.0
