"""How a control answers requests: rules, array-wise over paths.

A rule judges the n-th request of every path at once from the seats left. Whatever it says, a request is refused where
a leg of its path has no seat. Arrays of legs along a path are as wide as the longest path, W; shorter paths are
filled up with a leg of no importance, position L, which always has one seat and costs nothing.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from heuristics.arrivals import days_before_departure
from heuristics.dynamic import PriceCurves
from legworth.control import EQUAL
from network import Network
from network.arrays import BoolArray, FloatArray, IntArray
from network.model import ranges

__all__ = ["CLOSED", "Judge", "PriceRule", "Rule", "SeatRule", "SeatTable", "Situation"]


Judge = Callable[[int, IntArray], BoolArray]
"""Answers the n-th request of every path, (P,), given the seats left on the legs of each, (W, P)."""

CLOSED = np.iinfo(np.int32).max
"""Seats that no leg has: needed for a product that is not sold."""

SOON = 1e-6
"""Days that count as no time."""


@dataclass(frozen=True, eq=False)
class Situation:
    """What the requests of a part of the network meet.

    Attributes
    ----------
    legs
        (J + 1, W) legs of every product in travel order, filled up with L; the last row is nobody's.
    days_now
        (L + 1,) days from the snapshot to the departure of every leg.
    fare
        (J + 1,) currency, nobody's 0.
    seats
        (L,) seats for sale at the snapshot.
    """

    legs: IntArray
    days_now: FloatArray
    fare: FloatArray
    seats: IntArray

    @classmethod
    def of(cls, network: Network, seats: IntArray | None = None) -> Situation:
        """Lay out a network, with other seats for sale than its own if given."""
        length = np.diff(network.path_start)
        width = int(length.max(initial=1))
        table = np.full((network.n_itineraries, width), network.n_legs, dtype=np.int32)
        owner = np.repeat(np.arange(network.n_itineraries), length)
        table[owner, ranges(np.zeros_like(length), length)] = network.path_leg
        nobody = np.full((1, width), network.n_legs, dtype=np.int32)
        return cls(
            legs=np.concatenate([table[network.product_itinerary], nobody]),
            days_now=np.append(days_before_departure(network), 0.0),
            fare=np.append(network.fare, 0.0),
            seats=np.asarray(network.remaining if seats is None else seats),
        )

    @property
    def n_legs(self) -> int:
        """Number of legs L."""
        return len(self.seats)


@dataclass(frozen=True, eq=False)
class SeatTable:
    """What each seat left is worth to a control, by days before departure.

    Attributes
    ----------
    start
        (L + 1,) seats 1, 2, ... of leg l stand at ``start[l]:start[l + 1]``.
    days
        (D,) days before departure of the leg, rising.
    value
        (D, S) currency.
    """

    start: IntArray
    days: FloatArray
    value: FloatArray

    @classmethod
    def constant(cls, start: IntArray, value: FloatArray) -> SeatTable:
        """Values of seats, (S,), that do not change with time."""
        return cls(start, np.zeros(1), value[None, :])

    @classmethod
    def of_curves(cls, curves: PriceCurves) -> SeatTable:
        """Price curves, carried on beyond the snapshot in a straight line so that they hold up to it."""
        value, leg = curves.value.copy(), np.repeat(np.arange(len(curves.days_now)), np.diff(curves.seat_start))
        days, now = (
            np.append(curves.days, max(float(curves.days_now.max(initial=0.0)), curves.days[-1]) + 1e-6),
            curves.now,
        )
        value = np.vstack([value, np.full(len(now), np.nan)])
        for row in range(1, len(days)):
            beyond = np.isnan(value[row])
            near, gap = value[row - 1], np.maximum(curves.days_now[leg] - days[row - 1], 1e-6)
            first = beyond & (days[row - 1] < curves.days_now[leg])
            straight = near + (now - near) * (days[row] - days[row - 1]) / gap
            value[row] = np.where(beyond, np.where(first, straight, now), value[row])
        return cls(curves.seat_start, days, np.maximum(value, 0.0))

    def price(self, leg: int, seats: IntArray, days: float) -> FloatArray:
        """Value of the last of the seats left on a leg, (m,), currency; NaN where none is left."""
        begin, end = int(self.start[leg]), int(self.start[leg + 1])
        if begin == end:
            return np.full(len(seats), np.nan)
        row = min(max(int(np.searchsorted(self.days, days, side="right")) - 1, 0), max(len(self.days) - 2, 0))
        line = self.value[row, begin:end]
        if len(self.days) > 1:
            part = (days - self.days[row]) / (self.days[row + 1] - self.days[row])
            line = line + min(max(part, 0.0), 1.0) * (self.value[row + 1, begin:end] - line)
        return np.where(seats > 0, line[np.clip(seats, 1, end - begin) - 1], np.nan)


class Rule(ABC):
    """How one control answers."""

    table: SeatTable | None
    """What seats are worth to it, if it has a notion of that; for pictures."""

    @abstractmethod
    def judge(self, situation: Situation, product: IntArray, at: FloatArray, legs: IntArray) -> Judge:
        """Prepare the answers to some requests in a row.

        Parameters
        ----------
        situation
            The part of the network.
        product, at
            (N, P) products asked for, and days after the snapshot.
        legs
            (N, W, P) legs of these products.
        """

    @classmethod
    @abstractmethod
    def stacked(cls, rules: Sequence[Rule]) -> Rule:
        """One rule for P paths out of one for each."""


class SeatRule(Rule):
    """Sell a product while every leg of its path has as many seats left as the product needs there.

    Nested booking limits are this rule: a product needs one seat more than are kept for the better ones. So are
    static bid prices: one seat, or more than there are.

    Parameters
    ----------
    need
        (G, J + 1, W) seats that must be left, with G = 1 for all paths alike, or one for each path.
    table
        What seats are worth to the control.
    """

    def __init__(self, need: IntArray, table: SeatTable | None = None) -> None:
        self.need = np.asarray(need, dtype=np.int32)
        self.table = table

    def judge(self, situation: Situation, product: IntArray, at: FloatArray, legs: IntArray) -> Judge:
        """Compare seats left with seats needed."""
        group = 0 if len(self.need) == 1 else np.arange(product.shape[1])
        need = np.ascontiguousarray(self.need[group, product].transpose(0, 2, 1))

        def answer(n: int, seats: IntArray) -> BoolArray:
            return np.asarray((seats >= need[n]).all(axis=0))

        return answer

    @classmethod
    def stacked(cls, rules: Sequence[Rule]) -> Rule:
        """Put the needs of paths side by side."""
        own = [rule for rule in rules if isinstance(rule, SeatRule)]
        return cls(np.concatenate([rule.need for rule in own]))


class PriceRule(Rule):
    """Sell a product if its fare reaches the sum of what the last seats left on its path are worth at the time.

    Parameters
    ----------
    tables
        Values of seats, one table for all paths or one for each; all of the same days.
    """

    def __init__(self, tables: Sequence[SeatTable]) -> None:
        self.tables = list(tables)
        self.table = self.tables[0]

    def judge(self, situation: Situation, product: IntArray, at: FloatArray, legs: IntArray) -> Judge:
        """Look values of seats up, in straight lines between days, and compare fares with their sums."""
        first = self.tables[0]
        if len(first.days) < 2:
            raise ValueError("prices by time need at least two days")
        # One line: the rows of every table, each with a place at its end for the leg of no importance.
        width = np.array([table.value.shape[1] + 1 for table in self.tables])
        rows = len(first.days)
        line = np.concatenate([np.pad(table.value, ((0, 0), (0, 1))).ravel() for table in self.tables])
        group = np.zeros(product.shape[1], dtype=np.int64) if len(self.tables) == 1 else np.arange(product.shape[1])
        begin = (np.cumsum(width) - width) * rows
        start = np.stack([np.append(table.start, table.start[-1] + 1) for table in self.tables])
        owner = group[None, None, :]
        days = situation.days_now[legs] - at[:, None, :]
        days = np.where(np.isfinite(days), days, 0.0)
        row = np.clip(np.searchsorted(first.days, days, side="right") - 1, 0, rows - 2)
        part = np.clip((days - first.days[row]) / np.diff(first.days)[row], 0.0, 1.0)
        stride = width[group]
        base = begin[owner] + row * stride + start[owner, legs] - 1
        most = start[owner, legs + 1] - start[owner, legs]
        limit = (situation.fare * (1 + EQUAL))[product]

        def answer(n: int, seats: IntArray) -> BoolArray:
            place = base[n] + np.minimum(seats, most[n])
            near = line.take(place, mode="clip")
            far = line.take(place + stride, mode="clip")
            return np.asarray(limit[n] >= (near + part[n] * (far - near)).sum(axis=0))

        return answer

    @classmethod
    def stacked(cls, rules: Sequence[Rule]) -> Rule:
        """Put the tables of paths side by side."""
        return cls([table for rule in rules if isinstance(rule, PriceRule) for table in rule.tables])
