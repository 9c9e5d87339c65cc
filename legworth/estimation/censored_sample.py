"""Readings of demand that may be lower bounds, in groups, equal ones counted once."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from network.arrays import BoolArray, FloatArray, IntArray

__all__ = ["CensoredFit", "CensoredSample", "EmOptions"]


@dataclass(frozen=True)
class EmOptions:
    """When an iteration ends.

    Attributes
    ----------
    tolerance
        It ends when no mean or deviation moves by more than this share of the deviation (or of one passenger).
    iterations
        It ends here at the latest; groups that still move are reported as not converged.
    """

    tolerance: float = 1e-8
    iterations: int = 5000


@dataclass(frozen=True, eq=False)
class CensoredSample:
    """Observations in G groups.

    Attributes
    ----------
    value
        (n,) demand seen, not negative.
    closed
        (n,) True where it is only a lower bound.
    group
        (n,) group of every observation.
    weight
        (n,) how many times it was made, or how much it counts.
    n_groups
        Number of groups G.
    """

    value: FloatArray
    closed: BoolArray
    group: IntArray
    weight: FloatArray
    n_groups: int

    @classmethod
    def of(
        cls,
        value: npt.ArrayLike,
        closed: npt.ArrayLike,
        group: npt.ArrayLike | None = None,
        n_groups: int = 1,
        weight: npt.ArrayLike | None = None,
    ) -> CensoredSample:
        """Put equal observations together.

        Parameters
        ----------
        value, closed
            (m,) demand seen and whether it is only a lower bound.
        group, n_groups
            (m,) group of every observation, from 0 to ``n_groups`` - 1; one group if left out.
        weight
            (m,) how much every observation counts, above 0; 1 if left out.

        Raises
        ------
        ValueError
            If shapes differ, a value is negative or not finite, a weight is not above 0, or a group is out of range.
        """
        values = np.asarray(value, dtype=np.float64)
        shut = np.asarray(closed, dtype=bool)
        groups = np.zeros(values.shape, dtype=np.int64) if group is None else np.asarray(group, dtype=np.int64)
        weights = np.ones(values.shape) if weight is None else np.asarray(weight, dtype=np.float64)
        if values.ndim != 1 or not values.shape == shut.shape == groups.shape == weights.shape:
            raise ValueError(f"shapes differ: {values.shape}, {shut.shape}, {groups.shape}, {weights.shape}")
        if not np.all(np.isfinite(values)) or np.any(values < 0):
            raise ValueError("demand seen must be finite and not negative")
        if not np.all(np.isfinite(weights)) or np.any(weights <= 0):
            raise ValueError("weights must be finite and above 0")
        if len(groups) and not (groups.min() >= 0 and groups.max() < n_groups):
            raise ValueError(f"groups must lie from 0 to {n_groups - 1}")
        distinct, code = _codes(values)
        key = (groups * len(distinct) + code) * 2 + shut
        if n_groups * len(distinct) * 2 <= max(len(values), 1_000):
            total = np.bincount(key, weights, minlength=n_groups * len(distinct) * 2)
            known = np.flatnonzero(total)
            total = total[known]
        else:
            known, place = np.unique(key, return_inverse=True)
            total = np.bincount(place, weights, minlength=len(known))
        rest = known // 2
        return cls(
            value=distinct[rest % len(distinct)],
            closed=known % 2 == 1,
            group=rest // len(distinct),
            weight=total.astype(np.float64),
            n_groups=n_groups,
        )

    def sums(self, per_observation: npt.ArrayLike) -> FloatArray:
        """(G,) weighted sums of a figure per observation."""
        figures = np.asarray(per_observation, dtype=np.float64)
        return np.bincount(self.group, self.weight * figures, minlength=self.n_groups).astype(np.float64)

    def mean(self, per_observation: npt.ArrayLike) -> FloatArray:
        """(G,) weighted means of a figure per observation, 0 of an empty group."""
        return np.asarray(self.sums(per_observation) / np.maximum(self.size, 1e-300))

    @property
    def size(self) -> FloatArray:
        """(G,) observations, each as much as it counts."""
        return self.sums(1.0)

    @property
    def size_open(self) -> FloatArray:
        """(G,) observations that are no mere lower bounds."""
        return self.sums(~self.closed)

    def pooled(self) -> CensoredSample:
        """Return all observations as one group."""
        return CensoredSample.of(self.value, self.closed, weight=self.weight)

    def part(self, first: int, end: int) -> CensoredSample:
        """Return the groups from ``first`` up to ``end``, the first of them as group 0."""
        kept = (self.group >= first) & (self.group < end)
        return CensoredSample(
            self.value[kept], self.closed[kept], self.group[kept] - first, self.weight[kept], end - first
        )

    def only_open(self) -> CensoredSample:
        """Return the observations that are no mere lower bounds."""
        return self.observations(np.flatnonzero(~self.closed))

    def observations(self, kept: IntArray) -> CensoredSample:
        """Return some of the observations, given by position; the groups stay what they are."""
        return CensoredSample(self.value[kept], self.closed[kept], self.group[kept], self.weight[kept], self.n_groups)


def _codes(values: FloatArray) -> tuple[FloatArray, IntArray]:
    """Rising distinct values, and the position of every value among them."""
    most = values.max(initial=0.0)
    if most <= len(values):
        code = values.astype(np.int64)
        if np.array_equal(code, values):
            return np.arange(int(most) + 1, dtype=np.float64), code
    distinct, place = np.unique(values, return_inverse=True)
    return distinct, place


@dataclass(frozen=True, eq=False)
class CensoredFit:
    """Mean and deviation of demand in G groups.

    Attributes
    ----------
    mean, deviation
        (G,) passengers; those of the pool of all groups where a group was never open, NaN where no group was.
    imputed
        (n,) what stands in for every observation of the sample: itself where open.
    converged
        (G,) False where the iteration limit was reached first.
    iterations
        Rounds made.
    weak
        (G,) True where a group was never open, so that it says nothing of its own.
    """

    mean: FloatArray
    deviation: FloatArray
    imputed: FloatArray
    converged: BoolArray
    iterations: int
    weak: BoolArray

    @classmethod
    def of(
        cls,
        sample: CensoredSample,
        mean: FloatArray,
        deviation: FloatArray,
        imputed: FloatArray,
        moving: BoolArray,
        iterations: int,
        refit: Callable[[CensoredSample], CensoredFit],
    ) -> CensoredFit:
        """Complete a fit: groups that were never open take the figures of the pool of all groups."""
        weak = sample.size_open == 0
        if np.all(weak):
            mean, deviation = np.full(sample.n_groups, np.nan), np.full(sample.n_groups, np.nan)
        elif np.any(weak):
            pool = refit(sample.pooled())
            mean, deviation = np.where(weak, pool.mean, mean), np.where(weak, pool.deviation, deviation)
        return cls(mean, deviation, imputed, ~moving, iterations, weak)
