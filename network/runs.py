"""Searches at many places at once: in runs of falling figures, and for the greatest seat at which something holds."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from network.arrays import BoolArray, FloatArray, IntArray

__all__ = ["SortedRuns", "greatest_seats"]


FEW_STEPS = 3
"""Places by which an answer may lie beside a near one before it is found by bisection."""


@dataclass(frozen=True, eq=False)
class SortedRuns:
    """Runs of falling figures, one after the other.

    Attributes
    ----------
    value
        (K,) figures.
    start
        (R + 1,) run r is ``value[start[r]:start[r + 1]]``, falling; it may be empty.
    """

    value: FloatArray
    start: IntArray

    def count_above(self, threshold: FloatArray, run: IntArray | None = None, near: IntArray | None = None) -> IntArray:
        """Return where the figures above a threshold end.

        Parameters
        ----------
        threshold
            (m,) thresholds.
        run
            (m,) run that each belongs to; one threshold for every run if None.
        near
            (m,) answers for thresholds close by, which make the search short; bisection if None.

        Returns
        -------
        ndarray
            (m,) positions in ``value``: those of run r above threshold i are ``start[r]:result[i]``.

        Examples
        --------
        >>> runs = SortedRuns(np.array([9.0, 5.0, 1.0, 7.0]), np.array([0, 3, 4]))
        >>> runs.count_above(np.array([4.0, 8.0])).tolist()
        [2, 3]
        """
        start, end = self.start[:-1], self.start[1:]
        if run is not None:
            start, end = start[run], end[run]
        if near is None:
            return self._bisected(threshold, start, end)
        value = self._fenced
        found = near.copy()
        low = np.flatnonzero((value[found + 1] > threshold) & (found < end))
        high = np.flatnonzero((value[found] <= threshold) & (found > start))
        for _ in range(FEW_STEPS):
            found[low] += 1
            found[high] -= 1
            low = low[(value[found[low] + 1] > threshold[low]) & (found[low] < end[low])]
            high = high[(value[found[high]] <= threshold[high]) & (found[high] > start[high])]
        far = np.concatenate([low, high])
        if len(far):
            found[far] = self._bisected(threshold[far], start[far], end[far])
        return found

    @cached_property
    def _fenced(self) -> FloatArray:
        """(K + 2,) the figures with one place before and one after them, so that figure k stands at k + 1."""
        return np.concatenate([[0.0], self.value, [0.0]])

    def _bisected(self, threshold: FloatArray, low: IntArray, high: IntArray) -> IntArray:
        """Bisect between ``low`` and ``high`` everywhere at once."""
        value = self._fenced
        deepest = int((high - low).max(initial=0))
        for _ in range(deepest.bit_length()):
            middle = (low + high) >> 1
            searching = middle < high
            above = searching & (value[middle + 1] > threshold)
            low = np.where(above, middle + 1, low)
            high = np.where(searching & ~above, middle, high)
        return low


def greatest_seats(start: FloatArray, holds: Callable[[FloatArray, IntArray], BoolArray]) -> FloatArray:
    """Greatest whole numbers of seats at which something holds that holds from none up to some number.

    Parameters
    ----------
    start
        (n,) finite figures near the answers, which make the search short.
    holds
        Tells of (m,) whole numbers above zero and (m,) positions whether it holds; it is taken to hold at zero.

    Returns
    -------
    ndarray
        (n,) whole numbers.

    Examples
    --------
    >>> limit = np.array([3.5, 40.0, 0.5])
    >>> greatest_seats(np.array([2.0, 7.0, 9.0]), lambda seats, at: seats <= limit[at]).tolist()
    [3.0, 40.0, 0.0]
    """
    # Gallop away from the start, then halve: two looks where it was right, and few where it was far off.
    low = np.maximum(np.floor(start), 0.0)
    high = low + 1
    above = holds(high, np.arange(len(low)))
    todo, step = np.flatnonzero(above), 1.0
    while todo.size:
        low[todo], high[todo] = high[todo], high[todo] + step
        todo = todo[holds(high[todo], todo)]
        step *= 2
    todo, step = np.flatnonzero(~above & (low > 0)), 1.0
    while todo.size:
        todo = todo[~holds(low[todo], todo)]
        high[todo], low[todo] = low[todo], np.maximum(low[todo] - step, 0.0)
        todo = todo[low[todo] > 0]
        step *= 2
    todo = np.flatnonzero(high - low > 1)
    while todo.size:
        middle = np.floor((low[todo] + high[todo]) / 2)
        reached = holds(middle, todo)
        low[todo[reached]] = middle[reached]
        high[todo[~reached]] = middle[~reached]
        todo = todo[high[todo] - low[todo] > 1]
    return low
