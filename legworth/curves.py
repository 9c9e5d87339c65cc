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

__all__ = ["CurveMethod", "NetworkCurves", "curves_table", "network_curves"]


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
        Upper bounds on expected revenue for Poisson requests at the mean rates, currency, by name.
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
    """
    pieces = components(network)
    found = [poisson_bounds(piece.network, prices[piece.legs]) for piece in pieces]
    bounds = {
        "decomposition": sum(bound.one_leg for bound in found),
        "legs_apart": sum(bound.legs_apart for bound in found),
        "split_by_price": sum(bound.split for bound in found),
    }
    if method is CurveMethod.DECOMPOSITION:
        plan = ArrivalPlan.of(network, leg_products(network, prices))
        curves = price_curves(plan, network.remaining)
        return NetworkCurves(method, ((np.arange(network.n_legs), curves),), bounds)
    tasks = (delayed(_split_curves)(piece, prices[piece.legs], options or SplitOptions()) for piece in pieces)
    parts = list(zip((piece.legs for piece in pieces), Parallel(n_jobs=jobs)(tasks), strict=True))
    bounds["fare_splits"] = float(sum(curves.total.sum() for _, curves in parts))
    return NetworkCurves(method, tuple(parts), bounds)


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
    leg, days, seat, price = [], [], [], []
    for legs, part in curves.parts:
        size = np.diff(part.seat_start)
        owner = np.repeat(np.arange(len(legs)), size)
        seats = np.arange(len(owner)) - part.seat_start[owner] + 1
        for when, value in [(part.days_now[owner], part.now)] + [
            (np.full(len(owner), day), value) for day, value in zip(part.days, part.value, strict=True)
        ]:
            earlier = (when > 0) & ((when < part.days_now[owner]) | (value is part.now))
            shown = np.flatnonzero(~np.isnan(value) & earlier)
            leg.append(legs[owner[shown]])
            days.append(when[shown])
            seat.append(seats[shown])
            price.append(value[shown])
    columns = [np.concatenate(parts) if parts else np.zeros(0) for parts in (leg, days, seat, price)]
    order = np.lexsort((columns[2], -columns[1], columns[0]))
    names = pd.Index(network.legs.name, dtype="str")
    return pd.DataFrame(
        {
            "leg": pd.Categorical.from_codes(columns[0][order].astype(np.int64), categories=names),
            "days_before": columns[1][order],
            "remaining": columns[2][order].astype(np.int64),
            "bid_price": np.maximum(columns[3][order], 0.0),
        }
    )
