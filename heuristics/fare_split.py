"""Fare splits: the fare of a through product divided over its legs so that the legs together promise least.

Let the legs decide by themselves, each about its share r_jl(t) of the fare of product j, with shares of one product
summing to its fare. Whatever the shares, the sum of the leg values bounds the network's expected revenue from above
(the Lagrangian relaxation of Topaloglu, Operations Research 57, 2009: the shares are its multipliers). The best shares
make the bound least, and they are better displacement-adjusted fares than any one linear program gives, because they
may change with time.

The bound is convex in the shares and almost everywhere differentiable: its slope in r_jl(t) is the expected number of
requests for j that leg l would accept at t, found by running the chance of every seat being the last one left
forward in time. It is minimised by limited-memory BFGS (scipy), which may stop short where the slope jumps, and then
begins again at the best shares met; the bound reported is theirs.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.optimize import minimize

from heuristics.dynamic import SeatLine
from heuristics.requests import FarePlaces, Requests
from network.arrays import FloatArray, IntArray
from network.runs import SortedRuns

__all__ = ["FareSplit", "SplitOptions", "Stage", "best_split", "split_bound"]


@dataclass(frozen=True, eq=False)
class Stage:
    """A stretch of time within which shares stay the same.

    Attributes
    ----------
    requests
        (P,) expected requests of every leg product row in one step.
    steps
        Equal steps of the stage; in each at most one request arrives a leg.
    """

    requests: FloatArray
    steps: int


@dataclass(frozen=True)
class SplitOptions:
    """When to stop.

    Attributes
    ----------
    iterations
        Most iterations, those after new beginnings included.
    tolerance
        Share of the bound; an iteration that lowers it by less ends a search, and a search that does ends all.
    """

    iterations: int = 60
    tolerance: float = 1e-6


@dataclass(frozen=True, eq=False)
class FareSplit:
    """The best shares met.

    Attributes
    ----------
    share
        (K, P) currency: share of its leg in the fare of every row's product, by stage.
    bound
        Sum of the leg values, an upper bound on expected revenue, currency.
    start_bound
        The same for the shares it began with.
    evaluations
        Evaluations of the bound.
    message
        Why it stopped.
    """

    share: FloatArray
    bound: float
    start_bound: float
    evaluations: int
    message: str


def split_bound(seats: IntArray, leg: IntArray, share: FloatArray, stages: Sequence[Stage]) -> tuple[float, FloatArray]:
    """Evaluate the bound of given shares, and its slope.

    Parameters
    ----------
    seats
        (L,) seats.
    leg
        (P,) leg of every row, rising.
    share
        (K, P) shares by stage; they may be negative.
    stages
        K stages, the last before departure first.

    Returns
    -------
    bound, slope
        Sum of the leg values, and (K, P) expected accepted requests of every row and stage.
    """
    line = SeatLine(seats)
    leg_start = np.searchsorted(leg, np.arange(len(seats) + 1))
    value: FloatArray = np.zeros(len(line))
    trail: list[list[tuple[FloatArray, FloatArray]]] = []
    for stage, shares in zip(stages, share, strict=True):
        order = np.lexsort((-shares, leg))
        requests = Requests(FarePlaces(SortedRuns(shares[order], leg_start), line.leg), stage.requests[order])
        steps = []
        for _ in range(stage.steps):
            gain, above = requests.gain(value)
            steps.append((value, above))
            value = value + line.fall(gain)
        trail.append(steps)
    slope = np.zeros_like(share)
    # chance[x]: that seat x is among those left, run forwards in time from all seats left.
    chance: FloatArray = np.ones(len(line))
    last = np.zeros(len(line), dtype=bool)
    last[line.start[1:][seats > 0] - 1] = True
    end = line.start[1:][leg]
    padded_end = len(line)
    for k in range(len(stages) - 1, -1, -1):
        near: IntArray | None = None
        # A share equal to the value of the seat is refused, as in the gains: one policy gives chances and slope.
        just_below = np.nextafter(share[k], -np.inf)
        for earlier, above in reversed(trail[k]):
            near = SortedRuns(earlier, line.start).count_above(just_below, leg, near)
            open_at = np.where(near < end, near, padded_end)
            slope[k] += np.append(chance, 0.0)[open_at]
            following = np.where(last, 0.0, np.append(chance[1:], 0.0))
            chance = chance - above * (chance - following)
        slope[k] *= stages[k].requests
    return float(value.sum()), slope


def best_split(
    seats: IntArray,
    leg: IntArray,
    product: IntArray,
    start: FloatArray,
    stages: Sequence[Stage],
    options: SplitOptions | None = None,
) -> FareSplit:
    """Find shares with a small bound.

    Parameters
    ----------
    seats
        (L,) seats.
    leg, product
        (P,) leg and product of every row, legs rising.
    start
        (P,) or (K, P) shares to begin with; those of one product must sum to its fare.
    stages
        K stages, the last before departure first.
    options
        When to stop.
    """
    options = options or SplitOptions()
    first = np.broadcast_to(start, (len(stages), len(leg))).astype(np.float64)
    count = np.bincount(product)[product]
    movable = np.flatnonzero(count > 1)
    owner = np.unique(product[movable], return_inverse=True)[1]
    size = np.bincount(owner)[owner]
    shape = (len(stages), len(movable))
    scale = float(np.abs(first).max(initial=0.0)) or 1.0
    start_bound, _ = split_bound(seats, leg, first, stages)
    best_bound, best_share, best_move = start_bound, first, np.zeros(shape[0] * shape[1])
    evaluations = 1

    def centred(move: FloatArray) -> FloatArray:
        """Take from every product's rows their mean, so that shares keep their sum."""
        offset = np.arange(shape[0])[:, None] * (int(owner.max(initial=-1)) + 1)
        mean = np.bincount((offset + owner).ravel(), weights=move.ravel(), minlength=1)[(offset + owner)] / size
        return np.asarray(move - mean)

    def evaluate(flat: FloatArray) -> tuple[float, FloatArray]:
        nonlocal best_bound, best_share, best_move, evaluations
        share = first.copy()
        share[:, movable] += scale * centred(flat.reshape(shape))
        bound, slope = split_bound(seats, leg, share, stages)
        evaluations += 1
        if bound < best_bound:
            best_bound, best_share, best_move = bound, share, flat.copy()
        return bound / start_bound, (scale / start_bound * centred(slope[:, movable])).ravel()

    message = "no product has several legs"
    left = options.iterations if len(movable) and start_bound > 0 else 0
    while left > 0:
        before = best_bound
        result = minimize(
            evaluate,
            best_move,
            jac=True,
            method="L-BFGS-B",
            options={"maxiter": left, "ftol": options.tolerance, "gtol": 0.0, "maxcor": 20},
        )
        message = str(result.message)
        left -= max(result.nit, 1)
        if before - best_bound <= options.tolerance * before:
            break
    return FareSplit(best_share, best_bound, start_bound, evaluations, message)
