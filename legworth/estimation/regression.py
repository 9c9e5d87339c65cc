"""Effects of weekday and time of year on the demand of a class: a count regression.

Passengers of a class on a date are regressed on the weekday and on two harmonics of the year, with the logarithm of
the passengers that rates and openness would have brought as offset: first of all classes together, then of every
class with the common effects in the offset, so that each departs from them as far as it shows. The family is negative
binomial where dates vary more than Poisson counts, else Poisson; the solver is that of statsmodels. An effect is
pulled towards none by how far chance alone would explain it (James-Stein, by its Wald statistic).
"""

from __future__ import annotations

import warnings as python_warnings
from dataclasses import dataclass

import numpy as np
from statsmodels.genmod.families import NegativeBinomial, Poisson
from statsmodels.genmod.generalized_linear_model import GLM
from statsmodels.tools.sm_exceptions import ConvergenceWarning, PerfectSeparationWarning

from network.arrays import FloatArray, IntArray, TimeArray

__all__ = ["YEAR", "Effects", "fit_effects"]

YEAR = 365.2425
"""Days."""

MOST_OF_A_YEAR = 330
"""Days of departures below which no effect of the time of year is fitted."""

WEEKS = 5
"""Weeks of departures below which no effect of the weekday is fitted."""

_HARMONICS = 2
_LIMIT = 1.5


@dataclass(frozen=True, eq=False)
class Effects:
    """Effects by class.

    Attributes
    ----------
    weekday
        (K, 7) logarithms, Monday first; each class's mean over the week is 0.
    season
        (K, 4) coefficients of cosine and sine of the year, then of the half-year.
    """

    weekday: FloatArray
    season: FloatArray

    @classmethod
    def none(cls, n_classes: int) -> Effects:
        """No effects."""
        return cls(np.zeros((n_classes, 7)), np.zeros((n_classes, 2 * _HARMONICS)))

    def factor(self, fare_class: IntArray, departure: TimeArray) -> FloatArray:
        """(n,) factors of classes on dates."""
        if not len(departure):
            return np.zeros(0)
        day = departure.astype("datetime64[D]").astype(np.int64)
        first = int(day.min())
        dates = np.arange(first, int(day.max()) + 1)
        return np.asarray(self.factor_of(dates, len(self.weekday))[fare_class, day - first])

    def factor_of(self, day: IntArray, n_classes: int) -> FloatArray:
        """(n_classes, D) factors of days since 1970-01-01; those of one class hold for all."""
        logarithm = self.weekday[:, _weekday(day)] + self.season @ _waves(day).T
        factor = np.exp(np.clip(logarithm, -_LIMIT, _LIMIT))
        return np.broadcast_to(factor, (n_classes, len(day)))


def _weekday(day: IntArray) -> IntArray:
    """Weekday of days since 1970-01-01, a Thursday; Monday is 0."""
    return np.asarray((day + 3) % 7)


def _waves(day: IntArray) -> FloatArray:
    """(n, 4) cosines and sines."""
    angle = 2 * np.pi * day[:, None] / YEAR * np.arange(1, _HARMONICS + 1)
    return np.stack([np.cos(angle), np.sin(angle)], axis=2).reshape(len(day), -1)


def fit_effects(day: IntArray, came: FloatArray, expected: FloatArray, *, weekday: bool, season: bool) -> Effects:
    """Fit the effects of every class.

    Parameters
    ----------
    day
        (D,) dates as days since 1970-01-01, rising.
    came, expected
        (K, D) effective passengers seen, and expected without effects; dates without any expected are left out.
    weekday, season
        Which effects are wanted; each needs enough history.

    Returns
    -------
    Effects
        Zero where not wanted or not to be had.
    """
    common = _fit_one(day, came.sum(axis=0), expected.sum(axis=0), weekday=weekday, season=season)
    own = [
        _fit_one(day, seen, plan * factor, weekday=weekday, season=season)
        for seen, plan, factor in zip(came, expected, common.factor_of(day, len(came)), strict=True)
    ]
    return Effects(
        np.concatenate([common.weekday + each.weekday for each in own]),
        np.concatenate([common.season + each.season for each in own]),
    )


def _fit_one(day: IntArray, came: FloatArray, expected: FloatArray, *, weekday: bool, season: bool) -> Effects:
    """Effects of one class."""
    effects = Effects.none(1)
    used = expected > 1e-6
    days = day[used]
    if not len(days):
        return effects
    span = int(days.max() - days.min()) + 1
    present = np.unique(_weekday(days)) if weekday and span >= 7 * WEEKS else np.zeros(0, dtype=np.int64)
    blocks = []
    if len(present) > 1:
        dummies = (_weekday(days)[:, None] == present).astype(np.float64)
        blocks.append(dummies[:, :-1] - dummies[:, -1:])
    if season and span >= MOST_OF_A_YEAR:
        blocks.append(_waves(days))
    sizes = [block.shape[1] for block in blocks]
    if not blocks or len(days) <= 2 * (1 + sum(sizes)):
        return effects
    found = _regress(came[used], expected[used], np.column_stack([np.ones(len(days)), *blocks]), sizes)
    if found is None:
        return effects
    if len(present) > 1:
        own = found[: len(present) - 1]
        effects.weekday[0, present] = np.append(own, -own.sum())
    if season and span >= MOST_OF_A_YEAR:
        effects.season[0] = found[-2 * _HARMONICS :]
    return effects


def _regress(came: FloatArray, expected: FloatArray, design: FloatArray, sizes: list[int]) -> FloatArray | None:
    """Coefficients without the intercept, each block pulled towards none; None where there is nothing to regress."""
    if came.sum() <= len(sizes) + design.shape[1]:
        return None
    offset = np.log(expected)
    poisson = GLM(came, design, family=Poisson(), offset=offset)
    with python_warnings.catch_warnings():
        # Counts of a class that hardly sells may be separated perfectly; the pull and the limit deal with that.
        for category in (ConvergenceWarning, PerfectSeparationWarning, RuntimeWarning):
            python_warnings.simplefilter("ignore", category)
        fit = poisson.fit()
        mean = fit.mu
        excess = float(np.sum((came - mean) ** 2 - mean) / np.sum(mean**2))
        if excess > 1e-6:
            fit = GLM(came, design, family=NegativeBinomial(alpha=excess), offset=offset).fit()
    if not np.all(np.isfinite(fit.params)):
        return None
    answer, at = [], 1
    covariance = np.asarray(fit.cov_params())
    for size in sizes:
        block = slice(at, at + size)
        own = np.asarray(fit.params[block])
        wald = float(own @ np.linalg.pinv(covariance[block, block]) @ own)
        answer.append(own * max(0.0, 1 - size / wald) if wald > 0 else own)
        at += size
    return np.concatenate(answer)
