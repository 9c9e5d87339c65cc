"""What methods of unconstraining make of the same history: mean whole demand by class, beside bookings and estimate.

All figures are of the same departures, those that have left, and each departure counts as much as in the estimate,
by its age. A method is given each class and interval as one sample of all products and departures; the estimate fits
every product.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from legworth.estimation.censored_sample import EmOptions
from legworth.estimation.demand_fit import DemandFit
from legworth.estimation.history import BookingHistory
from legworth.estimation.increments import Increments
from legworth.estimation.unconstraining import METHODS, ClassSamples
from network.arrays import FloatArray, IntArray
from network.model import ranges

__all__ = ["BOOKED", "ESTIMATE", "MethodComparison", "MethodMean", "compare_methods", "usual_days"]

BOOKED, ESTIMATE = "booked", "estimate"
"""Names of the lines that are no method: bookings as they are, and the estimate."""

STOPPING = EmOptions(tolerance=1e-6, iterations=1000)
"""Means are shown to a tenth of a per cent."""


@dataclass(frozen=True, eq=False)
class MethodMean:
    """Mean whole demand of a departure of a product by one method.

    Attributes
    ----------
    method
        One of `METHODS`, `BOOKED` or `ESTIMATE`.
    by_class
        (K,) passengers; NaN where the method has no figure.
    every
        Passengers, mean over the departures of all classes for which methods have figures; NaN if there is none.
    rounds
        Most rounds that it took for a class.
    unsettled
        Groups that still moved when the limit of rounds was reached.
    """

    method: str
    by_class: FloatArray
    every: float
    rounds: int = 0
    unsettled: int = 0


@dataclass(frozen=True, eq=False)
class MethodComparison:
    """Methods side by side.

    Attributes
    ----------
    fare_classes
        Names of the K classes.
    half_life
        Age in days at which a departure counts half; None for no ageing.
    departures
        Departures of products that are compared.
    left_out
        Departures that have left but whose readings end early, so that what was booked since is not known.
    intervals, closed, closed_unbooked
        Intervals of the departures compared; of these closed, for a part at least; of these without a booking.
    groups, pooled
        Samples, and those never open, which take the mean of all intervals of their class.
    never_open
        (K,) classes that no interval shows open throughout: methods have no figures.
    lines
        Bookings as they are, the methods, the estimate.
    """

    fare_classes: tuple[str, ...]
    half_life: float | None
    departures: int
    left_out: int
    intervals: int
    closed: int
    closed_unbooked: int
    groups: int
    pooled: int
    never_open: tuple[str, ...]
    lines: tuple[MethodMean, ...]

    @property
    def booked(self) -> MethodMean:
        """Bookings as they are."""
        return self.lines[0]

    def line(self, method: str) -> MethodMean:
        """Return the line of a method.

        Raises
        ------
        KeyError
            If there is none.
        """
        for line in self.lines:
            if line.method == method:
                return line
        raise KeyError(method)

    def above_bookings(self, line: MethodMean) -> tuple[FloatArray, float]:
        """(K,) and in all, how far a line is above bookings as a share of them; NaN without bookings."""
        in_all = _ratio(np.array([line.every]), np.array([self.booked.every]))
        return _ratio(line.by_class, self.booked.by_class) - 1.0, float(in_all[0]) - 1.0


def compare_methods(history: BookingHistory, fit: DemandFit) -> MethodComparison | None:
    """Hold methods side by side on the departures that have left.

    Parameters
    ----------
    history
        Readings from which ``fit`` was made.
    fit
        The estimate.

    Returns
    -------
    MethodComparison or None
        None if no departure has left by the day of the fit, or readings of all of them end early.
    """
    day, n_classes = fit.as_of, len(fit.fare_classes)
    left = np.flatnonzero(history.departure.astype("datetime64[D]") < day)
    if not len(left):
        return None
    increments = Increments.of(history, None, left, days=usual_days(history, left))
    end = increments.last[increments.start[1:] - 1]
    whole = np.flatnonzero(end >= np.median(end))
    increments = increments.take(whole)
    at = left[increments.series]
    departure, fare_class = history.departure[at].astype("datetime64[D]"), history.series_class[at]
    weight = fit.options.weight((day - departure).astype(np.float64))
    if not np.any(weight > 0):
        return None
    # Counted from a mean of one departure, as methods that know of sample sizes expect.
    weight = np.maximum(weight / weight.mean(), 1e-12)
    samples = ClassSamples.of(increments, fare_class, n_classes, weight)
    product = history.series_itinerary[at].astype(np.int64) * n_classes + fare_class
    demand = fit.rates.rate[product] * fit.effects.factor(fare_class, departure)
    booked = increments.per_series(increments.count)
    departures = samples.departures
    known = (departures > 0) & ~samples.never_open

    def line(method: str, by_class: FloatArray, rounds: int = 0, unsettled: int = 0) -> MethodMean:
        every = float(by_class[known] @ departures[known]) / float(departures[known].sum()) if known.any() else np.nan
        return MethodMean(method, by_class, every, rounds, unsettled)

    def of_series(figures: FloatArray) -> FloatArray:
        total = np.bincount(fare_class, weight * figures, minlength=n_classes).astype(np.float64)
        return _ratio(total, departures)

    lines = [line(BOOKED, of_series(booked))]
    for method in METHODS:
        found = samples.fit(method, STOPPING)
        lines.append(line(method, found.mean, found.rounds, found.unsettled))
    lines.append(line(ESTIMATE, of_series(demand)))
    return MethodComparison(
        fare_classes=fit.fare_classes,
        half_life=fit.options.half_life,
        departures=len(at),
        left_out=len(left) - len(at),
        intervals=len(increments),
        closed=int(np.sum(~increments.open)),
        closed_unbooked=int(np.sum(~increments.open & (increments.count <= 0))),
        groups=samples.groups,
        pooled=samples.pooled,
        never_open=tuple(
            name
            for name, never, size in zip(fit.fare_classes, samples.never_open, departures, strict=True)
            if never and size > 0
        ),
        lines=tuple(lines),
    )


def usual_days(history: BookingHistory, series: IntArray) -> FloatArray:
    """Falling reading days that departures have in common, as many as half of them have readings.

    Where readings fall on other days from departure to departure, days are put together into so many bands of
    equally many readings, each named by its median.

    Parameters
    ----------
    history
        Readings.
    series
        (S,) positions of the series to look at, at least one.
    """
    length = np.diff(history.start)[series]
    days = history.days_before[ranges(history.start[series], length)]
    code, distinct = pd.factorize(days)
    most = max(1, int(np.median(length)))
    order = np.argsort(distinct)
    rising = distinct[order]
    if len(rising) > most:
        number = np.cumsum(np.bincount(code, minlength=len(distinct))[order])
        middle = (np.arange(most) + 0.5) / most * number[-1]
        rising = rising[np.unique(np.searchsorted(number, middle))]
    return np.asarray(rising[::-1], dtype=np.float64)


def _ratio(above: FloatArray, below: FloatArray) -> FloatArray:
    """Quotients; NaN where the divisor is 0 or NaN."""
    return np.asarray(np.divide(above, below, out=np.full(len(below), np.nan), where=below > 0))
