"""`Demand`: independent demands to come, worked on as arrays.

Four families are offered. The normal one is cut at zero, ``D = max(N, 0)``: negative demand counts as
none, so that ``P(D >= k)`` for ``k > 0`` is the plain normal's. A mean of zero is no demand at all, and
a normal or gamma demand without deviation is its mean, surely.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt

from network.arrays import FloatArray
from network.families import LAWS, SURE, Family, Law, near_quantile
from network.runs import greatest_seats

__all__ = ["Demand", "Family"]

IndexArray = npt.NDArray[np.intp]
Place = slice | npt.NDArray[np.bool_]

POISSON_BAND = 0.05
"""``auto`` takes Poisson where the variance lies within this share of the mean."""

ROWS_AT_ONCE = 1_000_000
"""Demands looked at together where it makes no difference."""

_ROUNDING = 1e-9
_NOBODY = 1e-12


@dataclass(frozen=True, eq=False)
class Demand:
    """Independent demands to come, by position.

    Attributes
    ----------
    mean, deviation
        (n,) passengers, finite and not negative. The mean is that of the family before any cut at zero.
    family
        (n,) values of `Family` as int8.

    Raises
    ------
    ValueError
        If shapes differ, a figure is NaN, infinite or negative, or a family cannot have its figures.
    """

    mean: FloatArray
    deviation: FloatArray
    family: npt.NDArray[np.int8]

    def __post_init__(self) -> None:
        """Copy what others could change, check and freeze the figures."""
        mean = _figures(self.mean, "mean")
        deviation = _figures(self.deviation, "deviation")
        family = _copied(self.family, np.int8)
        if mean.ndim != 1 or not mean.shape == deviation.shape == family.shape:
            raise ValueError(f"shapes differ: mean {mean.shape}, deviation {deviation.shape}, {family.shape}")
        if np.any((family < min(Family)) | (family > max(Family))):
            raise ValueError("family holds values that are none of Family")
        for rows in _parts(len(mean)):
            spread = deviation[rows] ** 2 > mean[rows]
            if np.any((family[rows] == Family.NEGATIVE_BINOMIAL) & (mean[rows] > 0) & ~spread):
                raise ValueError("a negative binomial demand needs a variance above its mean")
        for name, values in (("mean", mean), ("deviation", deviation), ("family", family)):
            object.__setattr__(self, name, _own(values))

    @classmethod
    def of(cls, mean: npt.ArrayLike, deviation: npt.ArrayLike, family: str = "auto") -> Demand:
        """Build demands of one forced family, or let each choose its own.

        Parameters
        ----------
        mean, deviation
            (n,) passengers. A mean of zero is no demand: its deviation is taken as zero.
        family
            ``auto`` takes Poisson where the variance is within 5 % of the mean, negative binomial above and
            the normal cut at zero below. ``poisson`` ignores the deviation; ``negative_binomial`` is
            Poisson where the variance does not exceed the mean; ``gamma`` and ``normal`` take all.

        Raises
        ------
        ValueError
            If shapes differ, a figure is NaN, infinite or negative, or the family is unknown.

        Examples
        --------
        >>> Demand.of([20.0, 20.0, 20.0], [4.5, 9.0, 2.0]).family.tolist()
        [0, 1, 3]
        """
        mean = np.atleast_1d(_figures(mean, "mean"))
        deviation = np.atleast_1d(_figures(deviation, "deviation"))
        if mean.shape != deviation.shape:
            raise ValueError(f"shapes differ: mean {mean.shape}, deviation {deviation.shape}")
        deviation = np.where(mean > 0, deviation, 0.0)
        chosen = np.full(mean.shape, Family.NORMAL if family == "auto" else Family.of(family), dtype=np.int8)
        for rows in _parts(len(mean)):
            part, below, variance = chosen[rows], mean[rows], deviation[rows] ** 2
            if family == "auto":
                part[variance > below] = Family.NEGATIVE_BINOMIAL
                part[np.abs(variance - below) <= POISSON_BAND * below] = Family.POISSON
            elif family == Family.NEGATIVE_BINOMIAL.word:
                part[variance <= below * (1 + _ROUNDING)] = Family.POISSON
        return cls(*(_own(figures) for figures in (mean, deviation, chosen)))

    def __len__(self) -> int:
        """Return the number of demands."""
        return len(self.mean)

    def take(self, index: npt.ArrayLike) -> Demand:
        """Return the demands at some positions (or under a boolean mask), in that order."""
        index = np.asarray(index)
        if index.size == 0:
            index = index.astype(np.intp)
        return Demand(*(_own(figures[index]) for figures in (self.mean, self.deviation, self.family)))

    def survivor(self, k: npt.ArrayLike, index: npt.ArrayLike | None = None) -> FloatArray:
        """Probability that demand reaches ``k``: ``S(k) = P(D >= k)``.

        Parameters
        ----------
        k
            Passengers, whole or not. Without ``index`` it is broadcast against the (n,) demands, so that
            shape (m, 1) gives (m, n).
        index
            Positions of demands, of the shape of ``k``; ``k[i]`` then belongs to demand ``index[i]``.

        Returns
        -------
        FloatArray
            Probabilities of the broadcast shape; 1 where ``k <= 0``, 0 where ``k`` is infinite.

        Raises
        ------
        ValueError
            If ``k`` holds NaN or the shapes do not fit.
        """
        k, at = self._aligned(k, index)
        answer = np.empty(k.shape)
        for law, where, i in self._groups(at):
            x = k[where]
            answer[where] = np.where(x > 0, law.survivor(x, self._first[i], self._second[i]), 1.0)
        answer[k == np.inf] = 0.0
        return answer

    def quantile(self, p: npt.ArrayLike) -> FloatArray:
        """Least ``q >= 0`` with ``P(D <= q) >= p``; a whole number for the discrete families.

        Parameters
        ----------
        p
            Probabilities in [0, 1], broadcast against the (n,) demands.

        Raises
        ------
        ValueError
            If a probability is NaN or outside [0, 1], or the shapes do not fit.
        """
        p, at = self._aligned(p, None)
        if np.any((p < 0) | (p > 1)):
            raise ValueError("probabilities must lie between 0 and 1")
        answer = np.empty(p.shape)
        for law, where, i in self._groups(at):
            answer[where] = np.maximum(law.quantile(p[where], self._first[i], self._second[i]), 0.0)
        return answer

    def expected_sales(self, y: npt.ArrayLike) -> FloatArray:
        """Passengers expected on ``y`` seats held for the demand alone: ``E[min(D, y)]``.

        Parameters
        ----------
        y
            Seats, not negative and possibly infinite, broadcast against the (n,) demands.

        Raises
        ------
        ValueError
            If ``y`` is NaN or negative, or the shapes do not fit.
        """
        y, at = self._aligned(y, None)
        if np.any(y < 0):
            raise ValueError("seats must not be negative")
        answer = np.empty(y.shape)
        for law, where, i in self._groups(at):
            x, limit = y[where], self.expected[i]
            finite = np.isfinite(x)
            sales = law.sales(np.where(finite, x, 0.0), self._first[i], self._second[i])
            answer[where] = np.where(finite, np.clip(sales, 0.0, np.minimum(x, limit)), limit)
        return answer

    @cached_property
    def expected(self) -> FloatArray:
        """(n,) mean of each demand as modelled; differs from ``mean`` only for the normal cut at zero."""
        answer = np.empty(len(self))
        for law, where, i in self._groups(np.arange(len(self))):
            answer[where] = law.expected(self.mean[i], self._first[i], self._second[i])
        answer.flags.writeable = False
        return answer

    @cached_property
    def variance(self) -> FloatArray:
        """(n,) variance of each demand's family before any cut at zero: of Poisson demand its mean."""
        answer = np.where(self.family == Family.POISSON, self.mean, self.deviation**2)
        answer.flags.writeable = False
        return answer

    def seats(self, tail: float = 1e-6) -> npt.NDArray[np.int64]:
        """Seats on which each demand matters: the greatest whole ``k`` with ``S(k) >= tail``, (n,).

        Parameters
        ----------
        tail
            Probability, above 0 and at most 1.

        Raises
        ------
        ValueError
            If ``tail`` is outside its limits.
        """
        if not 0 < tail <= 1:
            raise ValueError(f"tail must be above 0 and at most 1, got {tail}")
        start = self.near_quantile(np.full(len(self), 1 - tail))
        return greatest_seats(start, lambda k, at: self.survivor(k, at) >= tail).astype(np.int64)

    def near_quantile(self, p: FloatArray) -> FloatArray:
        """About the quantiles at (n,) probabilities, as starts of a search, (n,); see `network.families`."""
        return near_quantile(p, self.mean, self.variance)

    def sample(self, rng: np.random.Generator, size: int) -> FloatArray:
        """Draw ``size`` independent outcomes of every demand, giving (size, n) passengers."""
        answer = np.empty((size, len(self)))
        for law, where, i in self._groups(np.arange(len(self))):
            answer[:, where] = law.draw(rng, self._first[i], self._second[i], (size, len(i)))
        return answer

    @cached_property
    def _kind(self) -> npt.NDArray[np.int8]:
        """(n,) key of each demand in `LAWS`."""
        exact = (self.family >= Family.GAMMA) & (self.deviation <= _ROUNDING * self.mean)
        return np.where(exact | (self.mean <= _NOBODY), SURE, self.family).astype(np.int8)

    @cached_property
    def _parameters(self) -> tuple[FloatArray, FloatArray]:
        first, second = np.empty(len(self)), np.empty(len(self))
        for law, where, i in self._groups(np.arange(len(self))):
            first[where], second[where] = law.parameters(self.mean[i], self.deviation[i] ** 2)
        return first, second

    @property
    def _first(self) -> FloatArray:
        return self._parameters[0]

    @property
    def _second(self) -> FloatArray:
        return self._parameters[1]

    def _aligned(self, values: npt.ArrayLike, index: npt.ArrayLike | None) -> tuple[FloatArray, IndexArray]:
        """Broadcast values against the positions of the demands they belong to."""
        values = np.asarray(values, dtype=np.float64)
        at = np.arange(len(self)) if index is None else np.asarray(index, dtype=np.intp)
        if np.any(np.isnan(values)):
            raise ValueError("NaN among the arguments")
        if index is not None and at.shape != values.shape:
            raise ValueError(f"shapes differ: values {values.shape}, index {at.shape}")
        values, at = np.broadcast_arrays(values, at)
        return values, at

    def _groups(self, at: IndexArray) -> Iterator[tuple[Law, Place, IndexArray]]:
        """Yield each law among the positions ``at``, the places where it stands, and their positions."""
        kind = self._kind[at]
        present = [key for key in LAWS if np.any(kind == key)]
        for key in present:
            where: Place = slice(None) if len(present) == 1 else kind == key
            yield LAWS[key], where, at[where]


def _figures(values: npt.ArrayLike, name: str) -> FloatArray:
    """Copy figures into floats; raise unless they are finite and not negative."""
    figures = _copied(values, np.float64)
    if not np.all(np.isfinite(figures)) or np.any(figures < 0):
        raise ValueError(f"{name} must be finite and not negative")
    return figures


def _copied(values: npt.ArrayLike, kind: npt.DTypeLike) -> npt.NDArray[Any]:
    """Copy values to an array of a type, unless they are one that nobody can change any more."""
    fixed = isinstance(values, np.ndarray) and values.base is None and not values.flags.writeable
    return np.asarray(values, dtype=kind) if fixed else np.array(values, dtype=kind)


def _own(values: npt.NDArray[Any]) -> npt.NDArray[Any]:
    """Freeze an array that nobody else holds."""
    values.flags.writeable = False
    return values


def _parts(length: int) -> Iterator[slice]:
    """Cut positions into stretches, so that what a step needs in between stays small."""
    return (slice(first, first + ROWS_AT_ONCE) for first in range(0, length, ROWS_AT_ONCE))
