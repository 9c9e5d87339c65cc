"""Who asks for what, and when: whole booking horizons drawn from demand and booking curves.

A path is one booking horizon. The number of requests for product j is an outcome of its demand to come, and each of
them falls into the horizon independently by the product's booking curve. For Poisson demand that is the inhomogeneous
Poisson process of the curve; for negative binomial demand it is the same process at a rate that a gamma distribution
draws anew for every path, so that busy products are busy all along. Demand of the other families (normal cut at
zero, gamma) is rounded up or down at random to whole passengers, so that its mean stays; this adds at most a quarter
of a passenger to its variance.

Time runs from the snapshot to the departure of the first leg of the itinerary: at T days before it the share of
the curve that has come is F(T), and a request comes at the day d at which ``F(d) = F(T) + u (1 - F(T))``, u even
between 0 and 1 (the inverse of the curve, straight between readings). Without a curve, or where it leaves nothing
to come, requests come evenly. A first leg that has departed leaves nobody to ask.

Cancellations and no-shows (`legworth.simulation.attendance`) are drawn from streams of their own, so that the same
requests come with and without them. A cancellation is an event of its own in the order of requests, of no product.

Every path has a stream of random numbers of its own, named by seed, part of the network and number of the path. No
outcome depends on how many paths there are, how they are cut into blocks, or who plays them.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from heuristics.arrivals import days_before_departure
from legworth.simulation.attendance import Attendance
from network import Network
from network.arrays import BoolArray, FloatArray, IntArray

__all__ = ["RequestPaths", "draw_requests", "first_departure"]


ATTENDANCE = 1
"""Ends the name of the streams from which cancellations and no-shows are drawn."""

NOTHING_LEFT = 1e-9
"""Share of a curve still to come below which requests come evenly, as in `heuristics.arrivals`."""


@dataclass(frozen=True, eq=False)
class RequestPaths:
    """Requests of P paths in the order in which they come; all of one passenger.

    Attributes
    ----------
    product
        (N, P) product of the n-th request of every path, ``n_products`` beyond the last.
    at
        (N, P) days after the snapshot, rising; infinite beyond the last.
    n_products
        Number of products J.
    returns
        (N, P) row of the request that is cancelled by the n-th event of every path, -1 where that is a request or
        nothing; None if nobody cancels.
    cancelled, absent
        (N, P) whether a request will be cancelled if accepted, and whether its passenger will not turn up if it is
        not; None if neither happens.
    """

    product: IntArray
    at: FloatArray
    n_products: int
    returns: IntArray | None = None
    cancelled: BoolArray | None = None
    absent: BoolArray | None = None

    @classmethod
    def of(
        cls,
        product: IntArray,
        at: FloatArray,
        path: IntArray,
        n_paths: int,
        n_products: int,
        cancels_at: FloatArray | None = None,
        absent: BoolArray | None = None,
    ) -> RequestPaths:
        """Sort requests into paths.

        Parameters
        ----------
        product, at, path
            (m,) product, days after the snapshot and path of every request, in any order. Requests of one
            instant keep their order.
        n_paths, n_products
            Numbers of paths and of products.
        cancels_at, absent
            (m,) instant at which each is cancelled, infinite for never, and whether its passenger stays away.
        """
        several = cancels_at is not None or absent is not None
        gone = np.flatnonzero(np.isfinite(cancels_at)) if cancels_at is not None else np.zeros(0, dtype=np.int64)
        if cancels_at is not None:
            product = np.append(product, np.full(len(gone), n_products))
            at, path = np.append(at, cancels_at[gone]), np.append(path, path[gone])
        order = np.lexsort((at, path))
        owner = path[order]
        count = np.bincount(path, minlength=n_paths)
        place = np.arange(len(owner)) - (np.cumsum(count) - count)[owner]
        shape = (int(count.max(initial=0)), n_paths)
        products, instants = np.full(shape, n_products, dtype=np.int32), np.full(shape, np.inf)
        products[place, owner], instants[place, owner] = product[order], at[order]
        if not several:
            return cls(products, instants, n_products)
        row = np.empty(len(order), dtype=np.int64)
        row[order] = place
        asked = len(product) - len(gone)
        returns, leaves, stays_away = np.full(shape, -1), np.zeros(shape, dtype=bool), np.zeros(shape, dtype=bool)
        returns[row[asked:], path[asked:]] = row[gone]
        leaves[row[gone], path[gone]] = True
        if absent is not None:
            stays_away[row[:asked], path[:asked]] = absent
        return cls(products, instants, n_products, returns, leaves, stays_away)

    def __post_init__(self) -> None:
        if self.product.shape != self.at.shape:
            raise ValueError(f"products {self.product.shape} and instants {self.at.shape} differ in shape")

    @property
    def n_paths(self) -> int:
        """Number of paths P."""
        return int(self.product.shape[1])

    @cached_property
    def real(self) -> BoolArray:
        """(N, P) whether there is a request."""
        return np.asarray(self.product < self.n_products)

    @cached_property
    def demand(self) -> IntArray:
        """(P, J) requests for every product of every path."""
        return self._count(self.product)

    @property
    def demand_present(self) -> IntArray:
        """(P, J) the same, of those only who neither cancel nor stay away."""
        if self.cancelled is None or self.absent is None:
            return self.demand
        return self._count(np.where(self.cancelled | self.absent, self.n_products, self.product))

    @property
    def demand_absent(self) -> IntArray:
        """(P, J) the same, of those only who do not cancel and stay away."""
        if self.cancelled is None or self.absent is None:
            return np.zeros_like(self.demand)
        return self._count(np.where(self.absent & ~self.cancelled, self.product, self.n_products))

    def _count(self, product: IntArray) -> IntArray:
        key = np.arange(self.n_paths) * (self.n_products + 1) + product
        count = np.bincount(key.ravel(), minlength=self.n_paths * (self.n_products + 1))
        return count.reshape(self.n_paths, -1)[:, :-1]


def first_departure(network: Network) -> FloatArray:
    """Days from the snapshot to the departure of the first leg of every itinerary, (I,), 0 where it has departed."""
    return np.asarray(days_before_departure(network)[network.path_leg[network.path_start[:-1]]])


def draw_requests(
    network: Network, paths: IntArray, seed: int, part: int = 0, attendance: Attendance | None = None
) -> RequestPaths:
    """Draw the requests of some paths.

    Parameters
    ----------
    network
        Demand to come, curves and departures.
    paths
        (P,) numbers of the paths, each the name of its random numbers together with seed and part.
    seed
        Seed, not negative.
    part
        Which part of a larger network this is.
    attendance
        Who cancels and who stays away; nobody if left out.
    """
    horizon = first_departure(network)[network.product_itinerary]
    counts, evens = [], []
    for path in np.asarray(paths).tolist():
        rng = np.random.default_rng([seed, part, path])
        outcome = network.demand.sample(rng, 1)[0]
        whole = np.floor(outcome)
        count = (whole + (rng.random(len(outcome)) < outcome - whole)).astype(np.int64)
        count[horizon <= 0] = 0
        counts.append(count)
        evens.append(rng.random(int(count.sum())))
    n_products, n_paths = network.n_products, len(counts)
    product = np.concatenate([np.repeat(np.arange(n_products), count) for count in counts])
    owner = np.repeat(np.arange(n_paths), [int(count.sum()) for count in counts])
    at = horizon[product] - _days(network, product, horizon[product], np.concatenate(evens))
    at = np.maximum(at, 0.0)
    if attendance is None:
        return RequestPaths.of(product, at, owner, n_paths, n_products)
    asked = [int(count.sum()) for count in counts]
    drawn = np.concatenate(
        [
            np.random.default_rng([seed, part, path, ATTENDANCE]).random((number, 3))
            for path, number in zip(np.asarray(paths).tolist(), asked, strict=True)
        ]
    )
    cancelled, absent = (rate[network.product_class[product]] for rate in attendance.rates(network))
    instant = at + drawn[:, 1] * (horizon[product] - at)
    cancels_at = np.where(drawn[:, 0] < cancelled, instant, np.inf)
    return RequestPaths.of(product, at, owner, n_paths, n_products, cancels_at, drawn[:, 2] < absent)


def _days(network: Network, product: IntArray, horizon: FloatArray, even: FloatArray) -> FloatArray:
    """Days before departure, (m,), at which requests come whose even draws are given."""
    days = horizon * (1.0 - even)
    curves = network.curves
    of = network.curve[product]
    for curve in range(len(curves)):
        rows = slice(curves.start[curve], curves.start[curve + 1])
        share = np.maximum.accumulate(curves.share[rows])
        mine = np.flatnonzero(of == curve)
        come = np.interp(horizon[mine], curves.days_before[rows][::-1], share[::-1])
        kept = 1.0 - come > NOTHING_LEFT
        mine, come = mine[kept], come[kept]
        wanted = come + even[mine] * (1.0 - come)
        found = np.interp(wanted, share, curves.days_before[rows])
        days[mine] = np.minimum(found, horizon[mine])
    return days
