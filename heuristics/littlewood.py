"""Littlewood's rule: how many seats two fares leave to the better one.

K. Littlewood (1972), Forecasting and control of passenger bookings, AGIFORS Symposium Proceedings 12.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from network.arrays import BoolArray, FloatArray, IntArray
from network.demand import Demand, Family
from network.runs import greatest_seats

__all__ = ["keeps_seat", "littlewood_level", "whole_seats"]


_SAME = 1e-12


def littlewood_level(high_fare: npt.ArrayLike, low_fare: npt.ArrayLike, demand: Demand) -> FloatArray:
    """Protection level of a high fare against a low one that books first.

    Seat k is kept for the high fare as long as the low fare is below what the seat earns by waiting:
    ``f_low < f_high P(D_high >= k)``. The level is the last such k, a real number where the demand is continuous
    and a whole one where it is discrete: the quantile of the demand at ``1 - f_low / f_high``.

    Parameters
    ----------
    high_fare, low_fare
        Currency per passenger, broadcast against the (n,) demands.
    demand
        Demand to come for the high fare, (n,).

    Returns
    -------
    FloatArray
        Seats, of the broadcast shape; 0 where the low fare is not lower, and infinite where it is nothing and
        the demand has no greatest value.

    Raises
    ------
    ValueError
        If a fare is NaN, infinite or negative, a high fare is zero, or the shapes do not fit.

    Examples
    --------
    >>> littlewood_level(225, 159, Demand.of([27.3], [27.3**0.5]))
    array([24.])
    """
    high, low = np.asarray(high_fare, dtype=np.float64), np.asarray(low_fare, dtype=np.float64)
    if not np.all(np.isfinite(high)) or not np.all(np.isfinite(low)) or np.any(low < 0) or np.any(high <= 0):
        raise ValueError("fares must be finite and not negative, the high fare above zero")
    ratio = low / high
    level = demand.quantile(np.maximum(1.0 - ratio, 0.0))
    high, low, at = np.broadcast_arrays(high, low, np.arange(len(demand)))
    discrete = (demand.family[at] < Family.GAMMA) & np.isfinite(level)
    level[discrete] = whole_seats(level[discrete], high[discrete], low[discrete], demand, at[discrete])
    return level


def keeps_seat(high_fare: FloatArray, low_fare: FloatArray, chance: FloatArray) -> npt.NDArray[np.bool_]:
    """Whether ``f_low < f_high P(D >= k)``, the last factor given as ``chance``.

    Two sides that are equal within rounding do not keep the seat: otherwise the order in which figures
    were added up would decide.
    """
    return np.asarray(high_fare * chance > low_fare + _SAME * high_fare)


def whole_seats(
    level: FloatArray, high_fare: FloatArray, low_fare: FloatArray, demand: Demand, index: npt.NDArray[np.intp]
) -> FloatArray:
    """Greatest whole k with ``f_low < f_high P(D >= k)``, 0 if none, from real levels.

    Parameters
    ----------
    level
        (m,) finite figures that the search sets out from, best near the answer.
    high_fare, low_fare
        (m,) currency per passenger.
    demand, index
        Demands, and (m,) the position of the one that each level belongs to.
    """

    def kept(seat: FloatArray, i: IntArray) -> BoolArray:
        return keeps_seat(high_fare[i], low_fare[i], demand.survivor(seat, index[i]))

    return greatest_seats(level, kept)
