"""Small products borrow strength: empirical-Bayes gamma-Poisson shrinkage, level by level.

A product with n passengers where e were expected has Poisson n of mean ``e g``, g gamma of mean 1 and variance v.
Then g is ``1 + w (n / e - 1)`` with ``w = v e / (1 + v e)``, and its relative variance ``v / (1 + v n)``. The v of a
pool maximises the marginal (negative binomial) likelihood; it is 0 where products differ by no more than chance. See
J. A. Nelder, R. J. Verrall (1997), Credibility theory and generalized linear models, ASTIN Bulletin 27, and H.
Buehlmann's credibility (from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from legworth.estimation.dispersion import fit_over_dispersion
from network.arrays import FloatArray, IntArray

__all__ = ["Shrunk", "shrink", "shrink_rates"]


@dataclass(frozen=True, eq=False)
class Shrunk:
    """Factors between what came and what was expected, shrunk towards 1.

    Attributes
    ----------
    factor
        (n,) shrunk ratio of came to expected.
    weight
        (n,) weight of the own ratio, 0 to 1.
    variance
        (n,) relative variance of the factor that is left.
    spread
        Relative variance between the members of every pool.
    """

    factor: FloatArray
    weight: FloatArray
    variance: FloatArray
    spread: FloatArray


def shrink(came: FloatArray, expected: FloatArray, pool: IntArray, n_pools: int) -> Shrunk:
    """Shrink ratios towards 1 within pools.

    Parameters
    ----------
    came, expected
        (n,) passengers, whole or not; expected not negative.
    pool, n_pools
        (n,) pool in which ratios vary alike, and the number of pools.
    """
    spread = np.zeros(n_pools)
    for at in range(n_pools):
        mine = (pool == at) & (expected > 0)
        if np.count_nonzero(mine) > 1:
            spread[at] = fit_over_dispersion(came[mine], expected[mine])
    v = spread[pool]
    weight = v * expected / (1 + v * expected)
    ratio = np.divide(came, expected, out=np.ones(len(came)), where=expected > 0)
    factor = 1 + weight * (ratio - 1)
    return Shrunk(factor, weight, v / (1 + v * came), spread)


@dataclass(frozen=True, eq=False)
class ShrunkRates:
    """Rates of products, (I * K,), itinerary by itinerary, class by class.

    Attributes
    ----------
    rate
        Passengers of an average departure.
    own_weight
        Weight of the own history, 0 to 1: by how much the rate moves with the own rate seen, through the levels above
        as well, of which a product alone in its city pair is all there is.
    variance
        Relative variance of the rate.
    pair_rate, pair_variance
        (n_pairs + 1, K) mean rate of a product of every city pair and class, and relative variance of the rate of one
        that has no history; the last row is for a city pair without history.
    """

    rate: FloatArray
    own_weight: FloatArray
    variance: FloatArray
    pair_rate: FloatArray
    pair_variance: FloatArray


def shrink_rates(
    came: FloatArray, exposure: FloatArray, departures: FloatArray, city_pair: IntArray, n_pairs: int
) -> ShrunkRates:
    """Shrink the rates of products towards city pair and class, these towards class and city pair apart.

    Levels: class; city pair over all classes, as a factor on it; city pair and class; product. A level's mean weighs
    products by their departures, so that large products, whose passengers say less apiece where departures vary, do
    not count too little in it; how much it is trusted goes by effective passengers.

    Parameters
    ----------
    came, exposure
        (I, K) effective passengers seen, and effective departures, each as far as it was open.
    departures
        (I, K) departures seen, each as far as it was open, with their weights by age.
    city_pair, n_pairs
        (I,) city pair of every itinerary, and their number.
    """
    n_classes = came.shape[1]
    raw = np.divide(came, exposure, out=np.zeros(came.shape), where=exposure > 0)
    weighed = np.where(exposure > 0, departures, 0.0)
    class_rate = (raw * weighed).sum(axis=0) / np.maximum(weighed.sum(axis=0), 1e-300)

    def by_pair(figures: FloatArray) -> FloatArray:
        at = city_pair[:, None] * n_classes + np.arange(n_classes)
        sums = np.bincount(at.ravel(), figures.ravel(), minlength=n_pairs * n_classes)
        return np.asarray(sums.reshape(n_pairs, n_classes), dtype=np.float64)

    pair_came, pair_plan = by_pair(raw * weighed), by_pair(weighed * class_rate)
    trusted = by_pair(exposure * class_rate)
    plan, trust = pair_plan.sum(axis=1), trusted.sum(axis=1)
    ratio = np.divide(pair_came.sum(axis=1), plan, out=np.ones(n_pairs), where=plan > 0)
    pair = shrink(ratio * trust, trust, np.zeros(n_pairs, dtype=np.int64), 1)
    middle_plan, middle_trusted = (figures * pair.factor[:, None] for figures in (pair_plan, trusted))
    ratio = np.divide(pair_came, middle_plan, out=np.ones(pair_came.shape), where=middle_plan > 0)
    classes = np.tile(np.arange(n_classes), n_pairs)
    middle = shrink((ratio * middle_trusted).ravel(), middle_trusted.ravel(), classes, n_classes)
    prior = class_rate * pair.factor[:, None] * middle.factor.reshape(n_pairs, n_classes)
    own_prior = prior[city_pair]
    own = shrink(came.ravel(), (exposure * own_prior).ravel(), np.tile(np.arange(n_classes), len(came)), n_classes)
    # What is not known of a level counts as far as the product leans on it.
    top = 1 / np.maximum(came.sum(axis=0), 1.0)
    above = middle.variance.reshape(n_pairs, n_classes) + (1 - middle.weight.reshape(n_pairs, n_classes)) ** 2 * (
        pair.variance[:, None] + top
    )
    plans = weighed * class_rate
    in_middle, in_pair = (
        np.divide(plans, total, out=np.zeros(came.shape), where=total > 0)
        for total in (pair_plan[city_pair], plan[city_pair, None])
    )
    of_middle = middle.weight.reshape(n_pairs, n_classes)[city_pair]
    above_own = of_middle * in_middle + (1 - of_middle) * pair.weight[city_pair, None] * in_pair
    return ShrunkRates(
        rate=own_prior.ravel() * own.factor,
        own_weight=own.weight + (1 - own.weight) * above_own.ravel(),
        variance=own.variance + (1 - own.weight) ** 2 * above[city_pair].ravel(),
        pair_rate=np.vstack([prior, class_rate]),
        pair_variance=own.spread + np.vstack([above, pair.spread + middle.spread + top]),
    )
