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
        (n,) how many times it was made.
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
    ) -> CensoredSample:
        """Count equal observations once.

        Parameters
        ----------
        value, closed
            (m,) demand seen and whether it is only a lower bound.
        group, n_groups
            (m,) group of every observation, from 0 to ``n_groups`` - 1; one group if left out.

        Raises
        ------
        ValueError
            If shapes differ, a value is negative or not finite, or a group is out of range.
        """
        values = np.asarray(value, dtype=np.float64)
        shut = np.asarray(closed, dtype=bool)
        groups = np.zeros(values.shape, dtype=np.int64) if group is None else np.asarray(group, dtype=np.int64)
        if values.ndim != 1 or not values.shape == shut.shape == groups.shape:
            raise ValueError(f"shapes differ: {values.shape}, {shut.shape}, {groups.shape}")
        if not np.all(np.isfinite(values)) or np.any(values < 0):
            raise ValueError("demand seen must be finite and not negative")
        if len(groups) and not (groups.min() >= 0 and groups.max() < n_groups):
            raise ValueError(f"groups must lie from 0 to {n_groups - 1}")
        order = np.lexsort((shut, values, groups))
        values, shut, groups = values[order], shut[order], groups[order]
        new = np.ones(len(values), dtype=bool)
        new[1:] = (np.diff(values) != 0) | (shut[1:] != shut[:-1]) | (np.diff(groups) != 0)
        first = np.flatnonzero(new)
        weight = np.diff(np.append(first, len(values))).astype(np.float64)
        return cls(values[first], shut[first], groups[first], weight, n_groups)

    def sums(self, per_observation: npt.ArrayLike) -> FloatArray:
        """(G,) weighted sums of a figure per observation."""
        figures = np.asarray(per_observation, dtype=np.float64)
        return np.bincount(self.group, self.weight * figures, minlength=self.n_groups).astype(np.float64)

    def mean(self, per_observation: npt.ArrayLike) -> FloatArray:
        """(G,) weighted means of a figure per observation, 0 of an empty group."""
        return np.asarray(self.sums(per_observation) / np.maximum(self.size, 1e-300))

    @property
    def size(self) -> FloatArray:
        """(G,) observations."""
        return self.sums(1.0)

    @property
    def size_open(self) -> FloatArray:
        """(G,) observations that are no mere lower bounds."""
        return self.sums(~self.closed)

    def pooled(self) -> CensoredSample:
        """Return all observations as one group."""
        return CensoredSample.of(
            np.repeat(self.value, self.weight.astype(np.int64)),
            np.repeat(self.closed, self.weight.astype(np.int64)),
        )

    def only_open(self) -> CensoredSample:
        """Return the observations that are no mere lower bounds."""
        kept = ~self.closed
        return CensoredSample(self.value[kept], self.closed[kept], self.group[kept], self.weight[kept], self.n_groups)


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
