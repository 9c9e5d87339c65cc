"""Exact values of small networks, state by state, and plain programs of single legs.

At most one request arrives a period. Periods count backwards: row 0 is the last before departure. Nothing of the
heuristics is used here but the order of the rows of their leg products.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt
from scipy.optimize import linprog
from scipy.sparse import csr_array

from heuristics.displacement import LegProducts
from network import BookingCurves, Network
from network.arrays import FloatArray
from tests.networks import Plan

__all__ = [
    "Case",
    "Readings",
    "departing",
    "drawn_case",
    "least_split_bound",
    "leg_trail",
    "leg_trails",
    "network_value",
    "policy_revenue",
    "rows_of",
]

Readings = dict[float, float]
"""Days before departure and the share of demand that has come by then."""


@dataclass(frozen=True, eq=False)
class Case:
    """A small network and (T, J) chances of a request for every product, the last period first."""

    network: Network
    periods: FloatArray


def drawn_case(seed: int) -> Case:
    """Draw two or three legs in a row, locals and through journeys in two classes, and up to 40 periods."""
    rng = np.random.default_rng(seed)
    n_legs = int(rng.integers(2, 4))
    capacity = rng.integers(2, 6, n_legs)
    every = [tuple(range(a, b)) for a in range(n_legs) for b in range(a + 1, n_legs + 1)]
    through = [path for path in every if len(path) > 1]
    paths = [path for path in every if len(path) == 1 or len(through) == 1 or rng.random() < 0.8]
    local = rng.uniform(50.0, 150.0, n_legs)
    top = np.array([sum(local[list(path)]) * rng.uniform(0.6, 1.0) ** (len(path) > 1) for path in paths])
    fare = np.round(np.outer(top, [1.0, rng.uniform(0.3, 0.7)]), 2)
    wanted = rng.uniform(0.3, 1.0, fare.shape) * [0.6, 1.0]
    load = np.array([wanted[[leg in path for path in paths]].sum() for leg in range(n_legs)])
    mean = wanted * float(rng.uniform(0.9, 2.0) * (capacity / load).mean())
    periods = int(np.clip(np.ceil(mean.sum() / 0.7), 10, 40))
    # The high class comes late and the low one early, by chance more or less so.
    to_go = (np.arange(periods) + 0.5) / periods
    late, early = rng.uniform(0.0, 3.0, 2)
    pattern = np.column_stack([np.exp(-late * to_go), np.exp(early * to_go)])
    chance = (mean * (pattern / pattern.sum(axis=0))[:, None, :]).reshape(periods, -1)
    chance *= min(1.0, 1.0 / chance.sum(axis=1).max())
    mean = chance.sum(axis=0).reshape(fare.shape)
    products = [tuple(zip(f, m, np.sqrt(m), strict=True)) for f, m in zip(fare.tolist(), mean.tolist(), strict=True)]
    return Case(Plan(tuple(capacity.tolist()), tuple(paths), tuple(products), "poisson").network(), chance)


def _moves(network: Network) -> list[tuple[tuple[slice, ...], tuple[slice, ...], list[int]]]:
    """States in which each product can be sold, the states that this leads to, and its path."""
    moves = []
    for itinerary in network.product_itinerary:
        path = network.path_leg[network.path_start[itinerary] : network.path_start[itinerary + 1]].tolist()
        before = tuple(slice(1, None) if leg in path else slice(None) for leg in range(network.n_legs))
        after = tuple(slice(None, -1) if leg in path else slice(None) for leg in range(network.n_legs))
        moves.append((before, after, path))
    return moves


def network_value(case: Case) -> FloatArray:
    """Return the best expected revenue of every number of seats, an axis a leg.

    ``V_(k+1)(x) = V_k(x) + sum_j p_j max(0, f_j - V_k(x) + V_k(x - A_j))``, the sum over products with seats left.
    """
    network = case.network
    value = np.zeros(tuple(network.remaining + 1))
    moves = _moves(network)
    for chances in case.periods:
        earlier = value.copy()
        for (before, after, _), fare, chance in zip(moves, network.fare, chances, strict=True):
            earlier[before] += chance * np.maximum(fare - value[before] + value[after], 0.0)
        value = earlier
    return value


def policy_revenue(case: Case, trails: Sequence[FloatArray]) -> float:
    """Expected revenue of accepting every fare that reaches the sum of the seat values of its legs.

    Parameters
    ----------
    case
        The network and its requests.
    trails
        For every leg (T + 1, seats + 1) values with k periods to go and x seats left.
    """
    network = case.network
    revenue = np.zeros(tuple(network.remaining + 1))
    moves = _moves(network)
    for k, chances in enumerate(case.periods):
        earlier = revenue.copy()
        for (before, after, path), fare, chance in zip(moves, network.fare, chances, strict=True):
            price = np.zeros(())
            for leg in path:
                along = np.diff(trails[leg][k]).reshape([-1 if axis == leg else 1 for axis in range(network.n_legs)])
                price = price + along
            accepted = fare >= price - 1e-9 * fare
            earlier[before] += chance * accepted * (fare - revenue[before] + revenue[after])
        revenue = earlier
    return float(revenue.flat[-1])


def leg_trail(seats: int, fare: npt.ArrayLike, chance: FloatArray) -> FloatArray:
    """Solve the program of one leg by plain recursion.

    Parameters
    ----------
    seats
        Seats.
    fare
        (P,) or (T, P) currency.
    chance
        (T, P) chances of a request, the last period first.

    Returns
    -------
    ndarray
        (T + 1, seats + 1) value with k periods to go and x seats left.
    """
    trail = np.zeros((len(chance) + 1, seats + 1))
    for k, (r, p) in enumerate(zip(np.broadcast_to(fare, chance.shape), chance, strict=True)):
        worth = np.maximum(r[:, None] - np.diff(trail[k]), 0.0)
        trail[k + 1, 1:] = trail[k, 1:] + p @ worth
        trail[k + 1, 0] = trail[k, 0]
    return trail


def leg_trails(network: Network, products: LegProducts, fare: npt.ArrayLike, periods: FloatArray) -> list[FloatArray]:
    """`leg_trail` of every leg, given (P,) or (T, P) fares of the leg products."""
    chance = periods[:, products.product]
    fares = np.broadcast_to(fare, chance.shape)
    rows = [rows_of(products, leg) for leg in range(network.n_legs)]
    return [leg_trail(int(network.remaining[leg]), fares[:, r], chance[:, r]) for leg, r in enumerate(rows)]


def least_split_bound(case: Case, products: LegProducts) -> float:
    """Return the least sum of leg values that any shares reach, by a linear program solved by scipy's HiGHS.

    Variables are the shares r_jl(k), the values V_l(k, x) and the gains g_jl(k, x) >= 0 of each request; minimised is
    ``sum_l V_l(T, c_l)`` subject to ``g >= r - V(k, x) + V(k, x - 1)``, ``V(k + 1, x) = V(k, x) + sum_j p_j(k) g``
    and shares that sum to fares. V of no seats or no periods to go is nothing and has no variable.
    """
    network, (periods, count) = case.network, (len(case.periods), len(products.product))
    share = np.arange(periods * count).reshape(periods, count)
    size = share.size
    rows: list[tuple[list[int], list[float], float]] = []
    limits: list[tuple[list[int], list[float], float]] = []
    target: list[int] = []
    for leg, seats in enumerate(network.remaining.tolist()):
        value = np.full((periods + 1, seats + 1), -1)
        value[1:, 1:] = size + np.arange(periods * seats).reshape(periods, seats)
        size += periods * seats
        own = np.arange(count)[rows_of(products, leg)]
        gain = size + np.arange(periods * len(own) * seats).reshape(periods, len(own), seats)
        size += gain.size
        target.append(value[periods, seats])
        for k, x in np.ndindex(periods, seats):
            chances = case.periods[k, products.product[own]].tolist()
            left = [value[k + 1, x + 1], value[k, x + 1], *gain[k, :, x]]
            rows.append((left, [1.0, -1.0, *(-chance for chance in chances)], 0.0))
            for i, row in enumerate(own):
                least = [share[k, row], value[k, x + 1], value[k, x], gain[k, i, x]]
                limits.append((least, [1.0, -1.0, 1.0, -1.0], 0.0))
    for k, j in np.ndindex(periods, network.n_products):
        mine = np.flatnonzero(products.product == j)
        rows.append((share[k, mine].tolist(), [1.0] * len(mine), float(network.fare[j])))
    cost, lower = np.zeros(size), np.zeros(size)
    cost[target] = 1.0
    lower[: share.size] = -np.inf
    bounds = np.column_stack([lower, np.full(size, np.inf)])
    # The stubs of scipy know no sparse matrices here.
    result = linprog(cost, *_constraints(limits, size), *_constraints(rows, size), bounds)  # type: ignore[call-overload]
    assert result.status == 0, result.message
    return float(result.fun)


def _constraints(rows: list[tuple[list[int], list[float], float]], size: int) -> tuple[csr_array, FloatArray]:
    """Matrix and right sides from columns and factors a row; columns below zero are left out."""
    row = np.repeat(np.arange(len(rows)), [len(columns) for columns, _, _ in rows])
    column = np.concatenate([columns for columns, _, _ in rows])
    factor = np.concatenate([factors for _, factors, _ in rows])
    kept = column >= 0
    matrix = csr_array((factor[kept], (row[kept], column[kept])), shape=(len(rows), size))
    return matrix, np.array([side for _, _, side in rows])


def rows_of(products: LegProducts, leg: int) -> slice:
    """Rows of a leg."""
    return slice(int(products.leg_start[leg]), int(products.leg_start[leg + 1]))


def departing(network: Network, days: npt.ArrayLike, curve: npt.ArrayLike, curves: Sequence[Readings]) -> Network:
    """Return the network with legs that depart some days after its snapshot, and with booking curves.

    Parameters
    ----------
    network
        Any network.
    days
        Days from the snapshot to departure, for every leg or one for all; whole minutes count.
    curve
        (J,) booking curve of every product, or one for all; -1 for none.
    curves
        Readings of each curve, days falling.
    """
    minutes = np.round(np.broadcast_to(days, network.n_legs) * 1440.0).astype(np.int64)
    departs = np.datetime64(network.as_of.replace(tzinfo=None), "m") + minutes.astype("timedelta64[m]")
    return replace(
        network,
        legs=replace(network.legs, departs=departs, arrives=departs + np.timedelta64(60, "m")),
        curve=np.broadcast_to(curve, network.n_products).astype(np.int64),
        curves=BookingCurves(
            np.array([f"curve {i}" for i in range(len(curves))], dtype=object),
            np.concatenate([[0], np.cumsum([len(readings) for readings in curves], dtype=np.int64)]),
            np.array([day for readings in curves for day in readings], dtype=np.float64),
            np.array([share for readings in curves for share in readings.values()], dtype=np.float64),
        ),
    )
