"""Normal demand seen through closed classes: maximum likelihood by expectation-maximisation.

A. P. Dempster, N. M. Laird, D. B. Rubin (1977), Maximum likelihood from incomplete data via the EM algorithm, Journal
of the Royal Statistical Society B 39, 1-38; for booking data compared by R. H. Zeni (2001), Improved forecast accuracy
in airline revenue management by unconstraining demand estimates from censored data (both from memory).
"""

from __future__ import annotations

import numpy as np
from scipy import special

from legworth.estimation.censored_sample import CensoredFit, CensoredSample, EmOptions
from network.arrays import FloatArray

__all__ = ["fit_censored_normal", "hazard"]

_LEAST_DEVIATION = 1e-9


def hazard(z: FloatArray) -> FloatArray:
    """Density over survivor function of the standard normal, safe far out."""
    return np.asarray(np.exp(-(z**2) / 2 - 0.5 * np.log(2 * np.pi) - special.log_ndtr(-z)))


def fit_censored_normal(sample: CensoredSample, options: EmOptions | None = None) -> CensoredFit:
    """Fit a normal distribution to every group.

    A closed observation c stands for ``E[X | X >= c] = m + s h(z)`` with ``z = (c - m) / s`` and h the hazard; its
    square adds the variance ``s**2 (1 + z h - h**2)``. The deviation has the divisor n, that of maximum likelihood.

    Parameters
    ----------
    sample
        Observations in groups.
    options
        Stopping rule; the defaults if left out.

    Returns
    -------
    CensoredFit
        Without a closed observation its mean is the plain mean.
    """
    options = options or EmOptions()
    group, value = sample.group, sample.value
    weak = sample.size_open == 0
    shut = sample.closed & ~weak[group]
    mean, deviation = _moments(sample, value, 0.0)
    imputed = value.copy()
    moving = ~weak & (sample.sums(shut) > 0)
    rounds = 0
    while np.any(moving) and rounds < options.iterations:
        rounds += 1
        scale = np.maximum(deviation[group[shut]], _LEAST_DEVIATION)
        z = (value[shut] - mean[group[shut]]) / scale
        h = hazard(z)
        imputed[shut] = np.maximum(mean[group[shut]] + scale * h, value[shut])
        spread = np.zeros(len(value))
        spread[shut] = scale**2 * np.clip(1 + z * h - h**2, 0.0, 1.0)
        before = mean, deviation
        mean, deviation = _moments(sample, imputed, spread)
        step = np.maximum(np.abs(mean - before[0]), np.abs(deviation - before[1]))
        moving &= step > options.tolerance * np.maximum(deviation, _LEAST_DEVIATION)
    return CensoredFit.of(
        sample, mean, deviation, imputed, moving, rounds, lambda pool: fit_censored_normal(pool, options)
    )


def _moments(sample: CensoredSample, filled: FloatArray, spread: FloatArray | float) -> tuple[FloatArray, FloatArray]:
    """(G,) mean and deviation with the divisor n."""
    mean = sample.mean(filled)
    return mean, np.sqrt(sample.mean((filled - mean[sample.group]) ** 2 + spread))
