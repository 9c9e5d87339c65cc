"""Unconstraining: what would have been booked, had the class been open, by several methods side by side.

`ignore`, `discard` and `replace` are the naive methods, kept to compare with: the first takes what was booked while
closed for demand, the second looks at open readings alone (which are those of low demand), the third puts the mean of
the open ones in place of the closed ones where that is higher.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Protocol

import numpy as np

from legworth.estimation.censored_counts import fit_censored_negative_binomial, fit_censored_poisson
from legworth.estimation.censored_normal import fit_censored_normal
from legworth.estimation.censored_sample import CensoredFit, CensoredSample, EmOptions
from legworth.estimation.detruncation import detruncate
from legworth.estimation.increments import Increments
from network.arrays import BoolArray, FloatArray, IntArray

__all__ = ["METHODS", "ClassFits", "ClassSamples", "unconstrain"]


class Method(Protocol):
    """What fits every group of a sample."""

    def __call__(self, sample: CensoredSample, options: EmOptions | None = None) -> CensoredFit:
        """Fit."""


def _plain(sample: CensoredSample, filled: FloatArray) -> CensoredFit:
    mean = sample.mean(filled)
    deviation = np.sqrt(sample.mean((filled - mean[sample.group]) ** 2))
    nothing_moves = np.zeros(sample.n_groups, dtype=bool)
    return CensoredFit.of(sample, mean, deviation, filled, nothing_moves, 0, lambda pool: _plain(pool, pool.value))


def _ignore(sample: CensoredSample, options: EmOptions | None = None) -> CensoredFit:
    return _plain(sample, sample.value)


def _discard(sample: CensoredSample, options: EmOptions | None = None) -> CensoredFit:
    seen = sample.only_open()
    kept = _plain(seen, seen.value)
    return CensoredFit(kept.mean, kept.deviation, sample.value, kept.converged, 0, kept.weak)


def _replace(sample: CensoredSample, options: EmOptions | None = None) -> CensoredFit:
    mean = _discard(sample).mean[sample.group]
    filled = np.where(sample.closed & (sample.size_open > 0)[sample.group], np.fmax(mean, sample.value), sample.value)
    return _plain(sample, filled)


METHODS: Mapping[str, Method] = MappingProxyType(
    {
        "ignore": _ignore,
        "discard": _discard,
        "replace": _replace,
        "projection": detruncate,
        "normal": fit_censored_normal,
        "poisson": fit_censored_poisson,
        "negative_binomial": fit_censored_negative_binomial,
    }
)


@dataclass(frozen=True, eq=False)
class ClassFits:
    """What a method makes of the samples of every class.

    Attributes
    ----------
    mean
        (K,) whole demand of a departure of a product; NaN of a class that history does not hold or that was never
        open.
    rounds
        Most rounds made for a class.
    unsettled
        Groups that still moved when the limit of rounds was reached.
    """

    mean: FloatArray
    rounds: int
    unsettled: int


@dataclass(frozen=True, eq=False)
class ClassSamples:
    """Departures of products as samples, one a class.

    The intervals of a class that reach over the same cells are one group, of all products and departures together. Of
    every departure each interval is replaced by the mean of its group, and the mean is taken of the departures
    so filled; so departures that lack readings count like the others.

    Attributes
    ----------
    sample
        Of every class, K of them.
    departures
        (K,) departures of products, each as much as it counts.
    """

    sample: tuple[CensoredSample, ...]
    departures: FloatArray

    @classmethod
    def of(
        cls, increments: Increments, fare_class: IntArray, n_classes: int, weight: FloatArray | None = None
    ) -> ClassSamples:
        """Sort intervals into samples.

        Parameters
        ----------
        increments
            Intervals of S series.
        fare_class, n_classes
            (S,) class of every series, and their number.
        weight
            (S,) how much a departure counts, above 0; 1 if left out.
        """
        weight = np.ones(len(fare_class)) if weight is None else weight
        n_cells = increments.n_cells
        of_row = fare_class.astype(np.int64)[increments.owner]
        span = (of_row * n_cells + increments.first) * n_cells + increments.last
        known = np.flatnonzero(np.bincount(span, minlength=n_classes * n_cells**2))
        place = np.zeros(n_classes * n_cells**2, dtype=np.int64)
        place[known] = np.arange(len(known))
        every = CensoredSample.of(increments.count, ~increments.open, place[span], len(known), weight[increments.owner])
        first = np.searchsorted(known // n_cells**2, np.arange(n_classes + 1))
        return cls(
            tuple(every.part(int(first[k]), int(first[k + 1])) for k in range(n_classes)),
            np.bincount(fare_class, weight, minlength=n_classes).astype(np.float64),
        )

    @property
    def groups(self) -> int:
        """Number of groups of all classes."""
        return sum(sample.n_groups for sample in self.sample)

    @property
    def never_open(self) -> BoolArray:
        """(K,) classes that were closed in part at least of every interval."""
        return np.array([not np.any(sample.size_open > 0) for sample in self.sample], dtype=bool)

    @property
    def pooled(self) -> int:
        """Groups that were never open though their class was: they take the mean of all intervals of the class."""
        return sum(
            int(np.sum(sample.size_open == 0))
            for sample, never in zip(self.sample, self.never_open, strict=True)
            if not never
        )

    def fit(self, method: str, options: EmOptions | None = None) -> ClassFits:
        """Fit every class by one of `METHODS`.

        Parameters
        ----------
        method
            Name of the method.
        options
            Stopping rule; the defaults if left out.
        """
        mean = np.full(len(self.sample), np.nan)
        rounds, unsettled = 0, 0
        for k in np.flatnonzero(~self.never_open).tolist():
            found = unconstrain(self.sample[k], method, options)
            mean[k] = float(self.sample[k].size @ found.mean) / self.departures[k]
            rounds, unsettled = max(rounds, found.iterations), unsettled + int(np.sum(~found.converged))
        return ClassFits(mean, rounds, unsettled)


def unconstrain(
    sample: CensoredSample, method: str = "negative_binomial", options: EmOptions | None = None
) -> CensoredFit:
    """Fit the demand of every group by one of `METHODS`.

    Parameters
    ----------
    sample
        Observations in groups, for instance one group a fare class and reading interval. An interval in which a class
        was closed for a part only is a lower bound like any other; bookings that hit the limit exactly are
        one too, since the class closed with the last of them.
    method
        Name of the method.
    options
        Stopping rule; the defaults if left out.

    Raises
    ------
    ValueError
        If the method is unknown.
    """
    if method not in METHODS:
        raise ValueError(f"unknown method {method!r}; choose {', '.join(METHODS)}")
    return METHODS[method](sample, options)
