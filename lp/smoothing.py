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

from dataclasses import dataclass

import numpy as np
from scipy.sparse.linalg import LinearOperator, cg

from lp.problem import SeatProgram
from network.model import FloatArray

__all__ = ["WARM_WINDOWS", "WINDOWS", "SmoothedDual", "smoothed_prices"]

WINDOWS = (0.25, 0.06, 0.015, 0.004)
"""Half-widths of the window, as shares of the mean value of a column, for a cold start."""

WARM_WINDOWS = (0.015, 0.004)
"""The same for a start from prices that were good lately."""

STEPS_PER_WINDOW = 12
ENOUGH = 1e-3
"""A window is left once the projected gradient is below this share of the seats."""


@dataclass(frozen=True, eq=False)
class SmoothedDual:
    """The smoothed dual for one window: value, gradient and curvature at any prices."""

    program: SeatProgram
    window: float

    def at(self, prices: FloatArray) -> tuple[float, FloatArray, FloatArray]:
        """Return g(p), its gradient (L,) and the curvature of every itinerary (I,)."""
        program, h = self.program, self.window
        path = program.path_price(prices)
        weight, first, second = program.running
        start = program.columns.start[:-1]

        def sums(threshold: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
            end = program.count_above(threshold)
            n = weight[end] - weight[start]
            s = first[end] - first[start]
            q = second[end] - second[start]
            return n, s - threshold * n, 0.5 * (q - 2 * threshold * s + threshold**2 * n)

        n_low, f_low, g_low = sums(path - h)
        n_high, f_high, g_high = sums(path + h)
        value = float(program.capacity @ prices + np.sum(g_low - g_high) / (2 * h))
        sold = (f_low - f_high) / (2 * h)
        gradient = program.capacity - program.incidence @ sold
        return value, gradient, (n_low - n_high) / (2 * h)


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
        prices = _minimise(dual, prices)
    return prices, windows[-1] * money


def _minimise(dual: SmoothedDual, prices: FloatArray) -> FloatArray:
    program = dual.program
    target = ENOUGH * max(float(program.capacity.sum()), 1.0)
    value, gradient, curvature = dual.at(prices)
    for _ in range(STEPS_PER_WINDOW):
        free = (prices > 0) | (gradient < 0)
        if np.abs(gradient[free]).sum() <= target:
            break
        step = _newton_step(dual, gradient, curvature, free)
        length = 1.0
        for _ in range(20):
            trial = np.maximum(prices + length * step, 0.0)
            trial_value, trial_gradient, trial_curvature = dual.at(trial)
            if trial_value <= value + 1e-4 * float(gradient @ (trial - prices)):
                break
            length *= 0.5
        else:
            break
        prices, value, gradient, curvature = trial, trial_value, trial_gradient, trial_curvature
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
