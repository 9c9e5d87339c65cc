"""When classes closed in a simulated history: followed seat by seat under rules that count seats."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from legworth.simulation.entries import Schedule
from legworth.simulation.rules import CLOSED, SeatRule, Situation
from network.arrays import BoolArray, FloatArray, IntArray

__all__ = ["ClosingInstants"]


@dataclass(frozen=True, eq=False)
class ClosingInstants:
    """When products closed: seats only fall, so under one rule a product closes once, and for good.

    Attributes
    ----------
    situation, schedule
        Paths of products, seats, and the rules in force.
    instants
        (m,) instants at which seats were sold, by date, leg and time.
    start
        (P * L + 1,) where those of each date and leg begin.
    dates
        Number of dates P.
    """

    situation: Situation
    schedule: Schedule
    instants: FloatArray
    start: IntArray
    dates: int

    @classmethod
    def of(
        cls,
        situation: Situation,
        schedule: Schedule,
        product: IntArray,
        at: FloatArray,
        path: IntArray,
        dates: int,
    ) -> ClosingInstants:
        """Gather when seats were sold, (m,) each: product, instant and date of the requests sold."""
        legs = situation.legs[product]
        used = legs < situation.n_legs
        key = (path[:, None] * situation.n_legs + legs)[used]
        when = np.broadcast_to(at[:, None], legs.shape)[used]
        order = np.lexsort((when, key))
        start = np.searchsorted(key[order], np.arange(dates * situation.n_legs + 1))
        return cls(situation, schedule, when[order], start, dates)

    def closes(self, rule: SeatRule) -> FloatArray:
        """(P, J) instant from which on each product is closed under a rule; minus infinity if it never is open."""
        legs, need = self.situation.legs[:-1], rule.need[0, :-1].astype(np.int64)
        known = np.append(self.instants, np.inf)
        found = np.full((self.dates, len(legs)), np.inf)
        for w in range(legs.shape[1]):
            leg = np.minimum(legs[:, w], self.situation.n_legs - 1)
            # The seat whose sale leaves fewer than needed.
            number = np.append(self.situation.seats, 0)[leg] - need[:, w] + 1
            key = np.arange(self.dates)[:, None] * self.situation.n_legs + leg
            place = self.start[key] + number - 1
            when = np.where(place < self.start[key + 1], known[np.clip(place, 0, len(known) - 1)], np.inf)
            when = np.where((number < 1) | (need[:, w] >= CLOSED), -np.inf, when)
            found = np.where(legs[:, w] < self.situation.n_legs, np.minimum(found, when), found)
        return found

    def read(self, horizon: FloatArray, days: FloatArray) -> tuple[BoolArray, FloatArray]:
        """Whether products are open at readings, and for which share of the time since the one before; (P, J, K)."""
        end = horizon[:, None] - days
        begin = np.maximum(np.concatenate([np.zeros((len(horizon), 1)), end[:, :-1]], axis=1), 0.0)
        shape = (self.dates, *end.shape)
        is_open, time = np.zeros(shape, dtype=bool), np.zeros(shape)
        edges = np.append(self.schedule.instants, np.inf)
        for r, rule in enumerate(self.schedule.rules):
            if not isinstance(rule, SeatRule):
                raise TypeError("only rules that count seats are followed")
            closes = self.closes(rule)
            for k in range(len(days)):
                low, high = np.maximum(begin[:, k], edges[r]), np.minimum(end[:, k], edges[r + 1])
                if np.any(high > low):
                    time[:, :, k] += np.clip(np.minimum(closes, high) - low, 0.0, None)
                here = (edges[r] <= end[:, k]) & (end[:, k] < edges[r + 1])
                is_open[:, :, k] |= here & (closes > end[:, k])
        length = end - begin
        share = np.divide(time, length, out=np.ones(shape), where=np.broadcast_to(length > 0, shape))
        return is_open, np.where(share > 1 - 1e-9, 1.0, share).astype(np.float32)
