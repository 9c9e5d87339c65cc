"""What an interval in which a class closed still says of demand: how much of it was open, or what was missed.

While a class is open, bookings come as a Poisson process at the rate of demand, whatever closes it: the instant is
one that the bookings seen so far allow. So the rate is passengers seen over passengers expected while open, and of an
interval whose open part is not known, that part is filled in by expectation. A class was closed in all of it, or it
closed when bookings of others took the seats, at any instant alike, or with a booking of its own. Of c bookings seen
where m were expected in the whole interval, the chances are, up to a factor and N Poisson of mean m,

- closed in all of it: ``1 - p`` if c is 0, else none;
- closed by others: ``p / (1 + k m) * P(N >= c + 1) / m``, the open part then
  ``(c + 1) / m * P(N >= c + 2) / P(N >= c + 1)``;
- closed by its own c-th booking: ``p k / (1 + k m) * P(N >= c)``, the open part then
  ``c / m * P(N >= c + 1) / P(N >= c)``.

These follow from a closing by others at a steady pace and by each own booking with a steady chance, k the ratio of
the two. Chance p and ratio k are learned for every class, from intervals that follow open ones. Of an interval that
follows a closed one nothing is taken unless its open share is known: a class that is never open cannot be told from
one that nobody asks for.

Where a class closes on its own limit for sure, c bookings are a lower bound and stand for ``E[N | N >= c]``.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from legworth.estimation.censored_counts import at_least, mean_given_at_least
from legworth.estimation.increments import Increments
from network.arrays import BoolArray, FloatArray, IntArray

__all__ = ["CLOSINGS", "Closing", "ClosingWays", "SeenDemand", "open_part"]

Closing = Literal["shared", "limit", "discard", "ignore"]
CLOSINGS: tuple[Closing, ...] = ("shared", "limit", "discard", "ignore")

_TINY = 1e-8
_FAINT = 1e-200
_STEPS = 2


def open_part(count: FloatArray, mean: FloatArray, *, own: bool = False) -> FloatArray:
    """Expected open share of an interval, given the bookings before the class closed in it.

    Parameters
    ----------
    count
        (n,) bookings seen.
    mean
        (n,) demand expected in the whole interval.
    own
        Whether it closed with the last of these bookings, and not by others at an instant anywhere alike.

    Returns
    -------
    FloatArray
        (n,) shares from 0 to 1.
    """
    c = count if own else count + 1
    m = np.maximum(mean, _TINY)
    upper, lower = at_least(c + 1, m), at_least(c, m)
    small = c / (c + 1)  # limit for a mean that goes to none
    exact = c / m * upper / np.maximum(lower, _FAINT)
    return np.where((lower > _FAINT) & (m > 1e-5), np.minimum(exact, 1.0), small)


@dataclass(frozen=True, eq=False)
class ClosingWays:
    """How classes close, class by class.

    Attributes
    ----------
    partly
        (K,) chance p that a class that was open before an interval, but not throughout, was open in a part of it.
    own
        (K,) ratio k of the chance that an own booking closes the class to the pace at which others close it.
    """

    partly: FloatArray
    own: FloatArray

    @classmethod
    def begin(cls, n_groups: int) -> ClosingWays:
        """Others close classes within intervals, until more bookings are seen than that explains, or fewer.

        Of products far below a passenger, chance and ratio cannot be told apart; then it stays at that.
        """
        return cls(np.full(n_groups, 0.99), np.full(n_groups, 0.01))

    def parts(
        self, count: FloatArray, mean: FloatArray, group: IntArray, *, learn: bool
    ) -> tuple[FloatArray, ClosingWays]:
        """Expected open parts of intervals, and what they teach.

        Parameters
        ----------
        count, mean, group
            (n,) bookings seen, demand expected in the whole interval, and group.
        learn
            Whether chances and ratios are fitted to these intervals first.

        Returns
        -------
        part
            (n,) open shares.
        ways
            Fitted, or these.
        """
        m, some = np.maximum(mean, _TINY), count > 0
        seen, least = count[some], m[some]
        beyond, reached = at_least(seen + 1, least), at_least(seen, least)
        # Far out both chances vanish; their ratio is what counts.
        odds = least * np.where(beyond > _FAINT, reached / np.maximum(beyond, _FAINT), (seen + 1) / least)
        silent = np.where(mean > _TINY, -np.expm1(-m) / m, 1.0)
        ways = self._learned(odds, m, silent, some, group) if learn else self
        k = ways.own[group]
        quiet = silent / (1 + k * m)
        p = ways.partly[group]
        part = p * quiet / np.maximum(p * quiet + 1 - p, _TINY) * open_part(np.zeros_like(m), m)
        by_own = k[some] * odds / (1 + k[some] * odds)
        part[some] = by_own * open_part(seen, least, own=True) + (1 - by_own) * open_part(seen, least)
        return part, ways

    def _learned(
        self, odds: FloatArray, mean: FloatArray, silent: FloatArray, some: BoolArray, group: IntArray
    ) -> ClosingWays:
        """Fit chance and ratio by turns."""
        partly, own, n_groups = self.partly, self.own, len(self.own)
        for _ in range(_STEPS):
            quiet = silent / (1 + own[group] * mean)
            partly = _partly(~some, quiet, group, n_groups)
            p = partly[group]
            open_ = np.where(some, 1.0, p * quiet / np.maximum(p * quiet + 1 - p, _TINY))
            own = _own(odds, group[some], open_, mean, group, n_groups)
        return ClosingWays(partly, own)


def _own(
    odds: FloatArray, at: IntArray, open_: FloatArray, mean: FloatArray, group: IntArray, n_groups: int
) -> FloatArray:
    """Ratio by group of own to other closings, by maximum likelihood given how likely each interval was open in part.

    An interval with bookings has odds k times ``odds`` of an own closing, any open one k times ``mean`` before its
    bookings are seen; the ratio at which both add up to the same is found by halving its logarithm.
    """
    low, high = np.full(n_groups, np.log(1e-4)), np.full(n_groups, np.log(1e4))
    for _ in range(18):
        k = np.exp((low + high) / 2)
        closed = np.bincount(at, 1 - 1 / (1 + k[at] * odds), minlength=n_groups)
        planned = np.bincount(group, open_ * (1 - 1 / (1 + k[group] * mean)), minlength=n_groups)
        rises = closed > planned
        middle = (low + high) / 2
        low, high = np.where(rises, middle, low), np.where(rises, high, middle)
    return np.asarray(np.exp((low + high) / 2))


def _partly(nobody: BoolArray, quiet: FloatArray, group: IntArray, n_groups: int) -> FloatArray:
    """Chance by group that a class was open in a part of an interval, by maximum likelihood.

    Nobody books with chance ``1 - p (1 - quiet)``, somebody in proportion to p. One interval of either kind
    beforehand keeps p between 0 and 1. The slope falls in p, so halving finds its zero.
    """
    at, lost = group[nobody], 1 - quiet[nobody]
    somebody = np.bincount(group[~nobody], minlength=n_groups) + 1.0
    low, high = np.zeros(n_groups), np.ones(n_groups)
    for _ in range(15):
        p = (low + high) / 2
        against = np.bincount(at, lost / (1 - p[at] * lost), minlength=n_groups) + 1 / (1 - p)
        rises = somebody / p > against
        low, high = np.where(rises, p, low), np.where(rises, high, p)
    return (low + high) / 2


@dataclass(frozen=True, eq=False)
class SeenDemand:
    """Rows of increments as evidence of demand.

    Attributes
    ----------
    count
        (R,) passengers that came, or are taken to have come, in the open part.
    part
        (R,) open share of every interval.
    edge
        Positions of the rows that depend on the demand expected.
    closing
        How they do.
    ways
        How classes close.
    learning
        Whether that is fitted anew with every expectation.
    """

    count: FloatArray
    part: FloatArray
    edge: IntArray
    closing: Closing
    ways: ClosingWays
    learning: bool = True

    @classmethod
    def of(cls, increments: Increments, closing: Closing, n_classes: int) -> SeenDemand:
        """Take the rows as they are read under a way of closing, parts not known as none to begin with."""
        shut = ~increments.open
        count, part = increments.count.copy(), np.nan_to_num(increments.share)
        edge = np.zeros(0, dtype=np.int64)
        match closing:
            case "ignore":
                part[:] = 1.0
            case "discard":
                count[shut], part[shut] = 0.0, 0.0
            case "limit":
                edge = np.flatnonzero(shut & (count > 0))
                part[shut] = 0.0
                part[edge] = 1.0
            case "shared":
                edge = np.flatnonzero(increments.edge)
                count[(part == 0) & ~increments.edge] = 0.0
        return cls(count, part, edge, closing, ClosingWays.begin(n_classes))

    def expecting(self, increments: Increments, mean: FloatArray, fare_class: IntArray) -> SeenDemand:
        """Fill in what depends on the demand expected.

        Parameters
        ----------
        increments
            The rows.
        mean
            (E,) demand expected in the whole interval of every edge.
        fare_class
            (E,) class of every edge.
        """
        if not len(self.edge):
            return self
        seen = increments.count[self.edge]
        if self.closing == "limit":
            count = self.count.copy()
            count[self.edge] = mean_given_at_least(seen, np.maximum(mean, _TINY))
            return replace(self, count=count)
        part = self.part.copy()
        part[self.edge], ways = self.ways.parts(seen, mean, fare_class, learn=self.learning)
        return replace(self, part=part, ways=ways)
