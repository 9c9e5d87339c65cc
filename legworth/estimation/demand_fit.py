"""One fit of everything that history says of demand: rates, curves, effects, dispersion, shrinkage."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from legworth.estimation.closing import ClosingWays, SeenDemand
from legworth.estimation.curves import Shapes
from legworth.estimation.demand_options import DemandOptions
from legworth.estimation.dispersion import Persistence
from legworth.estimation.evidence import (
    class_dispersion,
    effects_of,
    evidence,
    persistence_of,
    products_dispersion,
)
from legworth.estimation.history import BookingHistory
from legworth.estimation.increments import Increments
from legworth.estimation.market_kinds import ONE_KIND, kinds_of_market
from legworth.estimation.pools import Pools
from legworth.estimation.rates import RateModel, Sight, fit_rates, refit_rates, settle, sight
from legworth.estimation.regression import Effects
from legworth.estimation.shrinkage import ShrunkRates
from network.arrays import FloatArray, IntArray, TimeArray
from network.errors import SettingError

__all__ = ["DemandFit", "fit_demand"]

SAMPLE = 1_500_000
"""Rows from which curves, closing and persistence are fitted; rates, effects and dispersion use all."""

UNKNOWN = 0.02
"""Share of intervals not known to be open for how long from which on that is said."""

TURNS = 3
"""Turns of rates and curves, effects, dispersion, shrinkage."""


@dataclass(frozen=True, eq=False)
class DemandFit:
    """What history as known on a day says of all products.

    Products are itineraries in fare classes, position ``itinerary * K + fare_class``.

    Attributes
    ----------
    as_of
        Day of the snapshot, datetime64[D]; later readings were not looked at.
    options
        How it was fitted.
    pools
        City pairs.
    fare_classes
        Names of the K classes.
    model
        Rates as seen, booking curves, variance of every product.
    rates
        Rates shrunk.
    curve_name
        (Q,) names of the curves.
    pair_curve
        (n_pairs + 1, K) curve of a product without history, by city pair and class; the last row is for a city pair
        without history.
    ways
        How classes close.
    effects
        Of weekday and season.
    persistence
        (K,) how far busy departures stay busy.
    observations
        (P,) effective number of departures seen.
    passengers
        (P,) effective number of passengers expected in what was seen.
    warnings
        Sentences on what was not to be had.
    """

    as_of: np.datetime64
    options: DemandOptions
    pools: Pools
    fare_classes: tuple[str, ...]
    model: RateModel
    rates: ShrunkRates
    curve_name: tuple[str, ...]
    pair_curve: IntArray
    ways: ClosingWays
    effects: Effects
    persistence: tuple[Persistence, ...]
    observations: FloatArray
    passengers: FloatArray
    warnings: tuple[str, ...]


@dataclass(frozen=True, eq=False)
class _Series:
    """Series by position: product, class, date and weight by age, (S,) each."""

    product: IntArray
    fare_class: IntArray
    departure: TimeArray
    weight: FloatArray

    @classmethod
    def of(cls, history: BookingHistory, increments: Increments, day: np.datetime64, options: DemandOptions) -> _Series:
        at, n_classes = increments.series, len(history.fare_classes)
        departure, fare_class = history.departure[at].astype("datetime64[D]"), history.series_class[at]
        return cls(
            product=history.series_itinerary[at].astype(np.int64) * n_classes + fare_class,
            fare_class=fare_class,
            departure=departure,
            weight=options.weight((day - departure).astype(np.float64)),
        )

    def take(self, chosen: IntArray) -> _Series:
        return _Series(self.product[chosen], self.fare_class[chosen], self.departure[chosen], self.weight[chosen])


def fit_demand(
    history: BookingHistory, pools: Pools, as_of: np.datetime64, options: DemandOptions | None = None
) -> DemandFit:
    """Fit rates, booking curves, effects and dispersion to the readings known on a day.

    Parameters
    ----------
    history
        Readings; those that fall after ``as_of`` (departure less days before) are not looked at, so that the fit
        can be rolled through history.
    pools
        City pairs.
    as_of
        Day of the snapshot.
    options
        How; the defaults if left out.

    Raises
    ------
    SettingError
        If no reading is known by then, or none shows an open class.
    """
    options = options or DemandOptions()
    day = as_of.astype("datetime64[D]")
    increments = Increments.of(history, day)
    if len(increments) == 0:
        raise SettingError(f"no reading is known by {day}; take a later day or more history")
    series = _Series.of(history, increments, day, options)
    model = _begin(increments, series, len(history.itinerary), len(history.fare_classes))
    sampled = _sample(increments, options.seed)
    if sampled is None:
        fitted = _fit(increments, series, model, pools, options)
        model, view, effects = fitted.model, fitted.view, fitted.effects
    else:
        fitted = _fit(increments.take(sampled), series.take(sampled), model, pools, options)
        model, view, effects = _widen(increments, series, fitted, options)
    notes = _notes(increments, model, view, history.fare_classes, day, settled=fitted.settled)
    model = replace(model, dispersion=class_dispersion(model, view, options.seed))
    model = replace(model, dispersion=products_dispersion(model, view))
    model = refit_rates(model, view)
    seen = evidence(model, view)
    rates = seen.shrunk(pools)
    return DemandFit(
        as_of=day,
        options=options,
        pools=pools,
        fare_classes=history.fare_classes,
        model=model,
        rates=rates,
        curve_name=tuple(f"{name}{kind}" for kind in fitted.kinds for name in history.fare_classes),
        pair_curve=_pair_curves(model, pools),
        ways=view.seen.ways,
        effects=effects,
        persistence=fitted.persistence,
        observations=seen.observations,
        passengers=seen.exposure.ravel() * rates.rate,
        warnings=notes,
    )


def _notes(
    increments: Increments,
    model: RateModel,
    view: Sight,
    fare_classes: tuple[str, ...],
    day: np.datetime64,
    *,
    settled: bool,
) -> tuple[str, ...]:
    """Say what was not to be had, in sentences."""
    reach = np.bincount(model.fare_class[view.product], view.reach, minlength=len(fare_classes))
    never = [name for name, seen in zip(fare_classes, reach, strict=True) if seen <= 0]
    if len(never) == len(fare_classes):
        raise SettingError(
            f"no class was open in any reading known by {day}, so that nothing is known of demand; open must be true "
            "where a class was for sale"
        )
    notes = [
        f"Class {name} was never open in this history: nothing is known of its demand, and 0 was written, which keeps "
        "no seats for it; give its demand by adjustments or take more history"
        for name in never
    ]
    blind = np.unique(np.flatnonzero(np.any(model.shapes.blind, axis=1)) % len(fare_classes))
    hardly = [fare_classes[at] for at in blind if fare_classes[at] not in never]
    if hardly:
        notes.append(
            f"Hardly ever open in some interval: {', '.join(hardly)}; that part of the booking curves is borrowed"
        )
    if not np.any(view.came):
        notes.append(
            "Nothing was booked in this history: 0 was written for every product, which keeps no seats for any"
        )
    unknown = float(np.mean(np.isnan(increments.share)))
    if unknown > UNKNOWN:
        notes.append(
            f"Of {unknown:.0%} of the intervals it is not known how long the class was open (no open_share): most of "
            "them count for nothing, and classes that are closed often are probably estimated low"
        )
    if not settled:
        notes.append("Booking curves had not settled when the limit of rounds was reached; history may be too thin")
    return tuple(notes)


def _pair_curves(model: RateModel, pools: Pools) -> IntArray:
    """Curves by city pair and class; where there is no history those of the commoner kind."""
    by_itinerary = model.curve.reshape(-1, model.n_classes)
    curve = np.empty((len(pools.name) + 1, model.n_classes), dtype=np.int64)
    curve[-1] = np.median(by_itinerary // model.n_classes).round() * model.n_classes + np.arange(model.n_classes)
    curve[:-1] = curve[-1]
    curve[pools.city_pair] = by_itinerary
    return curve


def _begin(increments: Increments, series: _Series, n_itineraries: int, n_classes: int) -> RateModel:
    """Rates as booked, flat curves, a middling dispersion."""
    n_products = n_itineraries * n_classes
    fare_class = np.tile(np.arange(n_classes), n_itineraries)
    booked = series.weight * increments.per_series(increments.count)
    came = np.bincount(series.product, booked, minlength=n_products)
    exposure = np.bincount(series.product, series.weight, minlength=n_products)
    by_class = [np.bincount(fare_class, figures, minlength=n_classes) for figures in (came, exposure)]
    prior = (by_class[0] / np.maximum(by_class[1], 1e-300))[fare_class]
    return RateModel(
        rate=(came + prior) / (exposure + 1),
        curve=fare_class,
        fare_class=fare_class,
        shapes=Shapes.flat(increments.days, n_classes),
        dispersion=np.full(n_products, 0.5),
        prior=prior,
    )


def _sample(increments: Increments, seed: int) -> IntArray | None:
    """Series from which curves are fitted; None for all."""
    if len(increments) <= SAMPLE:
        return None
    share = SAMPLE / len(increments)
    return np.flatnonzero(np.random.default_rng(seed).random(len(increments.series)) < share)


@dataclass(frozen=True, eq=False)
class _Fitted:
    """A fit to series, and how it went."""

    model: RateModel
    view: Sight
    effects: Effects
    kinds: tuple[str, ...]
    persistence: tuple[Persistence, ...]
    settled: bool


def _fit(increments: Increments, series: _Series, model: RateModel, pools: Pools, options: DemandOptions) -> _Fitted:
    """Fit everything by turns to all rows given."""
    seen = SeenDemand.of(increments, options.closing, model.n_classes)
    view = sight(increments, model, series.product, np.ones(len(series.product)), series.weight, seen)
    kinds: tuple[str, ...] = ONE_KIND
    effects, settled = Effects.none(model.n_classes), True
    for turn in range(TURNS):
        model, view, settled = fit_rates(increments, model, view)
        if turn == 0:
            model, kinds = kinds_of_market(increments, model, view, pools)
        effects = effects_of(model, view, series.departure, weekday=options.weekday, season=options.season)
        view = replace(view, effect=effects.factor(series.fare_class, series.departure))
        model = refit_rates(model, view)
        model = replace(model, dispersion=class_dispersion(model, view, options.seed))
        model = replace(model, prior=evidence(model, view).shrunk(pools).rate)
    return _Fitted(model, view, effects, kinds, persistence_of(increments, model, view), settled)


def _widen(
    increments: Increments, series: _Series, fitted: _Fitted, options: DemandOptions
) -> tuple[RateModel, Sight, Effects]:
    """Fit rates and effects to all rows, the curves as a sample shaped them."""
    model, effects = fitted.model, fitted.effects
    seen = SeenDemand.of(increments, options.closing, model.n_classes)
    for _ in range(2):
        effect = effects.factor(series.fare_class, series.departure)
        view = sight(increments, model, series.product, effect, series.weight, seen)
        model, view = settle(increments, model, view)
        seen = view.seen
        effects = effects_of(model, view, series.departure, weekday=options.weekday, season=options.season)
    view = replace(view, effect=effects.factor(series.fare_class, series.departure))
    return refit_rates(model, view), view, effects
