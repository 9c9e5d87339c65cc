"""Bounds that rows imply: what is left for one price when all others of a path take their extremes."""

from __future__ import annotations

import numpy as np
from scipy.sparse import csr_array

from network.arrays import FloatArray

__all__ = ["Limits", "implied_bounds", "path_upper"]

Limits = tuple[FloatArray, FloatArray]
"""Lower and upper limits, of prices, (F,), or of rows, (R,)."""

ROUNDS = 12


def implied_bounds(rows: csr_array, limits: Limits, bounds: Limits, room: float = 0.0) -> Limits:
    """Draw bounds in by ``low <= rows @ p <= high``, again and again, a few rounds.

    Parameters
    ----------
    rows
        (R, F) matrix of zeros and ones.
    limits
        low and high, (R,); high may be infinite.
    bounds
        lower and upper, (F,), of p; upper may be infinite.
    room
        Distance to keep from what a row implies exactly.

    Returns
    -------
    lower, upper
        (F,) bounds; by rounding, or if no p meets the rows, they may cross.
    """
    low, high = limits
    lower, upper = bounds[0].copy(), bounds[1].copy()
    row_of = np.repeat(np.arange(rows.shape[0]), np.diff(rows.indptr))
    column = rows.indices
    for _ in range(ROUNDS):
        others_low = (rows @ lower)[row_of] - lower[column]
        endless = np.isinf(upper)
        others_endless = (rows @ endless.astype(np.float64))[row_of] - endless[column] > 0
        finite = np.where(endless, 0.0, upper)
        others_high = (rows @ finite)[row_of] - finite[column]
        before = lower.copy(), upper.copy()
        np.maximum.at(lower, column, np.where(others_endless, 0.0, low[row_of] - others_high) - room)
        np.minimum.at(upper, column, high[row_of] - others_low + room)
        if np.array_equal(before[0], lower) and np.array_equal(before[1], upper):
            break
    return lower, upper


def path_upper(rows: csr_array, upper: FloatArray) -> FloatArray:
    """Greatest value of every row, (R,), under upper bounds, (F,) and perhaps infinite."""
    finite = rows @ np.where(np.isfinite(upper), upper, 0.0)
    return np.where(rows @ np.isinf(upper).astype(np.float64) > 0, np.inf, finite)
