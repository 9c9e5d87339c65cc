"""Booking history whose truth is known: departures day after day, played under leg-level control, as readings.

One service day is sold again and again. Requests come as in `legworth.simulation.requests`, from the whole demand of
the day times a factor of its weekday and season; leg-level EMSR-b, prepared anew at instants of its own, answers them
and so closes classes. What is kept is what a carrier would log (booked, and whether the class was open at the reading
and for which share of the time since the one before) and what no carrier knows: the requests.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
import pyarrow as pa

from legworth.estimation.history import BookingHistory
from legworth.simulation.entries import Schedule, entries_of, play_schedule, prepare_schedule
from legworth.simulation.forecast import demand_times, reading_instants
from legworth.simulation.requests import RequestPaths, draw_requests, first_departure
from legworth.simulation.rules import Situation
from network import Network
from network.arrays import BoolArray, FloatArray, IntArray, TimeArray
from tools.closing_instants import ClosingInstants

__all__ = ["READING_DAYS", "HistoryPlan", "SimulatedHistory", "simulate_history"]

READING_DAYS = (90.0, 60.0, 45.0, 30.0, 21.0, 14.0, 10.0, 7.0, 5.0, 3.0, 2.0, 1.0, 0.0)
YEAR = 365.25
TOGETHER = 3_000_000
"""Figures of every kind that are worked on together: departures times products times readings."""


@dataclass(frozen=True, eq=False)
class HistoryPlan:
    """What is simulated.

    Attributes
    ----------
    network
        One service day: its demand is the whole demand of an average departure, from the snapshot, when sales begin.
    first
        First date of departure.
    dates
        Dates in a row.
    weekday
        (7,) factors on demand, Monday first.
    season
        Share by which demand rises above its mean in the middle of July, and falls below it half a year on.
    reading_days
        Days before departure of the readings, falling to 0.
    control
        Who answers requests, by its name in `legworth.simulation`; one whose rule is a count of seats.
    prepared
        How often control is prepared anew over the horizon.
    seed
        Seed of all draws.
    """

    network: Network
    first: np.datetime64
    dates: int
    weekday: tuple[float, ...] = (1.0,) * 7
    season: float = 0.0
    reading_days: tuple[float, ...] = READING_DAYS
    control: str = "leg+"
    prepared: int = 16
    seed: int = 1

    @property
    def departure(self) -> TimeArray:
        """(P,) dates of departure."""
        return np.asarray(self.first.astype("datetime64[D]") + np.arange(self.dates))

    @property
    def factor(self) -> FloatArray:
        """(P,) factor on the demand of every date."""
        days = self.departure.astype(np.int64)
        weekday = np.array(self.weekday)[(days + 3) % 7]  # 1970-01-01 was a Thursday
        year = self.departure.astype("datetime64[Y]")
        of_year = (self.departure - year.astype("datetime64[D]")).astype(np.float64)
        return np.asarray(weekday * (1.0 + self.season * np.cos(2 * np.pi * (of_year - 195.0) / YEAR)))


@dataclass(frozen=True, eq=False)
class SimulatedHistory:
    """What was logged, and the truth.

    Attributes
    ----------
    plan
        What was simulated.
    date, product
        (m,) date and product of every request.
    at
        (m,) days before departure of the first leg at which it came.
    sold
        (m,) whether it was accepted.
    open
        (P, J, K) whether the product was for sale at the reading, by date, product and reading.
    open_share
        (P, J, K) share of the time since the reading before during which it was.
    """

    plan: HistoryPlan
    date: IntArray
    product: IntArray
    at: FloatArray
    sold: BoolArray
    open: BoolArray
    open_share: FloatArray

    @property
    def days(self) -> FloatArray:
        """(K,) days before departure of the readings."""
        return np.array(self.plan.reading_days)

    @cached_property
    def requested(self) -> IntArray:
        """(P, J, K) passengers who had asked by each reading."""
        return self._by_reading(slice(None))

    @cached_property
    def booked(self) -> IntArray:
        """(P, J, K) passengers booked by each reading."""
        return self._by_reading(self.sold)

    def _by_reading(self, chosen: BoolArray | slice) -> IntArray:
        shape = self.open.shape
        interval = np.minimum(np.searchsorted(-self.days, -self.at[chosen], side="left"), shape[2] - 1)
        key = (self.date[chosen].astype(np.int64) * shape[1] + self.product[chosen]) * shape[2] + interval
        count = np.bincount(key, minlength=int(np.prod(shape))).reshape(shape)
        return count.cumsum(axis=2, dtype=np.int16)

    def seats_sold(self, as_of: float) -> IntArray:
        """(P, L) seats sold on every leg by an instant, days since 1970-01-01."""
        network = self.plan.network
        by_then = self.sold & (self.departs[self.date, self.product] - self.at <= as_of)
        legs = Situation.of(network).legs[self.product[by_then]]
        used = legs < network.n_legs
        key = (self.date[by_then].astype(np.int64)[:, None] * network.n_legs + legs)[used]
        count = np.bincount(key, minlength=self.plan.dates * network.n_legs)
        return count.reshape(self.plan.dates, network.n_legs)

    def requests_by(self, as_of: float) -> IntArray:
        """(P, J) passengers who had asked by an instant, days since 1970-01-01."""
        by_then = self.departs[self.date, self.product] - self.at <= as_of
        n_products = self.plan.network.n_products
        key = self.date[by_then].astype(np.int64) * n_products + self.product[by_then]
        return np.bincount(key, minlength=self.plan.dates * n_products).reshape(-1, n_products)

    def share(self, days_left: FloatArray) -> FloatArray:
        """Share of the whole demand that has come by a number of days before departure, (..., J)."""
        network = self.plan.network
        horizon = first_departure(network)[network.product_itinerary]
        left = np.clip(days_left, 0.0, horizon)
        share = 1.0 - left / np.maximum(horizon, 1e-9)
        for curve in range(len(network.curves)):
            rows = slice(network.curves.start[curve], network.curves.start[curve + 1])
            mine = network.curve == curve
            known = network.curves.days_before[rows][::-1], network.curves.share[rows][::-1]
            come, now = np.interp(horizon[mine], *known), np.interp(left[..., mine], *known)
            share[..., mine] = (now - come) / np.maximum(1.0 - come, 1e-9)
        return share

    @cached_property
    def mean(self) -> FloatArray:
        """(P, J) true mean of the whole demand."""
        return np.asarray(self.plan.factor[:, None] * self.plan.network.demand.mean)

    def known(self, as_of: float | None = None) -> BoolArray:
        """(P, J, K) readings taken by an instant, days since 1970-01-01 on the clock of the departures; all if None."""
        if as_of is None:
            return np.ones(self.booked.shape, dtype=bool)
        return np.asarray(self.departs[..., None] - self.days <= as_of)

    @cached_property
    def departs(self) -> FloatArray:
        """(P, J) instants of departure, days since 1970-01-01."""
        network, plan = self.plan.network, self.plan
        first_leg = network.path_leg[network.path_start[:-1]][network.product_itinerary]
        local = network.legs.departs[first_leg].astype("datetime64[s]").astype(np.int64) / 86_400
        local = local + network.legs.departs_offset[first_leg] / 1440
        day = local - np.floor(local)
        return np.asarray(plan.departure.astype(np.int64)[:, None] + day)

    def history(self, as_of: float | None = None) -> BookingHistory:
        """Return the history as it would be read from a table, of all dates or of the readings known by an instant."""
        network = self.plan.network
        known = self.known(as_of).transpose(1, 0, 2)
        seen = known.any(axis=2)
        product, date = np.nonzero(seen)
        count = known.sum(axis=2)[seen]
        booked = self.booked.transpose(1, 0, 2)[known].astype(np.float64)
        share = self.open_share.transpose(1, 0, 2)[known].astype(np.float64)
        return BookingHistory(
            itinerary=network.itinerary,
            fare_classes=network.fare_classes,
            departure=self.plan.departure[date],
            series_itinerary=network.product_itinerary[product],
            series_class=network.product_class[product],
            start=np.append(0, np.cumsum(count)),
            days_before=np.broadcast_to(self.days, known.shape)[known],
            booked=booked,
            cancelled=np.zeros(len(booked)),
            open=share >= 1.0,
            open_share=share,
        )

    def flags_alone(self, *, throughout: bool) -> BookingHistory:
        """Return the history of all dates as a table without ``open_share`` tells it.

        Parameters
        ----------
        throughout
            Whether its flag says that the class was open all the time since the reading before, or at the reading.
        """
        found = self.history()
        flag = (self.open_share >= 1.0 if throughout else self.open).transpose(1, 0, 2).ravel()
        first = np.zeros(len(flag), dtype=bool)
        first[found.start[:-1]] = True
        before = np.where(first, flag, np.append(True, flag[:-1]))
        rise = np.where(first, found.booked, np.diff(found.booked, prepend=0.0))
        through, shut = flag & before, ~flag & ~before & (rise <= 0)
        share = np.where(through, 1.0, np.where(shut, 0.0, np.nan))
        return replace(found, open=through, open_share=share, begins_open=before)

    def tables(self, as_of: float | None = None, together: int = 20_000_000) -> Iterator[pa.Table]:
        """Yield the history as tables of the schema ``history``, date by date."""
        network = self.plan.network
        names, classes = pa.array(network.itinerary, pa.string()), pa.array(network.fare_classes, pa.string())
        step = max(1, together // max(1, network.n_products * len(self.days)))
        for begin in range(0, self.plan.dates, step):
            part = slice(begin, begin + step)
            known = self.known(as_of)[part]
            date, product, reading = np.nonzero(known)
            itinerary = pa.array(network.product_itinerary[product].astype(np.int32))
            fare_class = pa.array(network.product_class[product].astype(np.int32))
            yield pa.table(
                {
                    "departure": pa.array(self.plan.departure[part][date]),
                    "itinerary": pa.DictionaryArray.from_arrays(itinerary, names),
                    "fare_class": pa.DictionaryArray.from_arrays(fare_class, classes),
                    "days_before": self.days[reading],
                    "booked": self.booked[part][known].astype(np.int32),
                    "open": self.open[part][known],
                    "open_share": self.open_share[part][known].astype(np.float64),
                }
            )


def simulate_history(plan: HistoryPlan) -> SimulatedHistory:
    """Play every date of a plan and read it off."""
    network = plan.network
    situation = Situation.of(network)
    (entry,) = entries_of([plan.control])
    schedule = prepare_schedule(entry, network, situation, reading_instants(network, None, plan.prepared))
    size = max(1, TOGETHER // max(1, network.n_products * len(plan.reading_days)))
    blocks = [
        _block(plan, schedule, situation, np.arange(begin, min(begin + size, plan.dates)))
        for begin in range(0, plan.dates, size)
    ]
    return SimulatedHistory(plan, *(np.concatenate(parts) for parts in zip(*blocks, strict=True)))


def _block(
    plan: HistoryPlan, schedule: Schedule, situation: Situation, dates: IntArray
) -> tuple[IntArray, IntArray, FloatArray, BoolArray, BoolArray, FloatArray]:
    """Play some dates; returns the figures of `SimulatedHistory`."""
    network, days = plan.network, np.array(plan.reading_days)
    requests = _requests(plan, dates)
    accepted, _ = play_schedule(requests, schedule, situation)
    horizon = first_departure(network)[network.product_itinerary]
    row, path = np.nonzero(requests.real)
    product, at, sold = requests.product[row, path], requests.at[row, path], accepted[row, path]
    closing = ClosingInstants.of(situation, schedule, product[sold], at[sold], path[sold], len(dates))
    is_open, share = closing.read(horizon, days)
    return dates[path].astype(np.int32), product, horizon[product] - at, sold, is_open, share


def _requests(plan: HistoryPlan, dates: IntArray) -> RequestPaths:
    """Requests of some dates, each from its own demand and its own stream."""
    network, factor = plan.network, plan.factor
    product, at, path = [], [], []
    for n, date in enumerate(dates.tolist()):
        of_date = replace(network, demand=demand_times(network.demand, factor[date]))
        drawn = draw_requests(of_date, np.array([date]), plan.seed)
        product.append(drawn.product[:, 0])
        at.append(drawn.at[:, 0])
        path.append(np.full(len(drawn.at), n))
    every = np.concatenate(product)
    real = every < network.n_products
    return RequestPaths.of(
        every[real], np.concatenate(at)[real], np.concatenate(path)[real], len(dates), network.n_products
    )
