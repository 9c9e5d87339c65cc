"""Estimates held against the truth of a simulated history: means, deviations, and intervals of held-out departures."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from legworth.estimation.dispersion import coverage
from legworth.estimation.estimate import DemandFit, DemandOptions, Pools, fit_demand, forecast
from legworth.estimation.history import BookingHistory
from legworth.simulation.forecast import demand_times
from network import Demand
from network.arrays import FloatArray, IntArray
from tools.simulated_history import SimulatedHistory

__all__ = ["HeldOutTruth", "MeanTruth", "held_out_truth", "mean_truth", "naive_means"]

WHOLE = 10_000.0
"""Days before departure at which all of demand is still to come."""


@dataclass(frozen=True, eq=False)
class MeanTruth:
    """Whole demand of products, (J,) each: means over the dates of the history.

    Attributes
    ----------
    true, estimated
        Mean of a departure.
    error
        Standard error of the estimate by its own account.
    true_deviation, deviation
        Root mean square over dates of the standard deviation of a departure, and as estimated.
    fare_class
        Position of the class.
    """

    true: FloatArray
    estimated: FloatArray
    error: FloatArray
    true_deviation: FloatArray
    deviation: FloatArray
    fare_class: IntArray

    @property
    def within(self) -> float:
        """Share of the products whose mean lies within two standard errors of the truth."""
        return float(np.mean(np.abs(self.estimated - self.true) <= 2.0 * self.error))

    @property
    def bias(self) -> float:
        """Estimated total less the true one, as a share of it."""
        return float(self.estimated.sum() / self.true.sum() - 1.0)

    def bias_of(self, fare_class: int) -> float:
        """Return the bias of a class."""
        mine = self.fare_class == fare_class
        return float(self.estimated[mine].sum() / self.true[mine].sum() - 1.0)

    def deviation_of(self, fare_class: int | None = None) -> float:
        """Root mean square deviation of the products of a class, or of all, as a share of the true one, less 1."""
        mine = slice(None) if fare_class is None else self.fare_class == fare_class
        return float(np.sqrt(np.sum(self.deviation[mine] ** 2) / np.sum(self.true_deviation[mine] ** 2)) - 1.0)


def mean_truth(
    simulated: SimulatedHistory, history: BookingHistory, as_of: np.datetime64, options: DemandOptions | None = None
) -> tuple[MeanTruth, DemandFit]:
    """Fit a history and hold means and deviations of whole demand against the truth, on its departures by a day."""
    network, plan = simulated.plan.network, simulated.plan
    fit = fit_demand(history, Pools.of(history, network), as_of, options)
    dates = np.flatnonzero(plan.departure <= as_of)
    true, variance, mean, spread = (np.zeros(network.n_products) for _ in range(4))
    whole = np.full(network.n_products, WHOLE)
    for date in dates.tolist():
        demand = demand_times(network.demand, plan.factor[date])
        true += demand.mean
        variance += demand.variance
        departure = np.full(network.n_products, plan.departure[date])
        found = forecast(fit, network.product_itinerary, network.product_class, departure, whole)
        mean += found.rate * found.effect  # a forecast leaves out what came before the first reading
        spread += found.deviation**2
    product = network.product_itinerary.astype(np.int64) * len(network.fare_classes) + network.product_class
    n = len(dates)
    return (
        MeanTruth(
            true=true / n,
            estimated=mean / n,
            error=mean / n * np.sqrt(fit.rates.variance[product]),
            true_deviation=np.sqrt(variance / n),
            deviation=np.sqrt(spread / n),
            fare_class=np.asarray(network.product_class),
        ),
        fit,
    )


def naive_means(simulated: SimulatedHistory, as_of: np.datetime64) -> dict[str, FloatArray]:
    """(J,) means of what was booked on departures by a day: of all, and of those open to the end (NaN if none was)."""
    past = simulated.plan.departure <= as_of
    booked = simulated.booked[past][:, :, -1].astype(np.float64)
    open_to_the_end = (simulated.open_share[past] >= 1.0).all(axis=2)
    number = open_to_the_end.sum(axis=0)
    kept = np.divide(
        (booked * open_to_the_end).sum(axis=0), number, out=np.full(booked.shape[1], np.nan), where=number > 0
    )
    return {"all departures": booked.mean(axis=0), "departures open to the end": kept}


@dataclass(frozen=True, eq=False)
class HeldOutTruth:
    """Requests that came after forecasts were made, open or not, (n,) each.

    Attributes
    ----------
    came
        Passengers who asked.
    mean, deviation
        Forecast.
    inside
        Chance that the outcome lies in the 80 % interval.
    fare_class, days_left
        Of the departure.
    """

    came: FloatArray
    mean: FloatArray
    deviation: FloatArray
    inside: FloatArray
    fare_class: IntArray
    days_left: FloatArray

    @property
    def coverage(self) -> float:
        """Share of the outcomes within the interval."""
        return float(self.inside.mean())

    @property
    def bias(self) -> float:
        """Forecast total less what came, as a share of it."""
        return float(self.mean.sum() / self.came.sum() - 1.0)


def held_out_truth(
    simulated: SimulatedHistory,
    history: BookingHistory,
    as_of: Iterable[float],
    days_ahead: int,
    options: DemandOptions | None = None,
) -> HeldOutTruth:
    """Forecast the departures ahead of some instants from what was known by then, and hold them against all requests.

    Parameters
    ----------
    simulated
        The truth.
    history
        All readings; later ones are not looked at.
    as_of
        Instants, days since 1970-01-01.
    days_ahead
        Dates of departure that are forecast from each, the day after it first.
    options
        How demand is estimated.
    """
    network, plan = simulated.plan.network, simulated.plan
    pools = Pools.of(history, network)
    parts: list[tuple[FloatArray, ...]] = []
    for now in as_of:
        day = np.datetime64(int(np.floor(now)), "D")
        fit = fit_demand(history, pools, day, options)
        asked = simulated.requests_by(now)
        for date in np.flatnonzero((plan.departure > day) & (plan.departure <= day + days_ahead)).tolist():
            left = simulated.departs[date] - now
            departure = np.full(network.n_products, plan.departure[date])
            found = forecast(fit, network.product_itinerary, network.product_class, departure, left, history)
            came = (simulated.requested[date, :, -1] - asked[date]).astype(np.float64)
            inside = coverage(Demand.of(found.mean, found.deviation), came)
            parts.append((came, found.mean, found.deviation, inside, network.product_class, left))
    came, mean, deviation, inside, fare_class, left = (np.concatenate(columns) for columns in zip(*parts, strict=True))
    return HeldOutTruth(came, mean, deviation, inside, fare_class, left)
