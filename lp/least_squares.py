"""The point of least norm in a polyhedron, to full precision.

Clarabel's interior point method finds which limits hold it; a minimum-norm solution of those limits, taken
as equations, then gives all digits.
"""

from __future__ import annotations

import clarabel
import numpy as np
from scipy.sparse import csc_array, csr_array, eye_array, vstack
from scipy.sparse.linalg import lsmr

from network.errors import SolverStoppedError
from network.model import FloatArray

__all__ = ["least_norm"]

EQUAL = 1e-9
HELD = 1e-6


def least_norm(rows: csr_array, low: FloatArray, high: FloatArray, lower: FloatArray, upper: FloatArray) -> FloatArray:
    """Minimise the sum of squares of p over ``low <= rows @ p <= high`` and ``lower <= p <= upper``.

    Parameters
    ----------
    rows
        (R, F) matrix.
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
    fixed = upper - lower <= EQUAL
    point = np.where(fixed, lower, 0.0)
    free = np.flatnonzero(~fixed)
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
    stacked = vstack([matrix[equal], -matrix[floor], matrix[ceiling]], format="csc")
    limit = np.concatenate([0.5 * (below + above)[equal], -below[floor], above[ceiling]])
    inside, multiplier = _clarabel(csc_array(stacked), limit, int(equal.sum()))
    held = np.abs(multiplier) > HELD
    held[: int(equal.sum())] = True
    rows_held = csr_array(stacked)[held]
    sharp = lsmr(rows_held, limit[held], atol=1e-15, btol=1e-15, conlim=0, maxiter=50 * len(free) + 200)[0]
    keeps = np.all(stacked @ sharp <= limit + 1e-7) and np.abs(sharp - inside).max() <= 1e-4
    point[free] = sharp if keeps else inside
    return point


def _clarabel(matrix: csc_array, limit: FloatArray, equations: int) -> tuple[FloatArray, FloatArray]:
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
        raise SolverStoppedError(f"the choice among optimal prices failed ({solution.status}); try the other solver")
    return np.array(solution.x), np.array(solution.z)
