"""Leg dynamic programs: what every remaining seat of a leg is worth, at every time before departure.

Requests for product j reach leg l as a Poisson process; accepting one earns its displacement-adjusted fare
r_j and costs a seat. With V(x, t) the best expected revenue of x seats at time t before departure and
z = V(x, t) - V(x - 1, t) the value of seat x,

    V(x, t + dt) = V(x, t) + dt * Phi(z),   Phi(z) = sum_j lambda_j max(0, r_j - z),   V(0, t) = 0

(the continuous limit of the program of Lee and Hersh 1993 with single requests; Talluri and van Ryzin 2004,
section 2.5). The values z are carried themselves: seat x gains ``Phi(z_x) - Phi(z_(x-1))``. Fares stand sorted by
leg, so Phi is a pair of running sums looked up at the last fare above z, for all seats of all legs at once.

Time runs in steps of equal expected requests. A step is two explicit Euler stages averaged (Heun's rule in the
form of Shu and Osher 1988), which keeps every z falling in x and never negative as long as a stage expects at
most one request; its error falls with the square of the step. Legs of about equally many requests go through time
together, so that quiet ones need few steps and the figures in work stay near the processor.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from heuristics.arrivals import ArrivalPlan
from heuristics.requests import FarePlaces, Requests
from network.arrays import FloatArray, IntArray
from network.model import ranges
from network.runs import SortedRuns

__all__ = ["PriceCurves", "SeatLine", "price_curves", "run_periods"]


REQUESTS_PER_STEP = 0.5
"""Requests that one step may expect on the busiest leg."""

EXTRA_REQUESTS = 2.0
"""Requests by which steps are reckoned beyond those expected in a segment: values bend most where few have come."""

SEATS_TOGETHER = 16_000
"""Seats whose legs go through time together."""


@dataclass(frozen=True, eq=False)
class PriceCurves:
    """Value of every remaining seat of every leg, by days before departure.

    Attributes
    ----------
    seat_start
        (L + 1,) seats 1, 2, ... of leg l stand at ``seat_start[l]:seat_start[l + 1]`` of the last axis.
    days
        (D,) days before departure, rising.
    value
        (D, S) currency; NaN where the leg departs sooner than that.
    days_now
        (L,) days before departure at the snapshot.
    now
        (S,) currency at the snapshot.
    total
        (L,) V at the snapshot with all remaining seats, currency.
    """

    seat_start: IntArray
    days: FloatArray
    value: FloatArray
    days_now: FloatArray
    now: FloatArray
    total: FloatArray


class SeatLine:
    """All seats of all legs in one line: seats 1, 2, ... of leg l at ``start[l]:start[l + 1]``."""

    def __init__(self, seats: IntArray) -> None:
        self.start: IntArray = np.concatenate([[0], np.cumsum(seats)]).astype(np.int64)
        self.leg: IntArray = np.repeat(np.arange(len(seats)), seats)
        self._first = self.start[:-1][np.asarray(seats) > 0]

    def __len__(self) -> int:
        return len(self.leg)

    def fall(self, figure: FloatArray) -> FloatArray:
        """Each seat's figure less that of the seat before it on the leg; the first keeps its own."""
        answer = np.empty_like(figure)
        np.subtract(figure[1:], figure[:-1], out=answer[1:])
        answer[self._first] = figure[self._first]
        return answer

    def totals(self, figure: FloatArray) -> FloatArray:
        """Sum a figure over the seats of every leg, (L,)."""
        padded = np.concatenate([[0.0], np.cumsum(figure)])
        return np.asarray(padded[self.start[1:]] - padded[self.start[:-1]])

    def euler(self, value: FloatArray, requests: Requests) -> FloatArray:
        """Values z one step earlier, if at most one of the requests arrives in the step."""
        return np.asarray(value + self.fall(requests.gain(value)[0]))

    def heun(self, value: FloatArray, requests: Requests) -> FloatArray:
        """Values z one step earlier, to second order."""
        return 0.5 * (value + self.euler(self.euler(value, requests), requests))


def run_periods(fares: SortedRuns, seats: IntArray, periods: Iterable[FloatArray]) -> tuple[SeatLine, FloatArray]:
    """Solve programs in which at most one request arrives a period, exactly.

    Parameters
    ----------
    fares
        Adjusted fares as one run a leg.
    seats
        (L,) seats.
    periods
        (P,) probability of a request for every row, period after period, the last before departure first.

    Returns
    -------
    line, value
        The seats in line and the value of each at the first period, (S,).
    """
    line = SeatLine(seats)
    value: FloatArray = np.zeros(len(line))
    places = FarePlaces(fares, line.leg)
    for probability in periods:
        value = line.euler(value, Requests(places, probability))
    return line, value


def price_curves(
    plan: ArrivalPlan,
    seats: IntArray,
    requests_per_step: float = REQUESTS_PER_STEP,
    share: FloatArray | None = None,
) -> PriceCurves:
    """Solve the programs of all legs.

    Parameters
    ----------
    plan
        Adjusted fares and expected requests by segment of time.
    seats
        (L,) remaining seats, not negative.
    requests_per_step
        Requests that a step may expect on the busiest leg of those that go together, at most 1; halve it to see
        the error.
    share
        (K, P) adjusted fares of the rows in each segment of the plan, in place of the plan's own.

    Raises
    ------
    ValueError
        If the lengths differ or the step is not above 0 and at most 1.
    """
    if not 0 < requests_per_step <= 1:
        raise ValueError(f"requests per step must be above 0 and at most 1, got {requests_per_step}")
    seats = np.asarray(seats)
    if seats.shape != (plan.n_legs,) or np.any(seats < 0):
        raise ValueError(f"expected remaining seats, not negative, for each of {plan.n_legs} legs")
    line = SeatLine(seats)
    value: FloatArray = np.zeros(len(line))
    days_now = plan.days_now[line.leg]
    published: dict[float, FloatArray] = {}
    blocks = _blocks(plan, line)
    for k, segment in enumerate(plan.segments()):
        published[segment.days] = value.copy()
        fare, expected = plan.fares.value, segment.requests
        if share is not None:
            order = np.lexsort((-share[k], plan.leg))
            fare, expected = share[k][order], expected[order]
        for block in blocks:
            block.advance(value, fare, expected, requests_per_step)
    table = np.full((len(plan.days), len(line)), np.nan)
    for row, days in enumerate(plan.days.tolist()):
        table[row] = np.where(days_now >= days, published.get(days, value), np.nan)
    return PriceCurves(line.start, plan.days, table, plan.days_now, value, line.totals(value))


class _Block:
    """Some legs, to go through time together.

    Parameters
    ----------
    plan, line
        All rows, and all seats.
    legs
        Positions of the legs.
    """

    def __init__(self, plan: ArrivalPlan, line: SeatLine, legs: IntArray) -> None:
        start, seat_start = plan.fares.start, line.start
        count = np.diff(start)[legs]
        self._rows = ranges(start[:-1][legs], count)
        self._start = np.concatenate([[0], np.cumsum(count)])
        self._leg = np.repeat(np.arange(len(legs)), count)
        seats = np.diff(seat_start)[legs]
        self._seats = ranges(seat_start[:-1][legs], seats)
        self._line = SeatLine(seats)
        self._places: FarePlaces | None = None
        self._fare: FloatArray | None = None

    def advance(self, value: FloatArray, fare: FloatArray, expected: FloatArray, requests_per_step: float) -> None:
        """Move the values of these legs in the line of all, in place, past (P,) expected requests at (P,) fares."""
        if self._places is None or fare is not self._fare:
            self._fare = fare
            self._places = FarePlaces(SortedRuns(fare[self._rows], self._start), self._line.leg)
        places, coming = self._places, expected[self._rows]
        busiest = float(np.bincount(self._leg, weights=np.where(places.fares.value > 0, coming, 0.0)).max(initial=0.0))
        if busiest == 0:
            return
        steps = int(np.ceil((busiest + EXTRA_REQUESTS) / requests_per_step))
        requests = Requests(places, coming / steps)
        own = value[self._seats]
        for _ in range(steps):
            own = self._line.heun(own, requests)
        value[self._seats] = own


def _blocks(plan: ArrivalPlan, line: SeatLine) -> list[_Block]:
    """Put legs with seats together, the quiet ones first."""
    asked = np.bincount(plan.leg, weights=np.where(plan.fares.value > 0, plan.mean, 0.0), minlength=plan.n_legs)
    seats = np.diff(line.start)
    legs = np.argsort(asked, kind="stable")
    legs = legs[seats[legs] > 0]
    number = np.cumsum(seats[legs]) // SEATS_TOGETHER
    return [_Block(plan, line, part) for part in np.split(legs, np.flatnonzero(np.diff(number)) + 1) if len(part)]
