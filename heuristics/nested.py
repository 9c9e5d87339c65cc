"""Optimal nested protection levels of one leg, low fares before high.

S. L. Brumelle and J. I. McGill (1993), Airline seat allocation with multiple nested fare classes, Operations
Research 41(1). The marginal value of each seat follows class by class.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from heuristics.ladder import TIE, leg_ladder
from network.arrays import FloatArray
from network.demand import Demand

__all__ = ["NestedLevels", "optimal_levels"]


@dataclass(frozen=True, eq=False)
class NestedLevels:
    """The optimum of one leg.

    Attributes
    ----------
    levels
        (n - 1,) seats kept for classes 1..j against class j + 1, in steps of a seat, at most the capacity.
    value
        (capacity + 1,) expected revenue of x seats, x = 0..capacity, in currency.
    """

    levels: FloatArray
    value: FloatArray


def optimal_levels(
    fares: npt.ArrayLike, demand: Demand, capacity: int, step: float = 1.0, family: str = "auto"
) -> NestedLevels:
    """Best nested protection levels, and what each number of seats earns under them.

    With ``y = max{x : f_j < dV_(j-1)(x)}``, the marginal value of seat x to classes 1..j is ``dV_(j-1)(x)`` up to
    y and ``f_j P(D_j >= x - y) + sum over d < x - y of P(D_j = d) dV_(j-1)(x - d)`` beyond.

    Parameters
    ----------
    fares
        (n,) currency, best first, above zero. Classes of equal fare are treated as one.
    demand
        (n,) demand to come.
    capacity
        Seats.
    step
        Fraction of a seat in which demand and seats are counted, one over a whole number. Demand between two
        steps counts as the lower, as everywhere else ``P(D >= k)`` decides on seat k; with discrete
        demand nothing changes below one seat.
    family
        Family of the joint demand of classes of equal fare, as in `Demand.of`.

    Raises
    ------
    ValueError
        If fares or demand are wrong as in `emsr_b`, the capacity is negative, or the step is not one over a
        whole number.

    Examples
    --------
    >>> demand = Demand.of([15, 40, 50, 55, 120], [15**0.5, 40**0.5, 50**0.5, 55**0.5, 120**0.5])
    >>> optimal_levels([100, 60, 40, 35, 15], demand, 350).levels
    array([ 14.,  54., 101., 169.])
    """
    if capacity < 0:
        raise ValueError(f"capacity must not be negative, got {capacity}")
    parts = round(1.0 / step) if step > 0 else 0
    if parts < 1 or abs(parts * step - 1.0) > TIE:
        raise ValueError(f"step must be one over a whole number, got {step}")
    ladder, position = leg_ladder(fares, demand)
    each = demand
    if len(ladder.fare) < len(demand):
        each = Demand.of(ladder.mean, np.sqrt(ladder.variance), family)
    x = np.arange(1, capacity * parts + 1) / parts
    marginal = ladder.fare[0] * each.survivor(x, np.zeros(x.size, dtype=np.intp))
    kept = np.zeros(len(ladder.fare))
    for j in range(1, len(ladder.fare)):
        fare = ladder.fare[j]
        y = int(np.count_nonzero(marginal > fare + TIE * ladder.fare[0]))
        kept[j] = y / parts
        reached = each.survivor(x[: x.size - y], np.full(x.size - y, j))
        if reached.size:
            exactly = np.append(1.0, reached)[:-1] - reached
            waiting = np.convolve(exactly, marginal[y:])[: reached.size]
            marginal = np.append(marginal[:y], fare * reached + waiting)
    value = np.append(0.0, np.cumsum(marginal) / parts)[::parts]
    return NestedLevels(np.asarray(kept[position[1:]]), value)
