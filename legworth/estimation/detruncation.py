"""Projection detruncation of normal demand, C. Hopperstad's method (from memory).

As compared by L. R. Weatherford, S. Polt (2002), Better unconstraining of airline demand data in revenue management
systems for improved forecast accuracy and greater revenues, Journal of Revenue and Pricing Management 1, 234-254, and
by R. H. Zeni (2001) (both from memory).
"""

from __future__ import annotations

import numpy as np
from scipy import special

from legworth.estimation.censored_sample import CensoredFit, CensoredSample, EmOptions
from network.arrays import FloatArray

__all__ = ["TAU", "detruncate"]

TAU = 0.5
"""Usual weight: the median of what demand may have been."""


def detruncate(sample: CensoredSample, options: EmOptions | None = None, tau: float = TAU) -> CensoredFit:
    """Fit a normal distribution to every group by projection detruncation.

    A closed observation c is moved up to the x with ``P(X >= x) = tau P(X >= c)``, mean and deviation (divisor n - 1)
    are taken from the sample so filled, and so on. It is no maximum likelihood: a smaller tau raises demand more.

    Parameters
    ----------
    sample
        Observations in groups.
    options
        Stopping rule; the defaults if left out.
    tau
        Weight, above 0 and at most 1; at 1 closed observations stay what they are.

    Raises
    ------
    ValueError
        If tau is out of its limits.
    """
    if not 0 < tau <= 1:
        raise ValueError(f"tau must be above 0 and at most 1, got {tau}")
    options = options or EmOptions()
    group, value = sample.group, sample.value
    weak = sample.size_open == 0
    shut = sample.closed & ~weak[group]
    mean, deviation = _moments(sample, value)
    imputed = value.copy()
    moving = ~weak & (sample.sums(shut) > 0)
    rounds = 0
    while np.any(moving) and rounds < options.iterations:
        rounds += 1
        scale = np.maximum(deviation[group[shut]], 1e-9)
        z = (value[shut] - mean[group[shut]]) / scale
        raised = mean[group[shut]] - scale * special.ndtri_exp(np.log(tau) + special.log_ndtr(-z))
        imputed[shut] = np.maximum(raised, value[shut])
        before = mean, deviation
        mean, deviation = _moments(sample, imputed)
        step = np.maximum(np.abs(mean - before[0]), np.abs(deviation - before[1]))
        moving &= step > options.tolerance * np.maximum(deviation, 1e-9)
    return CensoredFit.of(sample, mean, deviation, imputed, moving, rounds, lambda pool: detruncate(pool, options, tau))


def _moments(sample: CensoredSample, filled: FloatArray) -> tuple[FloatArray, FloatArray]:
    """(G,) mean and deviation with the divisor n - 1."""
    mean = sample.mean(filled)
    squares = sample.sums((filled - mean[sample.group]) ** 2)
    return mean, np.sqrt(squares / np.maximum(sample.size - 1, 1.0))
