"""`Ladder`: the fares of every leg as steps that fall strictly, with the demand on each step.

Fares that are equal stand on one step, so that no result depends on the order of rows.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from network.arrays import FloatArray, IntArray
from network.demand import Demand

__all__ = ["TIE", "Ladder", "leg_ladder", "tie_groups"]


TIE = 1e-9
"""Fares closer than this share of the greatest fare of their leg count as equal."""


@dataclass(frozen=True, eq=False)
class Ladder:
    """Fare steps of L legs, best first, leg after leg.

    Attributes
    ----------
    leg_start
        (L + 1,) steps of leg ``l`` are ``leg_start[l]:leg_start[l + 1]``; a leg may have none.
    fare
        (G,) currency per passenger, above zero, falling within each leg.
    mean, variance
        (G,) demand to come on the step: sums over the products that stand on it.
    """

    leg_start: IntArray
    fare: FloatArray
    mean: FloatArray
    variance: FloatArray

    def __post_init__(self) -> None:
        """Check that the arrays fit together."""
        sizes = {len(self.fare), len(self.mean), len(self.variance), int(self.leg_start[-1])}
        if len(sizes) != 1:
            raise ValueError(f"a ladder's arrays differ in length: {sorted(sizes)}")

    @property
    def n_legs(self) -> int:
        """Number of legs L."""
        return len(self.leg_start) - 1

    @property
    def leg(self) -> IntArray:
        """(G,) leg of every step."""
        return np.repeat(np.arange(self.n_legs), np.diff(self.leg_start))

    @property
    def last(self) -> npt.NDArray[np.bool_]:
        """(G,) whether the step is the lowest of its leg."""
        answer = np.zeros(len(self.fare), dtype=bool)
        answer[self.leg_start[1:][np.diff(self.leg_start) > 0] - 1] = True
        return answer

    def merged(self, step: IntArray, leg_start: IntArray, fare: FloatArray) -> Ladder:
        """Put neighbouring steps together.

        Parameters
        ----------
        step
            (G,) position of each present step on the new ladder, rising.
        leg_start, fare
            Starts and fares of the new ladder.
        """
        return Ladder(leg_start, fare, _total(step, self.mean, len(fare)), _total(step, self.variance, len(fare)))


def tie_groups(fare: FloatArray, tolerance: FloatArray | float, first: npt.NDArray[np.bool_]) -> IntArray:
    """Number the groups of equal fares, 0, 1, ... along sorted rows.

    Parameters
    ----------
    fare
        (P,) falling within each leg.
    tolerance
        Currency; neighbours at most this far apart are equal. Scalar or (P,).
    first
        (P,) whether the row is the first of its leg.
    """
    opens = np.array(first)
    opens[1:] |= -np.diff(fare) > np.broadcast_to(tolerance, fare.shape)[1:]
    return np.cumsum(opens) - 1


def _total(step: IntArray, values: FloatArray, n: int) -> FloatArray:
    """Sum values by step, giving (n,)."""
    return np.bincount(step, weights=values, minlength=n).astype(np.float64)


def leg_ladder(fares: npt.ArrayLike, demand: Demand) -> tuple[Ladder, IntArray]:
    """Ladder of a single leg from its fare classes.

    Parameters
    ----------
    fares
        (n,) currency, best first, above zero.
    demand
        (n,) demand to come.

    Returns
    -------
    tuple
        The ladder, and (n,) the step of each class.

    Raises
    ------
    ValueError
        If there is no class, a fare is NaN, infinite or not above zero, fares rise, or lengths differ.
    """
    fare = np.asarray(fares, dtype=np.float64)
    if fare.ndim != 1 or fare.size == 0 or len(demand) != fare.size:
        raise ValueError(f"expected one fare for each of {len(demand)} demands, got shape {fare.shape}")
    if not np.all(np.isfinite(fare)) or np.any(fare <= 0) or np.any(np.diff(fare) > 0):
        raise ValueError("fares must be finite, above zero and best first")
    first = np.arange(fare.size) == 0
    step = tie_groups(fare, TIE * fare[0], first)
    rows = Ladder(np.array([0, fare.size]), fare, demand.mean, demand.variance)
    last_of_step = np.append(np.flatnonzero(np.diff(step)), fare.size - 1)
    return rows.merged(step, np.array([0, int(step[-1]) + 1]), fare[last_of_step]), step
