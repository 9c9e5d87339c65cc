"""Demand to come of any departure of any product: rate, effects, curve, and what is booked so far."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from legworth.estimation.closing import SeenDemand
from legworth.estimation.demand_fit import DemandFit
from legworth.estimation.history import BookingHistory
from legworth.estimation.increments import Increments
from legworth.estimation.pickup import pick_up
from legworth.estimation.rates import fill, sight
from network.arrays import BoolArray, FloatArray, IntArray, TimeArray

__all__ = ["WEAK", "Forecast", "find_series", "forecast"]

WEAK = 1.0
"""Effective passengers expected in a product's own history below which its figures are called weak."""


@dataclass(frozen=True, eq=False)
class Forecast:
    """Demand to come of n departures of products, and what it is made of.

    Attributes
    ----------
    mean, deviation
        (n,) passengers to come, were the class always open. The deviation holds what varies from departure to departure
        and what is not known of the mean; with ``network.demand.Demand.of(mean, deviation)`` it is a distribution.
    rate
        (n,) passengers over the whole horizon of an average departure, shrunk.
    effect
        (n,) factor of weekday and time of year.
    to_come
        (n,) share of the booking curve still to come.
    update
        (n,) factor by which bookings so far moved the mean (1 where they say nothing).
    own_weight
        (n,) weight of the product's own history in its rate, 0 (all borrowed) to 1.
    observations
        (n,) effective number of departures seen.
    weak
        (n,) True where the product's own history would have held less than a passenger, so that the figures rest on its
        pool: new products, and such as were closed all along.
    curve
        (n,) position among the fitted booking curves.
    """

    mean: FloatArray
    deviation: FloatArray
    rate: FloatArray
    effect: FloatArray
    to_come: FloatArray
    update: FloatArray
    own_weight: FloatArray
    observations: FloatArray
    weak: BoolArray
    curve: IntArray


def find_series(history: BookingHistory, itinerary: IntArray, fare_class: IntArray, departure: TimeArray) -> IntArray:
    """(n,) position of the series of itineraries, classes (positions) and dates; -1 where history has none."""
    if not len(history.departure):
        return np.full(len(itinerary), -1)
    n_classes, day = len(history.fare_classes), history.departure.astype("datetime64[D]").astype(np.int64)
    wanted = np.asarray(departure).astype("datetime64[D]").astype(np.int64)
    first = min(int(day.min()), int(wanted.min(initial=day.min())))
    span = max(int(day.max()), int(wanted.max(initial=day.max()))) - first + 1
    key = (history.series_itinerary.astype(np.int64) * n_classes + history.series_class) * span + day - first
    sought = (itinerary.astype(np.int64) * n_classes + fare_class) * span + wanted - first
    place = np.minimum(np.searchsorted(key, sought), len(key) - 1)
    return np.where((key[place] == sought) & (itinerary >= 0), place, -1)


def forecast(
    fit: DemandFit,
    itinerary: IntArray,
    fare_class: IntArray,
    departure: TimeArray,
    days_left: FloatArray,
    history: BookingHistory | None = None,
    city_pair: IntArray | None = None,
) -> Forecast:
    """Forecast demand to come of departures of products.

    Parameters
    ----------
    fit
        From `fit_demand`.
    itinerary, fare_class
        (n,) positions as in the history; itinerary -1 for one that history does not know, which falls back to its
        city pair and class, or to its class.
    departure
        (n,) dates, datetime64[D].
    days_left
        (n,) days before departure from which demand is to come.
    history
        Where bookings so far are looked up: of a departure whose readings it holds, those at ``days_left`` days or
        more count, later ones are not looked at. None: nothing is known of what is booked.
    city_pair
        (n,) city pairs of itineraries that history does not know, -1 where they are not known either.

    Returns
    -------
    Forecast
        (n,) figures.
    """
    model, n_classes = fit.model, len(fit.fare_classes)
    known = itinerary >= 0
    product = np.where(known, itinerary, 0).astype(np.int64) * n_classes + fare_class

    def of_product(figures: FloatArray, otherwise: FloatArray | float) -> FloatArray:
        return np.where(known, figures[product], otherwise)

    # Itineraries without history stand in the row of their city pair, the last where that has none either.
    pair = np.full(len(product), -1) if city_pair is None else city_pair
    class_dispersion = np.array([np.median(model.dispersion[model.fare_class == k]) for k in range(n_classes)])
    rate = of_product(fit.rates.rate, fit.rates.pair_rate[pair, fare_class])
    variance = of_product(model.dispersion, class_dispersion[fare_class])
    curve = np.where(known, model.curve[product], fit.pair_curve[pair, fare_class])
    effect = fit.effects.factor(fare_class, np.asarray(departure))
    base = rate * effect
    to_come = model.shapes.to_come(curve, days_left)
    came, seen, seen_squares = _so_far(fit, history, itinerary, fare_class, departure, days_left, base, curve, variance)
    lasting = np.array([p.share for p in fit.persistence])[fare_class]
    dense = np.array([p.concentration for p in fit.persistence])[fare_class]
    anew = (1 - lasting) * variance / np.maximum(dense, 1e-12)
    result = pick_up(
        expected=base * to_come,
        came=came,
        expected_so_far=seen,
        variance=variance,
        lasting=lasting,
        fresh_so_far=anew * seen_squares,
        fresh=anew * model.shapes.density(curve, days_left),
        rate_variance=of_product(fit.rates.variance, fit.rates.pair_variance[pair, fare_class]),
        way=fit.options.pickup,
    )
    passengers = of_product(fit.passengers, 0.0)
    return Forecast(
        mean=result.mean,
        deviation=result.deviation,
        rate=rate,
        effect=effect,
        to_come=to_come,
        update=result.update,
        own_weight=of_product(fit.rates.own_weight, 0.0),
        observations=of_product(fit.observations, 0.0),
        weak=passengers < WEAK,
        curve=curve,
    )


def _so_far(
    fit: DemandFit,
    history: BookingHistory | None,
    itinerary: IntArray,
    fare_class: IntArray,
    departure: TimeArray,
    days_left: FloatArray,
    base: FloatArray,
    curve: IntArray,
    variance: FloatArray,
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Passengers seen so far while open, passengers expected, and the sum of squared shares of these by interval."""
    came, expected, squares = np.zeros(len(base)), np.zeros(len(base)), np.ones(len(base))
    if history is None:
        return came, expected, squares
    series = find_series(history, itinerary, fare_class, departure)
    rows = np.flatnonzero((series >= 0) & (base > 0))
    increments = Increments.of(history, None, series[rows], days_left[rows], fit.model.shapes.days)
    rows = rows[increments.series]
    if not len(rows):
        return came, expected, squares
    # Every departure is a product of its own here, of its rate times its effect.
    model = replace(
        fit.model,
        rate=base[rows],
        curve=curve[rows],
        fare_class=fare_class[rows],
        dispersion=variance[rows],
        prior=base[rows],
    )
    seen = replace(SeenDemand.of(increments, fit.options.closing, len(fit.fare_classes)), ways=fit.ways, learning=False)
    one = np.ones(len(rows))
    view = sight(increments, model, np.arange(len(rows)), one, one, seen)
    for _ in range(2):
        view = replace(view, seen=fill(increments, model, view))
        view = sight(increments, model, view.product, one, one, view.seen)
    reach = model.shapes.reach(increments, model.curve[increments.owner]) * view.seen.part
    came[rows], expected[rows] = view.came, base[rows] * view.reach
    squares[rows] = increments.per_series(reach**2) / np.maximum(view.reach, 1e-12) ** 2
    return came, expected, squares
