"""What a sight of departures says of products, of dates and of how much departures vary."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from legworth.estimation.dispersion import Persistence, fit_over_dispersion, persistence, product_dispersion
from legworth.estimation.increments import Increments
from legworth.estimation.pools import Pools
from legworth.estimation.rates import RateModel, Sight
from legworth.estimation.regression import Effects, fit_effects
from legworth.estimation.shrinkage import ShrunkRates, shrink_rates
from network.arrays import FloatArray, TimeArray

__all__ = ["Evidence", "class_dispersion", "effects_of", "evidence", "persistence_of", "products_dispersion"]

DISPERSION_SERIES = 100_000
"""Departures of a class at most from which its dispersion is fitted."""


@dataclass(frozen=True, eq=False)
class Evidence:
    """What was seen of every product.

    Attributes
    ----------
    came, exposure
        (I, K) effective passengers seen and effective departures, open and of effect 1: weights by age and by
        dispersion are scaled so that passengers seen vary like a Poisson count.
    departures
        (I, K) departures, weighed by age alone, as far as they were open.
    observations
        (P,) effective number of departures: squared sum over sum of squares.
    """

    came: FloatArray
    exposure: FloatArray
    departures: FloatArray
    observations: FloatArray

    def shrunk(self, pools: Pools) -> ShrunkRates:
        """Shrink the rates towards the pools."""
        return shrink_rates(self.came, self.exposure, self.departures, pools.city_pair, len(pools.name))


def evidence(model: RateModel, view: Sight) -> Evidence:
    """Sum up by product what was seen."""
    exposure = view.effect * view.reach
    said = view.weight / (1 + model.dispersion[view.product] * model.rate[view.product] * exposure)
    open_ = view.weight * view.reach

    def by_product(figures: FloatArray) -> FloatArray:
        return np.bincount(view.product, figures, minlength=len(model.rate)).astype(np.float64)

    came, seen = by_product(said * view.came), by_product(said * exposure)
    scale = seen / np.maximum(by_product(said * view.weight * exposure), 1e-300)
    return Evidence(
        came=(scale * came).reshape(-1, model.n_classes),
        exposure=(scale * seen).reshape(-1, model.n_classes),
        departures=by_product(view.weight * exposure).reshape(-1, model.n_classes),
        observations=by_product(open_) ** 2 / np.maximum(by_product(open_**2), 1e-300),
    )


def effects_of(model: RateModel, view: Sight, departure: TimeArray, *, weekday: bool, season: bool) -> Effects:
    """Effects by class, from passengers by class and date, weighed by what they say.

    Parameters
    ----------
    model, view
        Model and what was seen; effects so far only weigh.
    departure
        (S,) dates.
    weekday, season
        Which effects are wanted.
    """
    if not (weekday or season):
        return Effects.none(model.n_classes)
    dates, date = np.unique(departure, return_inverse=True)
    plain = model.rate[view.product] * view.reach
    expected = plain * view.effect
    said = view.weight / (1 + model.dispersion[view.product] * expected)
    at = model.fare_class[view.product] * len(dates) + date

    def by_date(figures: FloatArray) -> FloatArray:
        sums = np.bincount(at, figures, minlength=model.n_classes * len(dates))
        return np.asarray(sums.reshape(model.n_classes, -1), dtype=np.float64)

    scale = by_date(said * expected) / np.maximum(by_date(said * view.weight * expected), 1e-300)
    return fit_effects(
        dates.astype("datetime64[D]").astype(np.int64),
        scale * by_date(said * view.came),
        scale * by_date(said * plain),
        weekday=weekday,
        season=season,
    )


def class_dispersion(model: RateModel, view: Sight, seed: int) -> FloatArray:
    """(P,) variance a of departures beyond Poisson, that of the class for all its products."""
    mean = model.rate[view.product] * view.effect * view.reach
    fare_class = model.fare_class[view.product]
    by_class = np.zeros(model.n_classes)
    rng = np.random.default_rng(seed)
    for at in range(model.n_classes):
        mine = np.flatnonzero((fare_class == at) & (mean > 0))
        if len(mine) > DISPERSION_SERIES:
            mine = rng.choice(mine, DISPERSION_SERIES, replace=False)
        by_class[at] = fit_over_dispersion(view.came[mine], mean[mine], view.weight[mine])
    return by_class[model.fare_class]


def products_dispersion(model: RateModel, view: Sight) -> FloatArray:
    """(P,) variance a of every product, drawn from the logarithms of its class."""
    mean = model.rate[view.product] * view.effect * view.reach
    return product_dispersion(view.came, mean, view.weight, view.product, model.dispersion, model.fare_class)


def persistence_of(increments: Increments, model: RateModel, view: Sight) -> tuple[Persistence, ...]:
    """How far busy departures stay busy, by class, from intervals that were open throughout."""
    curve = model.curve[view.product][increments.owner]
    base = model.rate[view.product] * view.effect
    expected = np.where(increments.open, base[increments.owner] * model.shapes.reach(increments, curve), 0.0)
    residual = np.where(increments.open, increments.count, 0.0) - expected
    squares, own = increments.per_series(residual**2), increments.per_series(expected**2)
    total, mean = increments.per_series(residual), increments.per_series(expected)
    mine = [model.fare_class[view.product] == at for at in range(model.n_classes)]
    return tuple(persistence(squares[at], own[at], total[at], mean[at]) for at in mine)
