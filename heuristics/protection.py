"""Displacement-adjusted EMSR-b: protection levels, booking limits and seat values of all legs at once.

On every leg the products are ranked by displacement-adjusted fare, cut into virtual classes if so wished, and taken
through EMSR-b. The same levels give the value of each remaining seat: with J(x) the lowest step open when x
seats remain, ``M(x) = min(f_J, F_J P(D_(1..J) >= x))``, so that a product with a positive adjusted fare is
open exactly when that fare is at least ``M(x)``. With virtual classes this holds for the mean fare of the class,
whose members are opened and closed together.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from heuristics.displacement import LegProducts
from heuristics.emsr import JointLevels, joint_levels
from heuristics.ladder import Ladder
from heuristics.virtual import virtual_classes
from network.arrays import FloatArray, IntArray
from network.demand import Demand, Family
from network.errors import SettingError

__all__ = ["LegControl", "LegProtection", "leg_protection", "seat_value_curve", "seat_values"]


@dataclass(frozen=True)
class LegControl:
    """Options of leg control.

    Attributes
    ----------
    family
        Family of joint demand, as in `Demand.of`.
    virtual_classes
        Greatest number of virtual classes a leg; None ranks every product by itself.

    Raises
    ------
    SettingError
        If the family is unknown or the number of classes is below one.
    """

    family: str = "auto"
    virtual_classes: int | None = None

    def __post_init__(self) -> None:
        """Check the limits."""
        known = ["auto", *(family.word for family in Family)]
        if self.family not in known:
            raise SettingError(f"unknown demand family {self.family!r}; choose {', '.join(known)}")
        if self.virtual_classes is not None and self.virtual_classes < 1:
            raise SettingError(f"the number of virtual classes must be at least 1, got {self.virtual_classes}")


@dataclass(frozen=True, eq=False)
class LegProtection:
    """Leg control of L legs; flat arrays stand beside the P rows of the leg products.

    Attributes
    ----------
    products
        The ranked products of every leg.
    remaining
        (L,) seats still for sale.
    step
        (P,) step of the ladder in ``joint`` that the row stands on, or -1 where its adjusted fare is nothing
        or less. Rows on one step (equal fares or one virtual class) share every limit.
    joint
        EMSR-b on those steps.
    protection
        (P,) seats kept for this and the better steps against those below: real, between 0 and the remaining
        seats, which the lowest step keeps whole.
    booking_limit
        (P,) whole seats that the row may still sell: the remaining ones less those kept for better steps.
    seat_value
        (L,) currency: value of the last remaining seat; of the first where none remains.
    """

    products: LegProducts
    remaining: IntArray
    step: IntArray
    joint: JointLevels
    protection: FloatArray
    booking_limit: npt.NDArray[np.int64]
    seat_value: FloatArray

    @property
    def rank(self) -> IntArray:
        """(P,) place of the row on its leg, 1 the best."""
        return self.products.rank

    @property
    def open(self) -> npt.NDArray[np.bool_]:
        """(P,) whether the row may sell one more seat."""
        return self.booking_limit > 0


def leg_protection(
    products: LegProducts,
    demand: Demand,
    remaining: npt.ArrayLike,
    options: LegControl | None = None,
    reachable: npt.ArrayLike | None = None,
) -> LegProtection:
    """Protect seats on every leg by EMSR-b over displacement-adjusted fares.

    Parameters
    ----------
    products
        From `leg_products`.
    demand
        (J,) demand to come of all products of the network.
    remaining
        (L,) whole seats still for sale.
    options
        Family of joint demand and number of virtual classes.
    reachable
        (P,) whether the demand of a row can come true; where not, because another leg of its path has no seats,
        nothing is kept for it. All of it if None.

    Raises
    ------
    ValueError
        If lengths differ or remaining seats are negative or not whole.
    """
    options = options or LegControl()
    seats = np.asarray(remaining)
    if seats.shape != (products.n_legs,) or np.any(seats < 0) or np.any(seats != np.floor(seats)):
        raise ValueError(f"expected whole remaining seats, not negative, for each of {products.n_legs} legs")
    seats = seats.astype(np.int64)
    weight = np.ones(len(products.product)) if reachable is None else np.asarray(reachable, dtype=np.float64)
    ladder, step = _ladder(products, demand, weight)
    if options.virtual_classes is not None:
        ladder, class_of_step = virtual_classes(ladder, options.virtual_classes)
        step[step >= 0] = class_of_step[step[step >= 0]]
    # With no seat left the value of the first is still wanted.
    joint = joint_levels(ladder, np.maximum(seats, 1), options.family)

    left = seats[ladder.leg]
    kept = np.minimum(joint.level, left)
    kept[ladder.last] = left[ladder.last]
    above = np.append(0.0, joint.seats)[:-1]
    above[ladder.leg_start[:-1][np.diff(ladder.leg_start) > 0]] = 0.0
    limit = np.maximum(left - above, 0.0).astype(np.int64)
    on_ladder = step >= 0
    protection = seats[products.leg].astype(np.float64)
    protection[on_ladder] = kept[step[on_ladder]]
    booking_limit = np.zeros(len(step), dtype=np.int64)
    booking_limit[on_ladder] = limit[step[on_ladder]]
    value = seat_values(joint, np.arange(products.n_legs), np.maximum(seats, 1))
    return LegProtection(products, seats, step, joint, protection, booking_limit, value)


def seat_values(joint: JointLevels, leg: IntArray, x: IntArray) -> FloatArray:
    """Value of seat ``x[i]`` of leg ``leg[i]``: ``M(x) = min(f_J, F_J P(D_(1..J) >= x))``, (m,) currency.

    J is the lowest step that keeps fewer than x seats above it. A leg without demand gives 0.

    Parameters
    ----------
    joint
        EMSR-b levels.
    leg, x
        (m,) legs, and seats from 1 up to the limit that the levels were made for.
    """
    start = joint.ladder.leg_start
    # One rising key over all legs lets a single search find each J.
    base = int(max(np.max(joint.seats, initial=0), np.max(x, initial=0))) + 2
    key = joint.ladder.leg * base + joint.seats.astype(np.int64)
    j = np.minimum(np.searchsorted(key, leg * base + x), start[leg + 1] - 1)
    stands = start[leg + 1] > start[leg]
    value = np.zeros(len(leg))
    j, x = j[stands], x[stands]
    value[stands] = np.minimum(joint.ladder.fare[j], joint.mean_fare[j] * joint.demand.survivor(x, j))
    return value


def seat_value_curve(protection: LegProtection, leg: int) -> FloatArray:
    """Value of each remaining seat 1..c of a leg, (c,) currency, falling.

    Raises
    ------
    ValueError
        If there is no such leg.
    """
    if not 0 <= leg < protection.products.n_legs:
        raise ValueError(f"no leg {leg} among {protection.products.n_legs}")
    x = np.arange(1, int(protection.remaining[leg]) + 1)
    return seat_values(protection.joint, np.full(x.size, leg), x)


def _ladder(products: LegProducts, demand: Demand, weight: FloatArray) -> tuple[Ladder, IntArray]:
    """Ladder of positive adjusted fares, a step for each group of equal ones, and (P,) the step or -1.

    A step's fare is the lowest of its group, so that all its members reach what it reaches.
    """
    if products.product.size and int(products.product.max()) >= len(demand):
        raise ValueError(f"demand has {len(demand)} products, leg products more")
    group, n_legs = products.group, products.n_legs
    final = np.flatnonzero(np.diff(group, append=-1) != 0)
    fare, leg = products.adjusted_fare[final], products.leg[final]
    worth = fare > products.tolerance[leg]
    step = np.where(worth, np.cumsum(worth) - 1, -1)[group]
    held = step >= 0
    stands, product = step[held], products.product[held]
    n = int(np.count_nonzero(worth))
    mean = np.bincount(stands, weights=weight[held] * demand.mean[product], minlength=n).astype(np.float64)
    variance = np.bincount(stands, weights=weight[held] * demand.variance[product], minlength=n).astype(np.float64)
    leg_start = np.searchsorted(leg[worth], np.arange(n_legs + 1))
    return Ladder(leg_start, fare[worth], mean, variance), step
