"""One price a leg, whoever solved: the last-seat and the next-seat member of all optimal duals.

At whole-number capacities a program has many optimal duals. Given any optimum x, they are exactly the
prices p >= 0 that satisfy complementary slackness with it::

    p_l = 0                                 on every leg with a seat to spare
    low_i <= price of path i <= high_i      for every itinerary i

where low_i is the best value still unsold on i, and high_i the least value sold. (The set does not depend
on which optimum x is used.) Two of its members are published:

last seat
    The duals at capacities a hair below c: the greatest sum of prices over legs with seats. With one leg and two
    classes the price is the c-th greatest of all column values. It is never below f_H P(D_H >= c), and with ample low
    demand it exceeds f_L exactly when that does, so that accepting fares at or above it is Littlewood's rule.
next seat
    The duals at capacities a hair above c: the least sum of prices.

Where several members share that sum, the one with the least sum of squares is taken. It is unique, it does
not depend on names, row order or solver, and it scales with the currency. It also moves continuously with the
values v: for fixed capacities and widths the optimal duals are the solutions of a linear program whose right-hand
side is v, and such solution sets, their extreme sums and their least-square members are Lipschitz continuous in it
(Walkup and Wets 1969; Mangasarian and Shiau 1987). A small change of fares therefore never makes a price jump, nor in
the probabilistic program a small change of demand within its family. In the deterministic program demand is a width,
and a price does jump where the mean demand passes a whole number of seats that matters.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from scipy.optimize import linprog
from scipy.sparse import csr_array, vstack

from lp.implied import implied_bounds, path_upper
from lp.least_squares import least_norm
from lp.problem import SeatProgram
from network.arrays import FloatArray, IntArray
from network.errors import SolverStoppedError

__all__ = ["OptimalDuals", "canonical_prices", "optimal_duals"]

SPARE = 1e-7
"""Seats below which a leg counts as full."""

MONEY = 1000.0
"""The scale of money inside this module, so that absolute tolerances mean the same in every currency."""

ACTIVE = 1e-9


@dataclass(frozen=True, eq=False)
class OptimalDuals:
    """All optimal duals: ``lower <= p <= upper`` and ``low <= rows @ p <= high``, by full legs.

    Attributes
    ----------
    legs
        (F,) positions of the full legs; every other leg has price 0.
    lower, upper
        (F,) bounds, ``upper`` may be infinite on legs without seats.
    rows, low, high
        (R, F) paths over full legs that the bounds alone do not settle, and their limits.
    scale
        Currency per unit of all these figures.
    """

    legs: IntArray
    lower: FloatArray
    upper: FloatArray
    rows: csr_array
    low: FloatArray
    high: FloatArray
    scale: float


def canonical_prices(program: SeatProgram, seats: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return last-seat and next-seat prices, (L,) each, of the program with optimum ``seats``, (K,).

    On a leg without seats the last-seat vector holds the least price that keeps it an optimal dual.

    Raises
    ------
    SolverStoppedError
        If no price satisfies complementary slackness, so that ``seats`` is no optimum.
    """
    duals = optimal_duals(program, seats)
    with_seats = (program.capacity[duals.legs] > 0).astype(np.float64)
    found = []
    for weight in (-with_seats, np.ones(len(duals.legs))):
        prices = np.zeros(len(program.capacity))
        if len(duals.legs):
            face = _extreme_face(duals, weight)
            inside = least_norm(face.rows, face.low, face.high, face.lower, face.upper)
            prices[duals.legs] = np.maximum(inside, 0.0) * duals.scale
        found.append(prices)
    return found[0], found[1]


def optimal_duals(program: SeatProgram, seats: FloatArray) -> OptimalDuals:
    """Describe all optimal duals by complementary slackness with the optimum ``seats``, (K,)."""
    scale = program.scale / MONEY
    low, high = _path_limits(program, seats)
    low, high = low / scale, high / scale
    full = program.capacity - program.load(seats) <= SPARE
    legs = np.flatnonzero(full)
    paths = csr_array(program.transposed[:, legs])
    count = np.diff(paths.indptr)
    lower = np.zeros(len(legs))
    upper = np.full(len(legs), np.inf)
    single = np.flatnonzero(count == 1)
    of_leg = paths.indices[paths.indptr[single]]
    np.maximum.at(lower, of_leg, low[single])
    np.minimum.at(upper, of_leg, high[single])
    several = np.flatnonzero((count > 1) & ((low > 0) | np.isfinite(high)))
    rows, low, high = _merged(csr_array(paths[several]), low[several], high[several])
    return _without_idle_rows(OptimalDuals(legs, lower, np.maximum(upper, lower), rows, low, high, scale))


def _path_limits(program: SeatProgram, seats: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Best value unsold (0 if none) and least value sold (infinite if none) on every itinerary."""
    columns = program.columns
    low = np.zeros(program.network.n_itineraries)
    high = np.full(program.network.n_itineraries, np.inf)
    some = np.flatnonzero(np.diff(columns.start) > 0)
    begin = columns.start[:-1][some]
    if len(some):
        unsold = np.where(seats < columns.width, columns.value, 0.0)
        sold = np.where(seats > 0, columns.value, np.inf)
        low[some] = np.maximum.reduceat(unsold, begin)
        high[some] = np.minimum.reduceat(sold, begin)
    crossed = low > high
    middle = 0.5 * (low[crossed] + high[crossed])
    low[crossed], high[crossed] = middle, middle
    return low, high


def _merged(rows: csr_array, low: FloatArray, high: FloatArray) -> tuple[csr_array, FloatArray, FloatArray]:
    """Make one row of all rows that run over the same full legs."""
    if rows.shape[0] == 0:
        return rows, low, high
    rows.sort_indices()
    count = np.diff(rows.indptr)
    key = np.full((rows.shape[0], int(count.max())), -1, dtype=np.int64)
    within = np.arange(rows.nnz) - np.repeat(rows.indptr[:-1], count)
    key[np.repeat(np.arange(rows.shape[0]), count), within] = rows.indices
    _, first, group = np.unique(key, axis=0, return_index=True, return_inverse=True)
    merged_low, merged_high = np.zeros(len(first)), np.full(len(first), np.inf)
    np.maximum.at(merged_low, group.ravel(), low)
    np.minimum.at(merged_high, group.ravel(), high)
    return csr_array(rows[first]), merged_low, np.maximum(merged_high, merged_low)


def _without_idle_rows(duals: OptimalDuals) -> OptimalDuals:
    """Drop the rows that say nothing beyond what the bounds and the other rows imply.

    The implied bounds keep a little room, so that a row is never dropped for what it implies itself.
    """
    rows, limits = duals.rows, (duals.low, duals.high)
    lower, upper = implied_bounds(rows, limits, (duals.lower, duals.upper), ACTIVE)
    speaks = (duals.low > rows @ lower) | (duals.high < path_upper(rows, np.maximum(upper, lower)))
    kept = np.flatnonzero(speaks)
    return replace(duals, rows=csr_array(rows[kept]), low=duals.low[kept], high=duals.high[kept])


def _extreme_face(duals: OptimalDuals, weight: FloatArray) -> OptimalDuals:
    """Return the optimal duals with the least weighted sum, as limits turned into equalities."""
    limited = np.isfinite(duals.high)
    matrix = csr_array(vstack([-duals.rows, duals.rows[limited]], format="csr"))
    bound = np.concatenate([-duals.low, duals.high[limited]])
    minimise: Any = linprog  # its stubs know no sparse matrices
    result = minimise(
        weight,
        A_ub=matrix if matrix.shape[0] else None,
        b_ub=bound if matrix.shape[0] else None,
        bounds=np.column_stack([duals.lower, duals.upper]),
        method="highs-ds",
    )
    if result.status != 0:
        raise SolverStoppedError(
            f"no price fits the optimum that the solver gave ({result.message.splitlines()[0]}); try the other solver"
        )
    n_low = len(duals.low)
    shadow = result.ineqlin.marginals if matrix.shape[0] else np.zeros(0)
    low, high = duals.low.copy(), duals.high.copy()
    at_low = shadow[:n_low] < -ACTIVE
    at_high = np.zeros(n_low, dtype=bool)
    at_high[limited] = shadow[n_low:] < -ACTIVE
    high[at_low] = low[at_low]
    low[at_high] = high[at_high]
    lower, upper = duals.lower.copy(), duals.upper.copy()
    at_lower, at_upper = result.lower.marginals > ACTIVE, result.upper.marginals < -ACTIVE
    upper[at_lower] = lower[at_lower]
    lower[at_upper] = upper[at_upper]
    return replace(duals, low=low, high=high, lower=lower, upper=upper)
