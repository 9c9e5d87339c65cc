"""The families of demand distributions, one class each, all array-wise.

A family turns mean and variance into its two parameters ``a`` and ``b`` and answers four questions from
them. `Demand` in `network.demand` holds the figures and sends every demand to its family.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from enum import IntEnum

import numpy as np
import numpy.typing as npt
from scipy import special, stats

from network.arrays import FloatArray

__all__ = ["LAWS", "SURE", "Family", "Law", "near_quantile"]


SURE = -1
"""Key in `LAWS` of demand that is its mean without doubt."""

FARTHEST = 8.0
"""Deviations from the mean beyond which no search for a quantile starts."""


class Family(IntEnum):
    """Families of demand distributions."""

    POISSON = 0
    NEGATIVE_BINOMIAL = 1
    GAMMA = 2
    NORMAL = 3

    @property
    def word(self) -> str:
        """The family's name in settings, for instance ``negative_binomial``."""
        return self.name.lower()

    @classmethod
    def of(cls, word: str) -> Family:
        """Return the family that a setting names.

        Raises
        ------
        ValueError
            If no family has this name.
        """
        for family in cls:
            if family.word == word:
                return family
        raise ValueError(f"unknown demand family {word!r}; choose auto, {', '.join(f.word for f in cls)}")


class Law(ABC):
    """One family; every argument and answer is an array of the same shape."""

    @abstractmethod
    def parameters(self, mean: FloatArray, variance: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return ``a`` and ``b`` from positive mean and from variance."""

    @abstractmethod
    def survivor(self, k: FloatArray, a: FloatArray, b: FloatArray) -> FloatArray:
        """``P(D >= k)`` where ``k > 0``; anything finite elsewhere."""

    @abstractmethod
    def quantile(self, p: FloatArray, a: FloatArray, b: FloatArray) -> FloatArray:
        """Least ``q`` with ``P(D <= q) >= p``; it may be negative where that is nearly sure."""

    @abstractmethod
    def sales(self, y: FloatArray, a: FloatArray, b: FloatArray) -> FloatArray:
        """``E[min(D, y)]`` for finite ``y >= 0``."""

    @abstractmethod
    def draw(
        self, rng: np.random.Generator, a: FloatArray, b: FloatArray, shape: tuple[int, ...]
    ) -> npt.NDArray[np.float64] | npt.NDArray[np.int64]:
        """Draw outcomes of ``shape``, the last axis running over the demands."""

    def expected(self, mean: FloatArray, a: FloatArray, b: FloatArray) -> FloatArray:
        """Mean of the demand as modelled."""
        return mean


# The regularised gamma and beta functions below are P(D >= k) itself. scipy.stats evaluates the same ones
# behind argument checks that make it one and a half to four times as slow on the millions of seat columns of a network.


class PoissonLaw(Law):
    """Poisson with mean ``a``: ``P(D >= k)`` is the regularised lower gamma function P(k, a)."""

    def parameters(self, mean: FloatArray, variance: FloatArray) -> tuple[FloatArray, FloatArray]:
        return mean, np.ones_like(mean)

    def survivor(self, k: FloatArray, a: FloatArray, b: FloatArray) -> FloatArray:
        return np.asarray(special.gammainc(np.maximum(np.ceil(k), 1.0), a))

    def quantile(self, p: FloatArray, a: FloatArray, b: FloatArray) -> FloatArray:
        return np.asarray(stats.poisson.ppf(p, a))

    def sales(self, y: FloatArray, a: FloatArray, b: FloatArray) -> FloatArray:
        """``a P(D <= m - 1) + y P(D > m)`` with m the whole part of y."""
        m = np.floor(y)
        below = np.where(m > 0, special.gammaincc(np.maximum(m, 1.0), a), 0.0)
        return np.asarray(a * below + y * special.gammainc(m + 1, a))

    def draw(
        self, rng: np.random.Generator, a: FloatArray, b: FloatArray, shape: tuple[int, ...]
    ) -> npt.NDArray[np.int64]:
        return np.asarray(rng.poisson(a, shape))


class NegativeBinomialLaw(Law):
    """Negative binomial: failures at chance ``b`` each before the ``a``-th success, a real."""

    def parameters(self, mean: FloatArray, variance: FloatArray) -> tuple[FloatArray, FloatArray]:
        return mean**2 / (variance - mean), (variance - mean) / variance

    def survivor(self, k: FloatArray, a: FloatArray, b: FloatArray) -> FloatArray:
        return np.asarray(special.betainc(np.maximum(np.ceil(k), 1.0), a, b))

    def quantile(self, p: FloatArray, a: FloatArray, b: FloatArray) -> FloatArray:
        return np.asarray(stats.nbinom.ppf(p, a, 1 - b))

    def sales(self, y: FloatArray, a: FloatArray, b: FloatArray) -> FloatArray:
        """``E[D] P(D' <= m - 1) + y P(D > m)``, m the whole part of y and D' of shape a + 1."""
        m = np.floor(y)
        below = np.where(m > 0, special.betaincc(np.maximum(m, 1.0), a + 1, b), 0.0)
        return np.asarray(a * b / (1 - b) * below + y * special.betainc(m + 1, a, b))

    def draw(
        self, rng: np.random.Generator, a: FloatArray, b: FloatArray, shape: tuple[int, ...]
    ) -> npt.NDArray[np.int64]:
        return np.asarray(rng.negative_binomial(a, 1 - b, shape))


class GammaLaw(Law):
    """Gamma of shape ``a`` and scale ``b``."""

    def parameters(self, mean: FloatArray, variance: FloatArray) -> tuple[FloatArray, FloatArray]:
        return mean**2 / variance, variance / mean

    def survivor(self, k: FloatArray, a: FloatArray, b: FloatArray) -> FloatArray:
        return np.asarray(special.gammaincc(a, np.maximum(k, 0.0) / b))

    def quantile(self, p: FloatArray, a: FloatArray, b: FloatArray) -> FloatArray:
        return np.asarray(stats.gamma.ppf(p, a, scale=b))

    def sales(self, y: FloatArray, a: FloatArray, b: FloatArray) -> FloatArray:
        """``a b P(D' <= y) + y P(D > y)``, D' of shape a + 1."""
        return np.asarray(a * b * special.gammainc(a + 1, y / b) + y * special.gammaincc(a, y / b))

    def draw(
        self, rng: np.random.Generator, a: FloatArray, b: FloatArray, shape: tuple[int, ...]
    ) -> npt.NDArray[np.float64]:
        return np.asarray(rng.gamma(a, b, shape))


class NormalLaw(Law):
    """Normal of mean ``a`` and deviation ``b``, cut at zero: ``D = max(N, 0)``."""

    def parameters(self, mean: FloatArray, variance: FloatArray) -> tuple[FloatArray, FloatArray]:
        return mean, np.sqrt(variance)

    def survivor(self, k: FloatArray, a: FloatArray, b: FloatArray) -> FloatArray:
        return np.asarray(special.ndtr((a - k) / b))

    def quantile(self, p: FloatArray, a: FloatArray, b: FloatArray) -> FloatArray:
        return np.asarray(stats.norm.ppf(p, a, b))

    def sales(self, y: FloatArray, a: FloatArray, b: FloatArray) -> FloatArray:
        """Difference of the loss function at 0 and at y."""
        return self._loss(np.zeros_like(y), a, b) - self._loss(y, a, b)

    def draw(
        self, rng: np.random.Generator, a: FloatArray, b: FloatArray, shape: tuple[int, ...]
    ) -> npt.NDArray[np.float64]:
        return np.maximum(rng.normal(a, b, shape), 0.0)

    def expected(self, mean: FloatArray, a: FloatArray, b: FloatArray) -> FloatArray:
        """Return the loss function at 0: the cut raises the mean."""
        return self._loss(np.zeros_like(a), a, b)

    @staticmethod
    def _loss(x: FloatArray, a: FloatArray, b: FloatArray) -> FloatArray:
        """``E[max(N - x, 0)]``."""
        z = (x - a) / b
        density = np.exp(-(z**2) / 2) / np.sqrt(2 * np.pi)
        return np.asarray(b * (density - z * special.ndtr(-z)))


class SureLaw(Law):
    """Demand that is ``a`` without doubt."""

    def parameters(self, mean: FloatArray, variance: FloatArray) -> tuple[FloatArray, FloatArray]:
        return mean, np.ones_like(mean)

    def survivor(self, k: FloatArray, a: FloatArray, b: FloatArray) -> FloatArray:
        return (k <= a).astype(np.float64)

    def quantile(self, p: FloatArray, a: FloatArray, b: FloatArray) -> FloatArray:
        return np.where(p > 0, a, 0.0)

    def sales(self, y: FloatArray, a: FloatArray, b: FloatArray) -> FloatArray:
        return np.minimum(a, y)

    def draw(
        self, rng: np.random.Generator, a: FloatArray, b: FloatArray, shape: tuple[int, ...]
    ) -> npt.NDArray[np.float64]:
        return np.broadcast_to(a, shape)


LAWS: dict[int, Law] = {
    SURE: SureLaw(),
    Family.POISSON: PoissonLaw(),
    Family.NEGATIVE_BINOMIAL: NegativeBinomialLaw(),
    Family.GAMMA: GammaLaw(),
    Family.NORMAL: NormalLaw(),
}


def near_quantile(p: FloatArray, mean: FloatArray, variance: FloatArray) -> FloatArray:
    """About the quantiles of Poisson and negative binomial demand, half a passenger less, as starts of a search.

    Normal quantiles corrected for skewness and excess kurtosis (Cornish and Fisher 1938, Moments and cumulants in the
    specification of distributions, Revue de l'Institut International de Statistique 5). Other families are farther off.

    Parameters
    ----------
    p
        (n,) probabilities.
    mean, variance
        (n,) passengers.
    """
    z, deviation = np.clip(special.ndtri(p), -FARTHEST, FARTHEST), np.sqrt(variance)
    ratio = np.divide(variance, mean, out=np.ones_like(mean), where=mean > 0)
    # Skewness and excess kurtosis, each times a power of the deviation so that they stay finite.
    skewness, kurtosis, square = 2 * ratio - 1, 1 + 6 * ratio * (ratio - 1), z * z
    bend = z * (3 * kurtosis * (square - 3) - 2 * skewness * skewness * (2 * square - 5)) / 72
    bend = np.divide(bend, deviation, out=np.zeros_like(mean), where=deviation > 0)
    corrected = z * deviation + skewness * (square - 1) / 6 + np.clip(bend, -deviation, deviation)
    return np.asarray(mean + corrected - 0.5)
