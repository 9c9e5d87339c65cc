"""When requests come: expected requests of every leg product between the days before departure.

A booking curve gives the share of the whole demand that has arrived by a number of days before departure. Of the
demand still to come at the snapshot, T days before departure, the part between days a > b is
``(share(b) - share(a)) / (1 - share(T))``, straight between readings and flat before the first. Where there is
no curve, or a curve leaves nothing to come, demand arrives evenly between the snapshot and departure. Days count from
the departure of the leg, also for products that began their journey on an earlier one.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field
from functools import cached_property
from itertools import pairwise

import numpy as np
import numpy.typing as npt

from heuristics.displacement import LegProducts
from network.arrays import FloatArray, IntArray
from network.model import BookingCurves, Network
from network.runs import SortedRuns

__all__ = ["DAY", "PUBLISHED_DAYS", "ArrivalPlan", "Segment", "days_before_departure"]


HOURS = (0.5, 1, 2, 3, 4, 6, 8, 12, 16, 20)
PUBLISHED_DAYS = (
    0,
    *(hours / 24 for hours in HOURS),
    *(1, 1.25, 1.5, 1.75, 2, 2.5, 3, 3.5, 4, 5, 6, 7, 8, 10, 12, 14, 17, 21, 25, 30, 36, 42, 50, 60, 75, 90),
    *(105, 120, 150, 180, 225, 270, 315, 360),
)
"""Days before departure at which price curves are published: dense where prices fall fast."""

DAY = 86_400.0
"""Seconds."""


@dataclass(frozen=True, eq=False)
class Segment:
    """A stretch of time.

    Attributes
    ----------
    days
        Days before departure at its end nearest departure.
    requests
        (P,) expected requests of every leg product within it.
    """

    days: float
    requests: FloatArray


@dataclass(frozen=True, eq=False)
class ArrivalPlan:
    """Adjusted fares of all legs and the times at which their requests come.

    Attributes
    ----------
    fares
        Adjusted fares, one run a leg, falling.
    mean
        (P,) demand to come of every row; none where a leg of the itinerary has no seats left.
    curve
        (P,) booking curve of every row, -1 for none.
    curves
        The curves.
    days_now
        (L,) days before departure at the snapshot, not negative.
    days
        (D,) days at which prices are wanted, rising from 0.
    """

    fares: SortedRuns
    mean: FloatArray
    curve: IntArray
    curves: BookingCurves
    days_now: FloatArray
    days: FloatArray = field(default_factory=lambda: np.array(PUBLISHED_DAYS, dtype=np.float64))

    @classmethod
    def of(cls, network: Network, products: LegProducts, days: npt.ArrayLike = PUBLISHED_DAYS) -> ArrivalPlan:
        """Plan the arrivals of the leg products of a network.

        Parameters
        ----------
        network
            Demand to come, curves and the instant of the snapshot.
        products
            Products of every leg by adjusted fare.
        days
            Days before departure at which prices are wanted, rising from 0; those before every leg's
            snapshot are left out.
        """
        days_now = days_before_departure(network)
        wanted = np.asarray(days, dtype=np.float64)
        if len(wanted) == 0 or wanted[0] != 0 or np.any(np.diff(wanted) <= 0):
            raise ValueError("days must rise from 0")
        sellable = network.path_remaining[network.product_itinerary] > 0
        return cls(
            fares=SortedRuns(products.adjusted_fare, products.leg_start),
            mean=np.where(sellable, network.demand.expected, 0.0)[products.product],
            curve=network.curve[products.product],
            curves=network.curves,
            days_now=days_now,
            days=wanted[wanted <= days_now.max(initial=0.0)],
        )

    @property
    def n_legs(self) -> int:
        """Number of legs L."""
        return len(self.days_now)

    @cached_property
    def leg(self) -> IntArray:
        """(P,) leg of every row."""
        return np.repeat(np.arange(self.n_legs), np.diff(self.fares.start))

    def segments(self) -> Iterator[Segment]:
        """Yield the segments from departure backwards to the earliest snapshot."""
        farthest = float(self.days_now.max(initial=0.0))
        cuts = np.unique(np.concatenate([self.days, self.curves.days_before, [0.0, farthest]]))
        cuts = cuts[cuts <= farthest]
        pair = (self.curve + 1).astype(np.int64) * self.n_legs + self.leg
        for near, far in pairwise(cuts.tolist()):
            yield Segment(near, self.mean * self._part(near, far).ravel()[pair])

    def _part(self, near: float, far: float) -> FloatArray:
        """(Q + 1, L) part of the demand to come between two days, by curve (the first is none) and leg."""
        begin = np.minimum(near, self.days_now)
        end = np.minimum(far, self.days_now)
        even = np.divide(end - begin, self.days_now, out=np.zeros(self.n_legs), where=self.days_now > 0)
        parts = [even]
        for curve in range(len(self.curves)):
            rows = slice(self.curves.start[curve], self.curves.start[curve + 1])
            days, share = self.curves.days_before[rows][::-1], self.curves.share[rows][::-1]
            left = 1.0 - np.interp(self.days_now, days, share)
            within = np.interp(begin, days, share) - np.interp(end, days, share)
            parts.append(np.where(left > 1e-9, within / np.maximum(left, 1e-9), even))
        return np.asarray(parts)


def days_before_departure(network: Network) -> FloatArray:
    """Days from the snapshot to the departure of every leg, (L,), 0 for those that have departed."""
    seconds = network.legs.departs.astype("datetime64[s]").astype(np.int64) - network.as_of.timestamp()
    return np.asarray(np.maximum(seconds / DAY, 0.0))
