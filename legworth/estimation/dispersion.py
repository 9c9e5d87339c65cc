"""How much demand varies from departure to departure, and whether intervals said to hold it do.

Demand of a departure is Poisson at a rate that varies by a factor of mean 1 and variance a: the negative binomial
distribution of variance ``m + a m**2`` (NB2). The variance a comes from the likelihood of what was seen of whole
departures while open, ``n log m - (n + 1/a) log(1 + a m)`` with m expected while open, which holds whatever the
bookings seen had to do with closing. A product's own a is drawn from the logarithms of its class by empirical Bayes.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import optimize, special

from network.arrays import BoolArray, FloatArray, IntArray
from network.demand import Demand

__all__ = ["Persistence", "coverage", "fit_over_dispersion", "persistence", "product_dispersion"]

_LOGARITHMS = (-9.0, 4.0)
_NEGLIGIBLE = 1e-3


def _likelihood(log_a: float, n: FloatArray, m: FloatArray, weight: FloatArray) -> float:
    a = np.exp(log_a)
    r = 1 / a
    seen = special.gammaln(n + r) - special.gammaln(r) + n * log_a - (n + r) * np.log1p(a * m)
    return float(np.sum(weight * seen))


def fit_over_dispersion(count: FloatArray, mean: FloatArray, weight: FloatArray | None = None) -> float:
    """Fit the variance a of the common factor of negative binomial counts of given means, by maximum likelihood.

    Parameters
    ----------
    count
        (n,) passengers; effective ones may be other than whole.
    mean
        (n,) expected passengers, positive.
    weight
        (n,) weights.

    Returns
    -------
    float
        Variance a, 0 where the counts vary no more than Poisson ones, at most 55.
    """
    weights = np.ones(len(count)) if weight is None else weight
    if len(count) == 0:
        return 0.0
    best = optimize.minimize_scalar(
        lambda x: -_likelihood(x, count, mean, weights), bounds=_LOGARITHMS, method="bounded", options={"xatol": 1e-4}
    )
    found = float(np.exp(best.x))
    return 0.0 if found < _NEGLIGIBLE else found


def product_dispersion(
    count: FloatArray, mean: FloatArray, weight: FloatArray, product: IntArray, of_product: FloatArray, pool: IntArray
) -> FloatArray:
    """Fit the variance a of every product, shrunk towards that of its pool.

    The logarithm of a varies normally between the products of a pool. Each takes a few Newton steps to the mode given
    what was seen of it, the spread between products coming from the excess of squared scores over information.

    Parameters
    ----------
    count, mean, weight, product
        (n,) passengers seen and expected of every departure, its weight and its product.
    of_product
        (P,) the variance a of every product's pool.
    pool
        (P,) pool of every product.

    Returns
    -------
    FloatArray
        (P,) variances a.
    """
    n_products, n_pools = len(of_product), int(pool.max(initial=-1)) + 1
    free = of_product > _NEGLIGIBLE
    used = free[product] & (mean > 0)
    n, m, w, owner = count[used], mean[used], weight[used], product[used]
    start = np.log(np.where(free, of_product, 1.0))
    log_a = start.copy()
    spread = np.zeros(n_pools)
    for step in range(4):
        score = w * _score(n, m, log_a[owner])
        slope = np.bincount(owner, score, minlength=n_products)
        information = np.bincount(owner, score**2, minlength=n_products)
        if step == 0:
            excess = np.bincount(pool, slope**2 - information, minlength=n_pools)
            spread = np.maximum(excess, 0) / np.maximum(np.bincount(pool, information**2, minlength=n_pools), 1e-300)
            spread = np.minimum(spread, 1.0)
        drawn = spread[pool]
        move = (slope * drawn - (log_a - start)) / (1 + information * drawn)
        log_a = np.where(drawn > 0, log_a + np.clip(move, -1.0, 1.0), log_a)
    return np.where(free, np.exp(np.clip(log_a, *_LOGARITHMS)), of_product)


def _score(n: FloatArray, m: FloatArray, log_a: FloatArray) -> FloatArray:
    """Slope of the likelihood of one departure in the logarithm of a."""
    r = np.exp(-log_a)
    return -r * (special.psi(n + r) - special.psi(r) - np.log1p(m / r) + (m - n) / (m + r))


@dataclass(frozen=True)
class Persistence:
    """How far busy departures stay busy.

    Attributes
    ----------
    share
        Part of the variance a that lasts through the horizon, 0 to 1; the rest is drawn anew in every interval.
    concentration
        Mean over departures of the sum of squared interval shares, which carries the rest to other horizons.
    """

    share: float
    concentration: float


def persistence(squares: FloatArray, own: FloatArray, total: FloatArray, expected: FloatArray) -> Persistence:
    """Estimate by moments how far bookings in different intervals of a departure go together.

    Parameters
    ----------
    squares
        (n,) sum of squared residuals (came less expected) over the open intervals of every departure.
    own
        (n,) sum of squared expected passengers over them.
    total
        (n,) residual of the departure as a whole.
    expected
        (n,) expected passengers of it while open.
    """
    across = float(np.sum(total**2 - squares))
    pairs = float(np.sum(expected**2 - own))
    whole = float(np.sum(total**2 - expected))
    everything = float(np.sum(expected**2))
    concentration = float(np.sum(own) / everything) if everything > 0 else 1.0
    if pairs <= 0 or whole <= 0:
        return Persistence(1.0, concentration)
    return Persistence(float(np.clip((across / pairs) / (whole / everything), 0.0, 1.0)), concentration)


def coverage(demand: Demand, count: FloatArray, closed: BoolArray | None = None, share: float = 0.8) -> FloatArray:
    """Coverage of the central interval by outcomes that are whole numbers.

    The place of an outcome n in its distribution is drawn evenly from ``P(D < n)`` to ``P(D <= n)`` (randomised
    probability integral transform); the coverage is the chance that it falls between ``(1 - share) / 2`` and ``(1 +
    share) / 2``. Its mean is the share exactly if the distributions are right, also for demand below one passenger,
    where no interval of whole numbers holds 80 %. Of a lower bound, the place is drawn from ``P(D < n)`` to 1. See C.
    Czado, T. Gneiting, L. Held (2009), Predictive model assessment for count data, Biometrics 65, 1254-1261 (from
    memory).

    Parameters
    ----------
    demand
        n distributions.
    count
        (n,) outcomes.
    closed
        (n,) True where the outcome is only a lower bound.
    share
        Share that the interval should hold, above 0 and below 1.

    Returns
    -------
    FloatArray
        (n,) chances from 0 to 1.

    Raises
    ------
    ValueError
        If shapes differ or the share is out of its limits.
    """
    if not 0 < share < 1:
        raise ValueError(f"share must be above 0 and below 1, got {share}")
    if np.shape(count) != (len(demand),):
        raise ValueError(f"expected one outcome for each of {len(demand)} demands, got {np.shape(count)}")
    at = np.arange(len(demand))
    begin = 1 - demand.survivor(count, at)
    end = 1 - demand.survivor(np.floor(count) + 1, at)
    if closed is not None:
        end = np.where(closed, 1.0, end)
    low, high = (1 - share) / 2, (1 + share) / 2
    inside = np.minimum(end, high) - np.maximum(begin, low)
    width = end - begin
    sure = (begin >= low) & (begin <= high)
    return np.where(width > 1e-12, np.clip(inside, 0, None) / np.maximum(width, 1e-12), sure.astype(np.float64))
