"""Unconstraining: what would have been booked, had the class been open, by several methods side by side.

`ignore`, `discard` and `replace` are the naive methods, kept to compare with: the first takes what was booked while
closed for demand, the second looks at open readings alone (which are those of low demand), the third puts the mean of
the open ones in place of the closed ones where that is higher.
"""

from __future__ import annotations

from collections.abc import Mapping
from types import MappingProxyType
from typing import Protocol

import numpy as np

from legworth.estimation.censored_counts import fit_censored_negative_binomial, fit_censored_poisson
from legworth.estimation.censored_normal import fit_censored_normal
from legworth.estimation.censored_sample import CensoredFit, CensoredSample, EmOptions
from legworth.estimation.detruncation import detruncate
from legworth.estimation.increments import Increments
from network.arrays import FloatArray, IntArray

__all__ = ["METHODS", "mean_by_class", "unconstrain"]


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


def mean_by_class(
    increments: Increments, fare_class: IntArray, n_classes: int, method: str, options: EmOptions | None = None
) -> FloatArray:
    """Mean demand of a departure of a product by class, interval by interval as if each were a sample of its own.

    Parameters
    ----------
    increments
        Rows; one of several cells counts for its last.
    fare_class, n_classes
        (S,) class of every series, and their number.
    method
        One of `METHODS`.
    options
        Stopping rule; the defaults if left out.

    Returns
    -------
    FloatArray
        (K,) sums over the intervals.
    """
    n_cells = increments.n_cells
    group = fare_class[increments.owner].astype(np.int64) * n_cells + increments.last
    sample = CensoredSample.of(increments.count, ~increments.open, group, n_classes * n_cells)
    seen = sample.size > 0
    mean = np.where(seen, unconstrain(sample, method, options).mean, 0.0)
    return np.asarray(mean.reshape(n_classes, n_cells).sum(axis=1))


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
