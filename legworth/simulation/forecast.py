"""Forecasts: what is still to come at a later instant, and forecasts that are wrong.

The forecast of a later instant is that of the snapshot less what the curve says has come since; it does not learn
from the requests seen. If each of D requests still comes with chance q, their number has mean ``q m`` and variance
``q**2 s**2 + q (1 - q) m`` with m and s the mean and deviation of D. That keeps Poisson demand Poisson and negative
binomial demand negative binomial.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from datetime import timedelta
from types import MappingProxyType

import numpy as np
import numpy.typing as npt

from heuristics.arrivals import days_before_departure
from legworth.simulation.requests import NOTHING_LEFT, first_departure
from network import BookingCurves, Demand, Family, Network, SettingError
from network.arrays import FloatArray, IntArray

__all__ = ["STRESSES", "Stress", "at_instant", "demand_times", "reading_instants", "wrong_forecast"]


def reading_instants(network: Network, days: tuple[float, ...] | None, count: int = 16) -> FloatArray:
    """Instants of re-optimisation, days after the snapshot, rising from 0.

    Parameters
    ----------
    network
        A network; its last departure ends the horizon.
    days
        Days before that departure, or None for ``count`` instants that come closer and closer: at
        ``H (1 - (1 - k / count)**2)`` of a horizon of H days.
    count
        Number of instants, the snapshot included.
    """
    horizon = float(days_before_departure(network).max(initial=0.0))
    if days is None:
        return np.asarray(horizon * (1.0 - (1.0 - np.arange(count) / count) ** 2))
    later = horizon - np.asarray(days, dtype=np.float64)
    return np.unique(np.append(0.0, later[(later > 0) & (later < horizon)]))


def at_instant(network: Network, days: float, remaining: IntArray | None = None) -> Network:
    """Return the network some days after its snapshot.

    Parameters
    ----------
    network
        The network at the snapshot.
    days
        Days after it, not negative.
    remaining
        (L,) seats left by then, those of the network if not given.
    """
    left = network.remaining if remaining is None else remaining
    if days == 0:
        return network.with_remaining(left)
    return replace(
        network,
        as_of=network.as_of + timedelta(days=days),
        remaining=np.array(left),
        demand=demand_times(network.demand, _share_to_come(network, days)),
    )


def demand_times(demand: Demand, factor: npt.ArrayLike) -> Demand:
    """Return demand of another size: fewer of the same passengers, or more.

    A factor below one keeps each request with that chance. Above one the same figures are carried on, so that the rate
    of negative binomial demand varies as much as before; demand that varies less than Poisson demand is sure at the
    least.

    Parameters
    ----------
    demand
        (n,) demands.
    factor
        Factor on the means, not negative; scalar or (n,).
    """
    share = np.broadcast_to(np.asarray(factor, dtype=np.float64), demand.mean.shape)
    mean = share * demand.mean
    # The plain deviation is kept where the family ignores it.
    variance = np.maximum(share**2 * demand.deviation**2 + share * (1.0 - share) * demand.mean, 0.0)
    over = variance > mean * (1 + 1e-9)
    poisson = (demand.family == Family.NEGATIVE_BINOMIAL) & ~over
    family = np.where(poisson, Family.POISSON, demand.family).astype(np.int8)
    return Demand(mean, np.sqrt(variance), family)


def _share_to_come(network: Network, days: float) -> FloatArray:
    """(J,) share of the demand to come that comes after an instant."""
    horizon = first_departure(network)[network.product_itinerary]
    left = np.maximum(horizon - days, 0.0)
    share = np.divide(left, horizon, out=np.zeros(len(left)), where=horizon > 0)
    curves = network.curves
    for curve in range(len(curves)):
        rows = slice(curves.start[curve], curves.start[curve + 1])
        mine = np.flatnonzero(network.curve == curve)
        readings = curves.days_before[rows][::-1], curves.share[rows][::-1]
        to_come = 1.0 - np.interp(horizon[mine], *readings)
        later = 1.0 - np.interp(left[mine], *readings)
        kept = to_come > NOTHING_LEFT
        share[mine[kept]] = np.clip(later[kept] / to_come[kept], 0.0, 1.0)
    share[left <= 0] = 0.0
    return share


@dataclass(frozen=True)
class Stress:
    """How a forecast is wrong; the requests that come stay as they are.

    Attributes
    ----------
    label
        In a few words.
    mean, deviation
        Factors on the means (deviations keep their ratio to the means) and on the deviations.
    shift
        Days by which the forecast takes requests to come sooner than they do.
    hub_growth
        Share by which demand over the busiest station exceeds its forecast.
    """

    label: str
    mean: float = 1.0
    deviation: float = 1.0
    shift: float = 0.0
    hub_growth: float = 0.0


STRESSES: Mapping[str, Stress] = MappingProxyType(
    {
        "means-high": Stress("means forecast 20 % too high", mean=1.2),
        "means-low": Stress("means forecast 20 % too low", mean=0.8),
        "deviations-high": Stress("deviations forecast twice too large", deviation=2.0),
        "deviations-low": Stress("deviations forecast twice too small", deviation=0.5),
        "curves-early": Stress("requests forecast a week too soon", shift=7.0),
        "curves-late": Stress("requests forecast a week too late", shift=-7.0),
        "hub-growth": Stress("busiest station 30 % above forecast", hub_growth=0.3),
    }
)


def wrong_forecast(network: Network, stress: Stress) -> Network:
    """Return the network as a wrong forecast sees it.

    Raises
    ------
    SettingError
        If a factor is not above zero.
    """
    if min(stress.mean, stress.deviation, 1.0 + stress.hub_growth) <= 0:
        raise SettingError("factors of a wrong forecast must be above zero")
    demand = network.demand
    factor = np.full(network.n_products, stress.mean)
    if stress.hub_growth:
        factor[_over_busiest(network)] /= 1.0 + stress.hub_growth
    mean = factor * demand.mean
    deviation = np.sqrt(demand.variance) * factor * stress.deviation
    return replace(network, demand=Demand.of(mean, deviation), curves=_shifted(network.curves, stress.shift))


def _over_busiest(network: Network) -> np.ndarray:
    """(J,) whether a product begins, ends or changes at the station where most passengers do."""
    calls = np.zeros((len(network.stations), network.n_itineraries), dtype=bool)
    owner = np.repeat(np.arange(network.n_itineraries), np.diff(network.path_start))
    for ends in (network.legs.origin, network.legs.destination):
        calls[ends[network.path_leg], owner] = True
    wanted = np.bincount(network.product_itinerary, weights=network.demand.expected, minlength=network.n_itineraries)
    busiest = int(np.argmax(calls @ wanted))
    return np.asarray(calls[busiest][network.product_itinerary])


def _shifted(curves: BookingCurves, days: float) -> BookingCurves:
    """Curves whose readings are moved away from departure by some days, or towards it, and end in 1 at day 0."""
    if days == 0 or len(curves) == 0:
        return curves
    days_before, share, size = [], [], []
    for curve in range(len(curves)):
        rows = slice(curves.start[curve], curves.start[curve + 1])
        moved = curves.days_before[rows] + days
        kept = moved > 0
        days_before.append(np.append(moved[kept], 0.0))
        share.append(np.append(curves.share[rows][kept], 1.0))
        size.append(int(kept.sum()) + 1)
    start = np.append(0, np.cumsum(size))
    return BookingCurves(curves.name.copy(), start, np.concatenate(days_before), np.concatenate(share))
