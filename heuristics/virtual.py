"""Virtual classes: the ranked adjusted fares of a leg cut into a few classes.

The cut has the least demand-weighted variance of fare within classes; along sorted values that is found exactly by
dynamic programming (W. D. Fisher 1958, On grouping for maximum homogeneity, Journal of the American Statistical
Association 53). The last cut moves down as more fares are taken in, so each search can be halved by the
answers on both sides (as in X. Wu 1991, Optimal quantization by matrix searching, Journal of Algorithms 12).
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd

from heuristics.ladder import Ladder
from network.arrays import FloatArray, IntArray

__all__ = ["virtual_classes"]


_NOBODY = 1e-9
_STEPS_AT_ONCE = 50_000
_SAME = 1e-12


def virtual_classes(ladder: Ladder, classes: int) -> tuple[Ladder, IntArray]:
    """Cut every leg's fare steps into classes with the least demand-weighted variance of fare.

    Parameters
    ----------
    ladder
        Falling fares and their demand, G steps over L legs. Steps without demand weigh next to nothing;
        where a leg has no demand at all its steps weigh alike.
    classes
        Greatest number of classes a leg; a leg with fewer steps has one class for each.

    Returns
    -------
    tuple
        The ladder of classes, each at the weighted mean fare of its steps, and (G,) the class of every step, as a
        position on that ladder.

    Raises
    ------
    ValueError
        If the number of classes is below one.
    """
    if classes < 1:
        raise ValueError(f"the number of classes must be at least 1, got {classes}")
    size = np.diff(ladder.leg_start)
    weight = _weights(ladder)
    opens = np.zeros(len(ladder.fare), dtype=bool)
    for first, end in _blocks(ladder.leg_start):
        rows = slice(ladder.leg_start[first], ladder.leg_start[end])
        opens[rows] = _cuts(ladder.fare[rows], weight[rows], size[first:end], classes)
    step = np.cumsum(opens) - 1
    class_start = np.append(0, np.cumsum(opens))[ladder.leg_start]
    total = np.bincount(step, weights=weight)
    fare = np.bincount(step, weights=weight * ladder.fare) / total
    return ladder.merged(step, class_start, fare), step


def _weights(ladder: Ladder) -> FloatArray:
    """(G,) mean demand, lifted where it is nothing so that every step belongs to some class."""
    most = np.zeros(ladder.n_legs)
    np.maximum.at(most, ladder.leg, ladder.mean)
    scale = np.where(most > 0, most, 1.0)[ladder.leg]
    lifted = np.where(most > 0, _NOBODY, 1.0)[ladder.leg]
    return np.maximum(ladder.mean / scale, lifted)


def _blocks(leg_start: IntArray) -> Iterator[tuple[int, int]]:
    """Yield runs of legs of about `_STEPS_AT_ONCE` steps, so that working arrays stay small."""
    first, n_legs = 0, len(leg_start) - 1
    while first < n_legs:
        end = int(np.searchsorted(leg_start, leg_start[first] + _STEPS_AT_ONCE, side="right")) - 1
        end = min(max(end, first + 1), n_legs)
        yield first, end
        first = end


def _cuts(fare: FloatArray, weight: FloatArray, size: IntArray, classes: int) -> npt.NDArray[np.bool_]:
    """(G,) whether a class begins at the step, for legs of ``size`` steps each."""
    table = _Table.of(fare, weight, size)
    n = len(table.place)
    best = np.zeros(n)
    inside = np.flatnonzero(table.place > 0)
    best[inside] = table.spread(best, table.head[inside], inside)
    last_cut = np.zeros((classes + 1, n), dtype=np.int32)
    for k in range(2, classes + 1):
        best, last_cut[k] = table.one_more(best, k, whole_legs_only=k == classes)

    opens = np.zeros(n, dtype=bool)
    at, left = table.start + size, np.minimum(size, classes)
    legs = np.flatnonzero(size > 0)
    while legs.size:
        at[legs] = table.start[legs] + last_cut[left[legs], at[legs]]
        opens[at[legs]] = True
        left[legs] -= 1
        legs = legs[left[legs] > 0]
    return opens[table.place < np.repeat(size, size + 1)]


@dataclass(frozen=True, eq=False)
class _Table:
    """Cells (leg, j) for the first j steps of each leg, j = 0..size, leg after leg.

    ``D_k(j) = min over i < j of D_(k-1)(i) - (S_j - S_i)^2 / (W_j - W_i)`` with W and S the running sums of
    weight and of weighted fare: the least variance within k classes, but for a constant. Of cuts whose
    variance is the same within ``slack`` the first is taken, so that rounding does not decide.
    """

    size: IntArray
    start: IntArray
    place: IntArray
    head: IntArray
    weight: FloatArray
    revenue: FloatArray
    slack: FloatArray

    @classmethod
    def of(cls, fare: FloatArray, weight: FloatArray, size: IntArray) -> _Table:
        start = np.append(0, np.cumsum(size + 1))[:-1]
        leg = np.repeat(np.arange(len(size)), size + 1)
        head = start[leg]
        place = np.arange(leg.size) - head
        inside, owner = place > 0, leg[place > 0]
        # Fares count from the mean of their leg: the squares of large sums would cancel.
        mean_fare = np.bincount(owner, weight * fare, len(size)) / np.maximum(
            np.bincount(owner, weight, len(size)), _NOBODY
        )
        centred = fare - mean_fare[owner]
        rows = pd.DataFrame({"w": np.zeros(leg.size), "r": np.zeros(leg.size)})
        rows.loc[inside, "w"] = weight
        rows.loc[inside, "r"] = weight * centred
        total = rows.groupby(leg, sort=False).cumsum()
        slack = (_SAME * np.bincount(owner, weight * centred**2, len(size))).astype(np.float64)[leg]
        return cls(size, start, place, head, total["w"].to_numpy(), total["r"].to_numpy(), slack)

    def spread(self, best: FloatArray, i: IntArray, j: IntArray) -> FloatArray:
        """Variance with a class of its own for the steps after cell i up to cell j."""
        gap = self.revenue[j] - self.revenue[i]
        return np.asarray(best[i] - gap * gap / (self.weight[j] - self.weight[i]))

    def one_more(self, best: FloatArray, k: int, whole_legs_only: bool) -> tuple[FloatArray, IntArray]:
        """From ``D_(k-1)`` make ``D_k`` and, for every cell, the i that attains it."""
        answer, cut = np.full(len(best), np.inf), np.zeros(len(best), dtype=np.int64)
        size = np.repeat(self.size, self.size + 1)
        if whole_legs_only:
            cells = np.flatnonzero((self.place == size) & (size >= k))
            self._fill(best, answer, cut, cells, np.full(cells.size, k - 1), size[cells] - 1)
            return answer, cut
        stride = 1 << int(self.size.max(initial=1)).bit_length()
        while stride:
            cells = np.flatnonzero((self.place % (2 * stride) == stride) & (self.place >= k))
            place = self.place[cells]
            above, below = place - stride >= k, place + stride <= size[cells]
            low, high = np.full(cells.size, k - 1), place - 1
            low[above] = cut[cells[above] - stride]
            high[below] = np.minimum(high[below], cut[cells[below] + stride])
            self._fill(best, answer, cut, cells, low, high)
            stride //= 2
        return answer, cut

    def _fill(
        self, best: FloatArray, answer: FloatArray, cut: IntArray, cells: IntArray, low: IntArray, high: IntArray
    ) -> None:
        """Try every i from low to high for every cell; write the least value and its first i."""
        if cells.size == 0:
            return
        width = high - low + 1
        ends = np.cumsum(width)
        begin = ends - width
        i = np.arange(int(ends[-1])) + np.repeat(self.head[cells] + low - begin, width)
        value = self.spread(best, i, np.repeat(cells, width))
        least = np.minimum.reduceat(value, begin)
        hits = np.flatnonzero(value <= np.repeat(least + self.slack[cells], width))
        first = hits[np.searchsorted(hits, begin)]
        answer[cells] = least
        cut[cells] = i[first] - self.head[cells]
