"""Approximate bid prices by projected Newton steps on a smoothed dual.

The dual of the program of `lp.columns` is the convex function of the prices p >= 0::

    g(p) = sum_l c_l p_l + sum_i F_i(price of path i),    F_i(t) = sum over columns of i of w max(0, v - t)

Averaged over a window of half-width h around the path price, F_i becomes twice differentiable almost
everywhere, and with running sums of w, w v and w v**2 over columns sorted by value it costs one bisection
per itinerary rather than a pass over all columns. The window is narrowed step by step; its last width is
the accuracy of the prices. They only decide which columns are worth the solver's attention, never what is
published.
"""

from __future__ import annotations

import numpy as np
from scipy.sparse.linalg import LinearOperator, cg

from lp.problem import SeatProgram
from network.arrays import FloatArray, IntArray

__all__ = ["WARM_WINDOWS", "WINDOWS", "SmoothedDual", "smoothed_prices"]

WINDOWS = (0.25, 0.06, 0.015, 0.004)
"""Half-widths of the window, as shares of the mean value of a column, for a cold start."""

WARM_WINDOWS = (0.06, 0.015, 0.004)
"""The same for a start from prices that were good lately."""

WIDER = 4.0
"""How much wider than the window the curvature is taken over."""

STEPS_PER_WINDOW = 12
ENOUGH = 1e-3
"""A window is left once the projected gradient is below this share of the seats ..."""

ENOUGH_AT_LAST = 3e-4
"""... and the last window below this share."""


class SmoothedDual:
    """The smoothed dual for one window: value, gradient and curvature at any prices.

    It remembers where the columns near the last prices stand, since the next prices are mostly close by.
    """

    def __init__(self, program: SeatProgram, window: float) -> None:
        self.program = program
        self.window = window
        self._near: dict[float, IntArray] = {}

    def at(self, prices: FloatArray) -> tuple[float, FloatArray]:
        """Return g(p) and its gradient (L,)."""
        program, h = self.program, self.window
        path = program.path_price(prices)
        f_low, g_low = self._sums(path, -h)
        f_high, g_high = self._sums(path, h)
        value = float(program.capacity @ prices + np.sum(g_low - g_high) / (2 * h))
        sold = (f_low - f_high) / (2 * h)
        return value, program.capacity - program.incidence @ sold

    def curvature(self, prices: FloatArray) -> FloatArray:
        """Return the curvature of every itinerary (I,), seen over a window wide enough to hold several columns."""
        wide = WIDER * self.window
        path = self.program.path_price(prices)
        near, far = (self.program.columns.seats_before(self._end(path, offset)) for offset in (-wide, wide))
        return (near - far) / (2 * wide)

    def _end(self, path: FloatArray, offset: float) -> IntArray:
        found = self.program.columns.count_above(path + offset, self._near.get(offset))
        self._near[offset] = found
        return found

    def _sums(self, path: FloatArray, offset: float) -> tuple[FloatArray, FloatArray]:
        """F at ``path + offset`` and its integral from there on, (I,) each."""
        threshold = path + offset
        seats, worth, square = self.program.columns.sums_before(self._end(path, offset))
        # In place, for memory given back and taken again costs more here than the sums themselves:
        # above = worth - t seats, beyond = (square - 2 t worth + t**2 seats) / 2.
        above = np.multiply(threshold, seats, out=seats)
        np.subtract(worth, above, out=above)
        worth += above
        worth *= threshold
        square -= worth
        square *= 0.5
        return above, square


def smoothed_prices(
    program: SeatProgram, start: FloatArray | None = None, windows: tuple[float, ...] = WINDOWS
) -> tuple[FloatArray, float]:
    """Minimise the smoothed dual over p >= 0, narrowing the window.

    Parameters
    ----------
    program
        The program, with at least one column.
    start
        (L,) prices to begin from, such as last night's; zeros if None.
    windows
        Half-widths as shares of the mean value of a column.

    Returns
    -------
    prices, window
        (L,) approximate bid prices and the last half-width in currency.
    """
    columns = program.columns
    money = float(np.average(columns.value, weights=columns.width))
    prices = np.zeros(len(program.capacity)) if start is None else np.maximum(start, 0.0)
    for share in windows:
        dual = SmoothedDual(program, share * money)
        prices = _minimise(dual, prices, ENOUGH_AT_LAST if share == windows[-1] else ENOUGH)
    return prices, windows[-1] * money


def _minimise(dual: SmoothedDual, prices: FloatArray, enough: float) -> FloatArray:
    program = dual.program
    target = enough * max(float(program.capacity.sum()), 1.0)
    value, gradient = dual.at(prices)
    for _ in range(STEPS_PER_WINDOW):
        free = (prices > 0) | (gradient < 0)
        if np.abs(gradient[free]).sum() <= target:
            break
        step = _newton_step(dual, gradient, dual.curvature(prices), free)
        length = 1.0
        for _ in range(20):
            trial = np.maximum(prices + length * step, 0.0)
            trial_value, trial_gradient = dual.at(trial)
            if trial_value <= value + 1e-4 * float(gradient @ (trial - prices)):
                break
            length *= 0.5
        else:
            break
        prices, value, gradient = trial, trial_value, trial_gradient
    return prices


def _newton_step(dual: SmoothedDual, gradient: FloatArray, curvature: FloatArray, free: np.ndarray) -> FloatArray:
    """Solve (A D A' + ridge) step = -gradient on the free legs by conjugate gradients."""
    program = dual.program
    incidence, transposed = program.incidence, program.transposed
    diagonal = incidence @ curvature
    ridge = 1e-3 * diagonal + 1e-2 * np.maximum(program.capacity, 1.0) / (dual.window * 100)
    diagonal = diagonal + ridge

    def multiply(vector: FloatArray) -> FloatArray:
        inside = np.where(free, vector, 0.0)
        return np.where(free, incidence @ (curvature * (transposed @ inside)) + ridge * inside, vector)

    size = len(gradient)
    operator = LinearOperator((size, size), matvec=multiply, dtype=np.float64)
    precondition = LinearOperator((size, size), matvec=lambda vector: vector / diagonal, dtype=np.float64)
    step, _ = cg(operator, np.where(free, -gradient, 0.0), rtol=1e-2, maxiter=60, M=precondition)
    return np.where(free, step, 0.0)
