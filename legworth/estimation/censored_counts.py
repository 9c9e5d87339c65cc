"""Passengers counted through closed classes: Poisson and negative binomial by expectation-maximisation.

A closed observation c stands for the mean of the count given that it is c at least. Of Poisson demand,
``E[N | N >= c] = m P(N >= c - 1) / P(N >= c)``; of negative binomial demand of shape r the same holds with the count
in the numerator of shape r + 1. The mean of the filled sample is the new mean whatever the shape. The shape
climbs the likelihood of what was seen itself (expectation-conditional maximisation either: C. Liu, D. B. Rubin
(1994), The ECME algorithm, Biometrika 81, 633-648, from memory).
"""

from __future__ import annotations

import numpy as np
from scipy import special

from legworth.estimation.censored_sample import CensoredFit, CensoredSample, EmOptions
from network.arrays import FloatArray

__all__ = ["at_least", "fit_censored_negative_binomial", "fit_censored_poisson", "mean_given_at_least"]

_FAINT = 1e-250
_SHAPES = (-9.0, 12.0)
"""Least and greatest logarithm of the shape; the greatest is Poisson to six digits."""


def at_least(c: FloatArray, mean: FloatArray, shape: FloatArray | None = None) -> FloatArray:
    """``P(N >= c)`` of Poisson counts, or of negative binomial ones of a shape; whole c or not, 1 where c <= 0."""
    k = np.maximum(np.ceil(c), 1.0)
    tail = special.gammainc(k, mean) if shape is None else special.betainc(k, shape, mean / (mean + shape))
    return np.where(c > 0, tail, 1.0)


def mean_given_at_least(c: FloatArray, mean: FloatArray, shape: FloatArray | None = None) -> FloatArray:
    """``E[N | N >= c]``, and c itself where so much is all but impossible."""
    up = None if shape is None else shape + 1
    upper_mean = mean if shape is None else mean * (shape + 1) / shape  # the chance b is the same
    tail = at_least(c, mean, shape)
    answer = mean * at_least(c - 1, upper_mean, up) / np.maximum(tail, _FAINT)
    return np.where(tail > _FAINT, np.maximum(answer, c), c)


def fit_censored_poisson(sample: CensoredSample, options: EmOptions | None = None) -> CensoredFit:
    """Fit a Poisson distribution to every group.

    Parameters
    ----------
    sample
        Observations in groups, whole numbers.
    options
        Stopping rule; the defaults if left out.

    Returns
    -------
    CensoredFit
        Its deviation is the root of its mean. Without a closed observation its mean is the plain mean.
    """
    return _fit(sample, options or EmOptions(), over_dispersed=False)


def fit_censored_negative_binomial(sample: CensoredSample, options: EmOptions | None = None) -> CensoredFit:
    """Fit a negative binomial distribution (variance ``m + m**2 / r``) to every group.

    Parameters
    ----------
    sample
        Observations in groups, whole numbers.
    options
        Stopping rule; the defaults if left out.

    Returns
    -------
    CensoredFit
        Where the counts vary less than Poisson ones it ends at the Poisson distribution.
    """
    return _fit(sample, options or EmOptions(), over_dispersed=True)


def _fit(sample: CensoredSample, options: EmOptions, *, over_dispersed: bool) -> CensoredFit:
    weak = sample.size_open == 0
    mean = np.maximum(sample.mean(sample.value), 1e-12)
    log_shape = _first_shape(sample, mean) if over_dispersed else np.full(sample.n_groups, np.inf)
    imputed = sample.value.copy()
    moving = ~weak & ((sample.sums(sample.closed) > 0) | over_dispersed)
    rounds, settled = 0, True
    while np.any(moving) and rounds < options.iterations:
        rounds += 1
        if settled:  # groups that have settled are left as they are
            rows = np.flatnonzero(moving[sample.group])
            part = sample.observations(rows)
            shut = np.flatnonzero(part.closed)
        at = part.group[shut]
        shape = np.exp(log_shape[at]) if over_dispersed else None
        filled = part.value.copy()
        filled[shut] = mean_given_at_least(part.value[shut], mean[at], shape)
        imputed[rows] = filled
        new = np.where(moving, np.maximum(part.mean(filled), 1e-12), mean)
        step = np.abs(new - mean) / np.sqrt(new)
        mean = new
        if over_dispersed:
            climbed = np.where(moving, _climb(part, mean, log_shape), log_shape)
            step = np.maximum(step, 1e-2 * np.abs(climbed - log_shape))
            log_shape = climbed
        before, moving = moving, moving & (step > options.tolerance)
        settled = not np.array_equal(before, moving)
    deviation = np.sqrt(mean + mean**2 * np.exp(-log_shape))
    return CensoredFit.of(
        sample,
        mean,
        deviation,
        imputed,
        moving,
        rounds,
        lambda pool: _fit(pool, options, over_dispersed=over_dispersed),
    )


def _first_shape(sample: CensoredSample, mean: FloatArray) -> FloatArray:
    """(G,) logarithm of the shape by moments of what was seen."""
    over = sample.mean((sample.value - mean[sample.group]) ** 2) - mean
    return np.clip(np.log(mean**2 / np.maximum(over, 1e-4 * mean)), *_SHAPES)


def _likelihood(sample: CensoredSample, mean: FloatArray, log_shape: FloatArray) -> FloatArray:
    """(G,) logarithm of the likelihood of what was seen, constants left out."""
    told = np.empty(len(sample.value))
    for closed in (False, True):
        rows = np.flatnonzero(sample.closed == closed)
        at = sample.group[rows]
        n, m, r = sample.value[rows], mean[at], np.exp(log_shape[at])
        if closed:
            told[rows] = np.log(np.maximum(at_least(n, m, r), _FAINT))
        else:
            told[rows] = (
                special.gammaln(n + r) - special.gammaln(r) + special.xlogy(n, m / (m + r)) - r * np.log1p(m / r)
            )
    return sample.sums(told)


def _climb(sample: CensoredSample, mean: FloatArray, log_shape: FloatArray) -> FloatArray:
    """Newton step of the logarithm of the shape, halved until the likelihood does not fall."""
    width = 1e-3
    here = _likelihood(sample, mean, log_shape)
    up, down = (_likelihood(sample, mean, log_shape + way) for way in (width, -width))
    slope, bend = (up - down) / (2 * width), (up - 2 * here + down) / width**2
    step = np.where(bend < 0, -slope / np.minimum(bend, -1e-12), np.sign(slope))
    step = np.clip(step, -1.0, 1.0)
    for _ in range(20):
        tried = np.clip(log_shape + step, *_SHAPES)
        falls = _likelihood(sample, mean, tried) < here
        if not np.any(falls):
            return tried
        step = np.where(falls, step / 2, step)
    return np.where(falls, log_shape, tried)
