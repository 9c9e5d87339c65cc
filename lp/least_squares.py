"""The point of least norm in a polyhedron, to full precision.

Clarabel's interior point method finds which limits hold it; a minimum-norm solution of those limits, taken
as equations, then gives all digits.
"""

from __future__ import annotations

import clarabel
import numpy as np
from scipy.sparse import csc_array, csr_array, eye_array, vstack
from scipy.sparse.linalg import lsmr

from lp.implied import implied_bounds
from network.arrays import FloatArray
from network.errors import SolverStoppedError

__all__ = ["least_norm"]

EQUAL = 1e-6
"""Limits at most this far apart settle what lies between them: an interior point method needs an interior."""

ROOM = 1e-7
"""Room given to every limit, as a share of the greatest, where rounding has left no point inside them all."""

CLEARLY = 1e3
"""Ratio of multiplier to slack from which on a row is taken to hold the point."""

BROKEN = 1e-7
CORRECTIONS = 10

Interior = tuple[FloatArray, FloatArray, FloatArray]
"""A point, and slack and multiplier of every row."""


def least_norm(rows: csr_array, low: FloatArray, high: FloatArray, lower: FloatArray, upper: FloatArray) -> FloatArray:
    """Minimise the sum of squares of p over ``low <= rows @ p <= high`` and ``lower <= p <= upper``.

    Parameters
    ----------
    rows
        (R, F) matrix of zeros and ones.
    low, high
        (R,) limits; equal limits make an equation, infinite ones none.
    lower, upper
        (F,) bounds, likewise.

    Returns
    -------
    ndarray
        (F,) the point, unique.

    Raises
    ------
    SolverStoppedError
        If the polyhedron is empty or the solver fails.
    """
    size = len(lower)
    least, most = implied_bounds(csr_array(rows), (low, high), (lower, upper))
    settled = most - least <= EQUAL
    point = np.where(settled, np.clip(0.5 * (least + most), lower, upper), 0.0)
    free = np.flatnonzero(~settled)
    if len(free) == 0:
        return point
    matrix = vstack([csr_array(rows), eye_array(size, format="csr")], format="csr")
    taken = matrix @ point
    below = np.concatenate([low, lower]) - taken
    above = np.concatenate([high, upper]) - taken
    matrix = csr_array(matrix[:, free])
    matters = np.diff(matrix.indptr) > 0
    matrix, below, above = csr_array(matrix[matters]), below[matters], above[matters]
    equal = above - below <= EQUAL
    floor = ~equal & np.isfinite(below)
    ceiling = ~equal & np.isfinite(above)
    stacked = vstack([matrix[equal], -matrix[floor], matrix[ceiling]], format="csr")
    limit = np.concatenate([0.5 * (below + above)[equal], -below[floor], above[ceiling]])
    point[free] = _sharpened(csr_array(stacked), limit, int(equal.sum()))
    return point


def _sharpened(matrix: csr_array, limit: FloatArray, equations: int) -> FloatArray:
    """Least-norm point of ``matrix @ p <= limit``, the first rows equations.

    An interior point is right to half its digits. The shortest point on the rows that hold it has all of
    them, and it is the answer if it meets the other rows and is no longer than the interior point.
    """
    size = float(np.abs(limit).max(initial=0.0)) or 1.0
    (inside, slack, multiplier), room = _interior(matrix, limit / size, equations)
    inside, slack, multiplier, room = inside * size, slack * size, multiplier * size, room * size
    equation = np.arange(len(limit)) < equations
    held, sharp, broken = equation | (multiplier > CLEARLY * slack), inside, equation
    for _ in range(CORRECTIONS):
        steps = 50 * matrix.shape[1] + 200
        sharp = lsmr(matrix[held], limit[held], atol=1e-15, btol=1e-15, conlim=0, maxiter=steps)[0]
        excess = matrix @ sharp - limit
        broken = np.where(equation, np.abs(excess), excess) > BROKEN
        if not np.any(broken & ~held):
            break
        held |= broken
    # By duality, room around the limits shortens the point by at most so much.
    shortened = BROKEN * (1 + inside @ inside) + 2 * room * np.abs(multiplier).sum()
    longer = sharp @ sharp - inside @ inside > shortened
    return inside if longer or broken.any() else sharp


def _interior(matrix: csr_array, limit: FloatArray, equations: int) -> tuple[Interior, float]:
    """Solve to about half the digits; where limits contradict each other by rounding, with room around them."""
    found, status = _clarabel(csc_array(matrix), limit, equations)
    if found is not None:
        return found, 0.0
    both = csc_array(vstack([matrix, -matrix[:equations]]))
    found, _ = _clarabel(both, np.concatenate([limit, -limit[:equations]]) + ROOM, 0)
    if found is None:
        raise SolverStoppedError(f"the choice among optimal prices failed ({status}); try the other solver")
    point, slack, multiplier = found
    return (point, slack[: len(limit)], multiplier[: len(limit)]), ROOM


def _clarabel(matrix: csc_array, limit: FloatArray, equations: int) -> tuple[Interior | None, str]:
    settings = clarabel.DefaultSettings()
    settings.verbose = False
    settings.max_threads = 1
    settings.tol_gap_abs = settings.tol_gap_rel = settings.tol_feas = 1e-10
    size = matrix.shape[1]
    cones = []
    if equations:
        cones.append(clarabel.ZeroConeT(equations))
    if len(limit) > equations:
        cones.append(clarabel.NonnegativeConeT(len(limit) - equations))
    quadratic = csc_array(eye_array(size))
    solver = clarabel.DefaultSolver(quadratic, np.zeros(size), matrix, limit, cones, settings)
    solution = solver.solve()
    if str(solution.status) not in ("Solved", "AlmostSolved"):
        return None, str(solution.status)
    return (np.array(solution.x), np.array(solution.s), np.array(solution.z)), str(solution.status)
