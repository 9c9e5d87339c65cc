"""Price curves of a whole network: leg dynamic programs over displacement-adjusted fares or fare splits."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

import numpy as np
import pandas as pd
from joblib import Parallel, delayed

from heuristics import leg_products
from heuristics.arrivals import ArrivalPlan
from heuristics.bounds import poisson_bounds, split_shares
from heuristics.dynamic import REQUESTS_PER_STEP, PriceCurves, price_curves
from heuristics.fare_split import SplitOptions, Stage, best_split
from network import Component, Network, components
from network.arrays import FloatArray, IntArray
from network.model import ranges

__all__ = ["CurveMethod", "NetworkCurves", "curves_table", "network_curves"]

STRETCH = np.dtype([("leg", np.int64), ("days", np.float64), ("first", np.int64), ("seats", np.int64)])


class CurveMethod(StrEnum):
    """Where the displacement terms of the leg programs come from."""

    DECOMPOSITION = "decomposition"
    FARE_SPLITS = "fare-splits"


@dataclass(frozen=True, eq=False)
class NetworkCurves:
    """Price curves of all components.

    Attributes
    ----------
    method
        Where the displacement terms come from.
    parts
        Legs of every component as positions in the whole network, and its curves.
    bounds
        Upper bounds on expected revenue for Poisson requests at the mean rates, currency, by name; none where they
        were not asked for.
    """

    method: CurveMethod
    parts: tuple[tuple[IntArray, PriceCurves], ...]
    bounds: dict[str, float]


def network_curves(
    network: Network,
    prices: FloatArray,
    method: CurveMethod = CurveMethod.DECOMPOSITION,
    options: SplitOptions | None = None,
    jobs: int = 1,
    *,
    bounds: bool = True,
) -> NetworkCurves:
    """Solve the leg dynamic programs of a network.

    Parameters
    ----------
    network
        The network.
    prices
        (L,) bid prices that displace, best those of the deterministic program.
    method
        Displacement-adjusted fares by these prices, or fare splits that start from them.
    options
        When the search for fare splits stops.
    jobs
        Components side by side (fare splits).
    bounds
        Whether the bounds for Poisson requests are worked out, which takes two more dynamic programs.
    """
    known = _poisson_bounds(network, prices) if bounds else {}
    if method is CurveMethod.DECOMPOSITION:
        plan = ArrivalPlan.of(network, leg_products(network, prices))
        curves = price_curves(plan, network.remaining)
        return NetworkCurves(method, ((np.arange(network.n_legs), curves),), known)
    pieces = components(network)
    tasks = (delayed(_split_curves)(piece, prices[piece.legs], options or SplitOptions()) for piece in pieces)
    parts = list(zip((piece.legs for piece in pieces), Parallel(n_jobs=jobs)(tasks), strict=True))
    if bounds:
        known["fare_splits"] = float(sum(curves.total.sum() for _, curves in parts))
    return NetworkCurves(method, tuple(parts), known)


def _poisson_bounds(network: Network, prices: FloatArray) -> dict[str, float]:
    found = [poisson_bounds(piece.network, prices[piece.legs]) for piece in components(network)]
    return {
        "decomposition": sum(bound.one_leg for bound in found),
        "legs_apart": sum(bound.legs_apart for bound in found),
        "split_by_price": sum(bound.split for bound in found),
    }


def _split_curves(piece: Component, prices: FloatArray, options: SplitOptions) -> PriceCurves:
    """Fare splits of one component, in stages between the readings of its booking curves."""
    network = piece.network
    products = leg_products(network, prices)
    plan = ArrivalPlan.of(network, products)
    stages = []
    for segment in plan.segments():
        busiest = float(np.bincount(plan.leg, weights=segment.requests).max(initial=0.0))
        steps = max(1, int(np.ceil(busiest / REQUESTS_PER_STEP)))
        stages.append(Stage(segment.requests / steps, steps))
    start = split_shares(network, products, prices)
    split = best_split(network.remaining, plan.leg, products.product, start, stages, options)
    return price_curves(plan, network.remaining, share=split.share)


def curves_table(network: Network, curves: NetworkCurves) -> pd.DataFrame:
    """Label the curves as the schema ``price_curves`` declares: by leg, days falling, seats rising."""
    found = [_stretches(legs, part) for legs, part in curves.parts]
    stretches = np.concatenate([part for part, _ in found]) if found else np.zeros(0, dtype=STRETCH)
    prices = np.concatenate([np.zeros(0), *(values.ravel() for _, values in found)])
    size = [values.size for _, values in found]
    stretches["first"] += np.repeat(np.cumsum(size) - size, [len(part) for part, _ in found])
    stretches = stretches[np.lexsort((-stretches["days"], stretches["leg"]))]
    count = stretches["seats"]
    names = pd.Index(network.legs.name, dtype="str")
    return pd.DataFrame(
        {
            "leg": pd.Categorical.from_codes(np.repeat(stretches["leg"], count), categories=names),
            "days_before": np.repeat(stretches["days"], count),
            "remaining": ranges(np.ones_like(count), count),
            "bid_price": np.maximum(prices[ranges(stretches["first"], count)], 0.0),
        }
    )


def _stretches(legs: IntArray, curves: PriceCurves) -> tuple[np.ndarray, FloatArray]:
    """Rows of the table that stand together, the seats of one leg at one time, and the prices that they point into.

    A leg has a row for its snapshot and for every later day before departure that is published.
    """
    times = np.broadcast_to(curves.days[:, None], (len(curves.days), len(legs)))
    when = np.concatenate([curves.days_now[None], times])
    later = np.concatenate([np.ones((1, len(legs)), dtype=bool), times < curves.days_now])
    row, leg = np.nonzero((when > 0) & later)
    prices = np.concatenate([curves.now[None], curves.value])
    stretches = np.zeros(len(row), dtype=STRETCH)
    stretches["leg"], stretches["days"] = legs[leg], when[row, leg]
    stretches["first"] = row * prices.shape[1] + curves.seat_start[leg]
    stretches["seats"] = np.diff(curves.seat_start)[leg]
    return stretches, prices
