"""Demand to come of every product of a network, from booking history: the front of the statistics."""

from __future__ import annotations

from dataclasses import dataclass, replace
from datetime import datetime

import numpy as np

from legworth.estimation.demand_fit import DemandFit, fit_demand
from legworth.estimation.demand_options import DemandOptions
from legworth.estimation.departures import network_departures
from legworth.estimation.forecasts import Forecast, forecast
from legworth.estimation.history import BookingHistory
from legworth.estimation.pools import Pools, history_positions
from network import Network
from network.arrays import FloatArray, NameArray
from network.model import BookingCurves

__all__ = [
    "DemandEstimate",
    "DemandFit",
    "DemandOptions",
    "Forecast",
    "Pools",
    "estimate_demand",
    "fit_demand",
    "forecast",
]


@dataclass(frozen=True, eq=False)
class DemandEstimate:
    """Demand to come of the J products of a network, by position.

    Attributes
    ----------
    forecast
        Figures and components.
    curves
        Fitted booking curves; ``forecast.curve`` points into them.
    fit
        What they come from.
    """

    forecast: Forecast
    curves: BookingCurves
    fit: DemandFit

    @property
    def mean(self) -> FloatArray:
        """(J,) mean demand to come."""
        return self.forecast.mean

    @property
    def deviation(self) -> FloatArray:
        """(J,) standard deviation of demand to come."""
        return self.forecast.deviation


def estimate_demand(
    history: BookingHistory,
    network: Network,
    as_of: datetime,
    options: DemandOptions | None = None,
    history_name: NameArray | None = None,
) -> DemandEstimate:
    """Estimate demand to come of every product of a network.

    Parameters
    ----------
    history
        Readings of past departures, and of those in the network so far; its fare classes are those of the network.
    network
        Products, departures and stations; its demand is not looked at. A departure is that of the first leg of the
        itinerary, its date the local one.
    as_of
        Instant of the snapshot, with offset.
    options
        How; the defaults if left out.
    history_name
        (I,) name under which history holds every itinerary of the network; its own name if left out.

    Raises
    ------
    SettingError
        If an option is out of its limits, or no reading is known by the snapshot.
    ValueError
        If the fare classes of history and network differ.
    """
    if history.fare_classes != network.fare_classes:
        raise ValueError("history and network name other fare classes, or in another order")
    day = np.datetime64(as_of.date(), "D")
    pools = Pools.of(history, network, history_name)
    fit = fit_demand(history, pools, day, options)
    departures = network_departures(replace(network, as_of=as_of), history_name)
    at = network.product_itinerary
    result = forecast(
        fit,
        history_positions(history, network, history_name)[at],
        network.product_class,
        departures.date[at],
        departures.days_left[at],
        history,
        pools.pairs_of(network)[at],
    )
    return DemandEstimate(result, fit.model.shapes.booking_curves(fit.curve_name), fit)
