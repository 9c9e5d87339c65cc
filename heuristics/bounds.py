"""Upper bounds on the expected revenue of a network, from linear prices and leg dynamic programs.

Let p >= 0 be prices per seat of the legs, P_j the sum of those on the path of product j, and (y)^+ = max(0, y). The
dual of the deterministic program bounds expected revenue for any p, and equals its optimum at its optimal duals::

    g(p) = sum_l p_l c_l + sum_j E[D_j] (f_j - P_j)^+

*Decomposition.* Price the seats of every leg but l, and keep those of l as they are. What remains is the program of
leg l with displacement-adjusted fares::

    B_l = V_l(c_l; f_j - sum_(k != l) p_k) + sum_(k != l) p_k c_k + sum_(j not through l) E[D_j] (f_j - P_j)^+
        = g(p) - s_l,    s_l = p_l c_l + sum_(j through l) E[D_j] (f_j - P_j)^+ - V_l

and s_l, the saving of leg l, is not negative, since pricing the seats of l too gives g(p) (Talluri and van Ryzin 2004,
The Theory and Practice of Revenue Management, section 3.4; Zhang and Adelman 2009, An approximate dynamic programming
approach to network revenue management with customer choice, Transportation Science 43(3), on the least B_l). With
several legs kept of which no two are joined by a product, the program still falls apart, into one for each of them:
the bound is g(p) less the sum of their savings. The inward legs of a hub are such a set.

*Split.* Let every leg decide by itself about a share of the fare, f_j p_l / P_j (equal shares where P_j = 0). The sum
of the leg values is a bound, as for any shares that sum to the fare (Topaloglu 2009, Using Lagrangian relaxation to
compute capacity-dependent bid prices in network revenue management, Operations Research 57(3)). It is not above g(p)
either, because V_l <= p_l c_l + sum_j E[D_j] (r_jl - p_l)^+ and the last terms of a product sum to (f_j - P_j)^+.

What is bounded is the most that any control can earn if requests come one by one at the mean rates, independent of
each other and of the decisions: as Poisson processes (`poisson_bounds`), or at most one a period (`period_bounds`).
Demand that varies more than Poisson demand is not covered, as its early requests foretell the late ones, nor demand
that varies less, of which more can be earned; only g(p) bounds the revenue from any demand of these means. In
`poisson_bounds` each leg counts time from its own departure. Where all products share one curve that is the same
process on every leg; where curves differ, legs of an itinerary that depart hours apart see it shifted by these hours,
and the bounds hold as far as that does not matter.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt
from scipy.sparse import csr_array

from heuristics.arrivals import ArrivalPlan
from heuristics.displacement import LegProducts, leg_products
from heuristics.dynamic import REQUESTS_PER_STEP, price_curves, run_periods
from network.arrays import BoolArray, FloatArray
from network.model import Network
from network.runs import SortedRuns

__all__ = ["RevenueBounds", "period_bounds", "poisson_bounds", "split_shares"]


@dataclass(frozen=True, eq=False)
class RevenueBounds:
    """Upper bounds on expected revenue, currency; those of separate components add up.

    Attributes
    ----------
    linear
        g(p).
    adjusted_value
        (L,) V_l with displacement-adjusted fares.
    saving
        (L,) s_l, by how much the decomposition bound of the leg lies below ``linear``.
    apart
        (L,) whether the leg belongs to the chosen set of legs that no product joins.
    split_value
        (L,) V_l with split fares.
    """

    linear: float
    adjusted_value: FloatArray
    saving: FloatArray
    apart: BoolArray
    split_value: FloatArray

    @property
    def by_leg(self) -> FloatArray:
        """(L,) B_l, the decomposition bound of every leg."""
        return self.linear - self.saving

    @property
    def one_leg(self) -> float:
        """The least decomposition bound of a single leg."""
        return float(self.by_leg.min(initial=self.linear))

    @property
    def legs_apart(self) -> float:
        """The decomposition bound with all legs of ``apart`` kept."""
        return self.linear - float(self.saving[self.apart].sum())

    @property
    def split(self) -> float:
        """The sum of the leg values with split fares."""
        return float(self.split_value.sum())

    @property
    def least(self) -> float:
        """The least of all."""
        return min(self.one_leg, self.legs_apart, self.split)


def poisson_bounds(
    network: Network, bid_prices: npt.ArrayLike, requests_per_step: float = REQUESTS_PER_STEP
) -> RevenueBounds:
    """Bound the expected revenue from requests that come as Poisson processes.

    Parameters
    ----------
    network
        Seats left, mean demand to come and booking curves; the families of demand do not matter.
    bid_prices
        (L,) currency per seat, not negative; optimal duals of the deterministic program make ``linear`` its optimum.
    requests_per_step
        As in `price_curves`, whose error the bounds share.

    Raises
    ------
    ValueError
        If there is not one finite bid price for every leg, one is negative, or the step is out of its range.
    """

    def leg_values(products: LegProducts) -> FloatArray:
        plan = ArrivalPlan.of(network, products, days=(0,))
        return price_curves(plan, network.remaining, requests_per_step).total

    return _bounds(network, bid_prices, np.where(_sellable(network), network.demand.expected, 0.0), leg_values)


def period_bounds(network: Network, bid_prices: npt.ArrayLike, periods: FloatArray) -> RevenueBounds:
    """Bound the expected revenue from requests of which at most one comes a period.

    Parameters
    ----------
    network
        Seats left, fares and paths; its demand is not used.
    bid_prices
        As in `poisson_bounds`.
    periods
        (T, J) probability of a request for every product, the last period before departure first.

    Raises
    ------
    ValueError
        If bid prices are wrong as in `poisson_bounds`, there is not one probability for every product in each period,
        one is negative, or those of a period sum to more than one.
    """
    if periods.shape[1:] != (network.n_products,):
        raise ValueError(f"expected probabilities of {network.n_products} products by period, got {periods.shape}")
    if not np.all(periods >= 0) or np.any(periods.sum(axis=1) > 1 + 1e-9):
        raise ValueError("probabilities of a period must not be negative nor sum to more than one")
    chance = np.where(_sellable(network), periods, 0.0)

    def leg_values(products: LegProducts) -> FloatArray:
        fares = SortedRuns(products.adjusted_fare, products.leg_start)
        line, value = run_periods(fares, network.remaining, (row[products.product] for row in chance))
        return line.totals(value)

    return _bounds(network, bid_prices, chance.sum(axis=0), leg_values)


def split_shares(network: Network, products: LegProducts, bid_prices: npt.ArrayLike) -> FloatArray:
    """Split fares over the legs of their paths in proportion to bid prices.

    Parameters
    ----------
    network
        Fares and paths.
    products
        Rows that want a share.
    bid_prices
        (L,) currency per seat, not negative.

    Returns
    -------
    ndarray
        (P,) currency; the rows of every product sum to its fare, in equal parts where its path price is 0.
    """
    price = np.asarray(bid_prices, dtype=np.float64)
    path_price = network.displacement(price)[products.product]
    length = np.diff(network.path_start)[network.product_itinerary[products.product]]
    part = np.divide(price[products.leg], path_price, out=1.0 / length, where=path_price > 0)
    return np.asarray(network.fare[products.product] * part)


def _bounds(
    network: Network,
    bid_prices: npt.ArrayLike,
    expected: FloatArray,
    leg_values: Callable[[LegProducts], FloatArray],
) -> RevenueBounds:
    """Bound the revenue from (J,) expected requests, given what solves the programs of all legs."""
    price = np.asarray(bid_prices, dtype=np.float64)
    products = leg_products(network, price)
    adjusted = leg_values(products)
    excess = expected * np.maximum(network.fare - network.displacement(price), 0.0)
    saving = price * network.remaining + network.leg_load(excess) - adjusted
    return RevenueBounds(
        linear=float(price @ network.remaining + excess.sum()),
        adjusted_value=adjusted,
        saving=saving,
        apart=_legs_apart(network, expected, saving),
        split_value=leg_values(_with_fares(products, split_shares(network, products, price))),
    )


def _sellable(network: Network) -> BoolArray:
    """(J,) whether every leg of the product has a seat left."""
    return np.asarray(network.path_remaining[network.product_itinerary] > 0)


def _with_fares(products: LegProducts, fare: FloatArray) -> LegProducts:
    """Rank the same rows by other fares, (P,)."""
    order = np.lexsort((-fare, products.leg))
    return replace(products, product=products.product[order], adjusted_fare=fare[order])


def _legs_apart(network: Network, expected: FloatArray, saving: FloatArray) -> BoolArray:
    """Choose legs with large savings of which no two are joined by a product, (L,).

    They are taken greedily, in the order of their saving less the savings of all legs joined to them, unless one leg
    alone saves more.
    """
    asked = np.bincount(network.product_itinerary, weights=expected, minlength=network.n_itineraries) > 0
    used = network.incidence[:, np.flatnonzero(asked)]
    pairs = (used @ used.T).tocoo()
    row, column = pairs.row[pairs.row != pairs.col], pairs.col[pairs.row != pairs.col]
    joined = csr_array((np.ones(len(row)), (row, column)), shape=pairs.shape)
    worth = np.maximum(saving, 0.0)
    apart = np.zeros(network.n_legs, dtype=bool)
    for leg in np.argsort(joined @ worth - worth, kind="stable").tolist():
        neighbours = joined.indices[joined.indptr[leg] : joined.indptr[leg + 1]]
        apart[leg] = worth[leg] > 0 and not apart[neighbours].any()
    if worth[apart].sum() < worth.max(initial=0.0):
        apart = np.arange(network.n_legs) == np.argmax(worth)
    return apart
