"""EMSR-a and EMSR-b: expected marginal seat revenue, many fares on one leg.

P. P. Belobaba (1987), Air Travel Demand and Airline Seat Inventory Management, PhD thesis, MIT (EMSR-a);
P. P. Belobaba (1989), Application of a probabilistic decision model to airline seat inventory control,
Operations Research 37(2) (EMSR-a); P. P. Belobaba (1992), Optimal vs. heuristic methods for nested seat
allocation, AGIFORS Reservations and Yield Management Study Group (EMSR-b).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd

from heuristics.ladder import Ladder, leg_ladder
from heuristics.littlewood import keeps_seat, littlewood_level, whole_seats
from network.arrays import FloatArray, IntArray
from network.demand import Demand, Family

__all__ = ["JointLevels", "emsr_a", "emsr_b", "joint_levels"]


@dataclass(frozen=True, eq=False)
class JointLevels:
    """EMSR-b on the ladders of many legs; everything is (G,), by step of the ladder.

    Attributes
    ----------
    ladder
        The steps themselves.
    mean_fare
        Fare of this and the better steps of the leg together, weighted by mean demand; 0 where they
        have no demand.
    demand
        Demand of this and the better steps together.
    level
        Seats kept for this and the better steps against those below: real, rising down the ladder, at most
        the leg's limit, and that limit on the lowest step.
    seats
        The same in whole seats: seat k is kept iff the next fare is below ``mean_fare P(demand >= k)``.
    """

    ladder: Ladder
    mean_fare: FloatArray
    demand: Demand
    level: FloatArray
    seats: FloatArray


def emsr_a(fares: npt.ArrayLike, demand: Demand, family: str = "auto") -> FloatArray:
    """EMSR-a: the seats kept against a class are the sum of what each better class alone would keep.

    ``y_j = sum over i <= j of Q_i(1 - f_(j+1) / f_i)`` with Q_i the quantile of class i: Littlewood's level of each
    better class alone.

    Parameters
    ----------
    fares
        (n,) currency, best first, above zero. Classes of equal fare are treated as one.
    demand
        (n,) demand to come.
    family
        Family of the joint demand of classes of equal fare, as in `Demand.of`.

    Returns
    -------
    FloatArray
        (n - 1,) seats kept for classes 1..j against class j + 1; a member of a group of equal fares
        faces what is kept for the classes above the group.

    Raises
    ------
    ValueError
        As `emsr_b`.
    """
    ladder, step = leg_ladder(fares, demand)
    alone = np.bincount(step) == 1
    merged = Demand.of(ladder.mean, np.sqrt(ladder.variance), family)
    first = np.searchsorted(step, np.arange(len(ladder.fare)))
    own = demand.take(first)
    each = Demand(
        merged.mean,
        np.where(alone, own.deviation, merged.deviation),
        np.where(alone, own.family, merged.family).astype(np.int8),
    )
    kept = np.tril(littlewood_level(ladder.fare, ladder.fare[:, None], each), -1).sum(axis=1)
    return _by_class(np.maximum.accumulate(kept), step)


def emsr_b(fares: npt.ArrayLike, demand: Demand, family: str = "auto") -> FloatArray:
    """EMSR-b: the classes above are taken as one, with their joint demand and mean fare.

    ``y_j = Q_(1..j)(1 - f_(j+1) / F_j)`` with ``F_j`` the fare of classes 1..j weighted by mean demand and Q the
    quantile of a demand with their summed mean and variance. Where the next level would be lower than the one
    before, it is raised to it.

    Parameters
    ----------
    fares
        (n,) currency, best first, above zero. Classes of equal fare are treated as one.
    demand
        (n,) demand to come.
    family
        Family of the joint demand, as in `Demand.of`. It is used for the first class too, so it should be
        given whenever the demands' own family was forced.

    Returns
    -------
    FloatArray
        (n - 1,) seats kept for classes 1..j against class j + 1; a member of a group of equal fares
        faces what is kept for the classes above the group.

    Raises
    ------
    ValueError
        If there is no class, a fare is NaN, infinite or not above zero, fares rise, lengths differ or the
        family is unknown.

    Examples
    --------
    >>> demand = Demand.of([15, 40, 50, 55, 120], [15**0.5, 40**0.5, 50**0.5, 55**0.5, 120**0.5])
    >>> emsr_b([100, 60, 40, 35, 15], demand)
    array([ 14.,  54., 102., 166.])
    """
    ladder, step = leg_ladder(fares, demand)
    level = joint_levels(ladder, np.array([np.inf]), family).level
    return _by_class(np.concatenate([[0.0], level[:-1]]), step)


def joint_levels(ladder: Ladder, limit: npt.ArrayLike, family: str = "auto") -> JointLevels:
    """EMSR-b on every leg of a ladder at once.

    Parameters
    ----------
    ladder
        Falling fares and their demand, G steps over L legs.
    limit
        (L,) seats beyond which a level need not be known; infinite for none.
    family
        Family of the joint demand, as in `Demand.of`.

    Raises
    ------
    ValueError
        If a limit is NaN or negative, lengths differ or the family is unknown.
    """
    seats_at_most = np.asarray(limit, dtype=np.float64)
    if seats_at_most.shape != (ladder.n_legs,) or not np.all(seats_at_most >= 0):
        raise ValueError(f"expected a limit of seats for each of {ladder.n_legs} legs")
    leg, last = ladder.leg, ladder.last
    rows = pd.DataFrame({"m": ladder.mean, "v": ladder.variance, "r": ladder.fare * ladder.mean})
    total = rows.groupby(leg, sort=False).cumsum()
    mean, revenue = total["m"].to_numpy(), total["r"].to_numpy()
    demand = Demand.of(mean, np.sqrt(total["v"].to_numpy()), family)
    mean_fare = np.divide(revenue, mean, out=np.zeros_like(mean), where=mean > 0)

    following = np.append(ladder.fare[1:], 0.0)[: len(ladder.fare)]
    most = seats_at_most[leg]
    level = np.where(last, most, 0.0)
    seats = level.copy()
    open_steps = ~last & (mean_fare > following)
    discrete = demand.family < Family.GAMMA
    search = np.flatnonzero(open_steps & discrete)
    joint, fare, below = demand.take(search), mean_fare[search], following[search]
    found = whole_seats(joint.near_quantile(1.0 - below / fare), fare, below, joint, np.arange(search.size))
    level[search] = seats[search] = np.where(found >= np.ceil(most[search]), most[search], found)

    search = np.flatnonzero(open_steps & ~discrete)
    joint, fare, below = demand.take(search), mean_fare[search], following[search]
    full = keeps_seat(fare, below, joint.survivor(most[search]))
    quantile = joint.quantile(1.0 - below / fare)
    level[search] = np.where(full, most[search], np.minimum(quantile, most[search]))
    part = np.flatnonzero(~full)
    seats[search] = most[search]
    seats[search[part]] = whole_seats(level[search[part]], fare[part], below[part], joint, part)
    rising = pd.DataFrame({"level": level, "seats": seats}).groupby(leg, sort=False).cummax()
    return JointLevels(ladder, mean_fare, demand, rising["level"].to_numpy(), rising["seats"].to_numpy())


def _by_class(above: FloatArray, step: IntArray) -> FloatArray:
    """Levels between neighbouring classes from the seats kept against each step."""
    return np.asarray(above[step[1:]])
